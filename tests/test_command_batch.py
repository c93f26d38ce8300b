"""``glidesmith batch`` as users meet it: what is printed where, exit status, questions, options."""

import json
import os
import pty
import signal
import subprocess
import sys

import pytest

from banks import contents, lay_bank, lay_preset
from commands import ENVIRONMENT, complaint, process, run
from unprivileged import no_privileges, open_folder


@pytest.fixture
def bank(tmp_path):
    return lay_bank(tmp_path / "bank")


@pytest.fixture
def takes(tmp_path):
    return tmp_path / "takes"


def rendered(bank, takes, *options):
    return run("batch", bank, "-o", takes, "--jobs", 1, *options)


def test_a_bank_is_rendered_and_then_current(bank, takes):
    result = rendered(bank, takes)
    assert (result.exit_code, result.stderr) == (0, "")
    assert result.stdout == f"{takes}: 3 rendered, 0 current\n"
    assert rendered(bank, takes).stdout == f"{takes}: 0 rendered, 3 current\n"


def test_json_tells_scripts_what_was_done(bank, takes):
    lay_preset(bank, "bad.toml", text="[pitch\n")
    lay_preset(bank, "slow.toml", rise_ms=2000)
    result = rendered(bank, takes, "--json")
    assert result.exit_code == 1
    facts = json.loads(result.stdout)
    assert facts["made"] == ["basses/deep.wav", "basses/round.wav", "lead.wav", "slow.wav"]
    assert [each["preset"] for each in facts["failed"]] == ["bad.toml"]
    assert facts["never_land"][0]["item"] == "slow.wav"
    assert facts["never_land"][0]["worst"]["from"] == "D3"
    assert facts["manifest"] == str(takes / "manifest.jsonl")
    assert facts["items_that_never_land"] == 1
    facts = json.loads(rendered(bank, takes, "--json").stdout)
    assert (facts["made"], facts["current"]) == ([], 4)


def test_failures_are_named_at_the_end_and_the_status_is_1(bank, takes):
    for name in ("bad.toml", "worse.toml"):
        lay_preset(bank, name, text='[pitch]\nrise = "soon\x1b"\n')
    result = rendered(bank, takes)
    assert result.exit_code == 1
    assert result.stdout == f"{takes}: 3 rendered, 0 current, 2 failed\n"
    lines = result.stderr.splitlines()
    assert lines[-1] == "glidesmith: failed: bad.toml, worse.toml"
    assert all(line.startswith("glidesmith: ") and line.isprintable() for line in lines)


def test_failures_that_are_alike_are_told_once(bank, takes):
    (bank / "line.toml").unlink()
    result = rendered(bank, takes)
    assert result.exit_code == 1
    assert result.stdout == f"{takes}: 0 rendered, 0 current, 3 failed\n"
    assert result.stderr.count("there is no such file") == 3  # each names its own preset
    other = bank / "other.mid"
    other.write_bytes(b"MThd")
    result = rendered(bank, takes, "--phrase", other)
    assert result.stderr.count("is truncated") == 1
    assert "(and 2 more like this)" in result.stderr


def test_what_no_longer_lands_is_listed(bank, takes):
    rendered(bank, takes)
    lay_preset(bank, "lead.toml", rise_ms=2000)
    lines = rendered(bank, takes).stdout.splitlines()
    assert lines[0] == f"{takes}: 1 rendered, 2 current"
    assert lines[1].startswith("  lead.wav: 1 of 1 glides no longer land, the worst ")
    assert lines[1].endswith("(D3 to A3)")
    assert lines[2] == f"in 1 output a glide never lands: {takes / 'summary.html'}"


def test_a_dry_run_lists_what_would_be_rendered(bank, takes):
    result = rendered(bank, takes, "--dry-run")
    assert (
        result.stdout
        == f"{takes}: 3 to render, 0 current\n  basses/deep.wav\n  basses/round.wav\n  lead.wav\n"
    )
    assert not takes.exists()


def test_options_reach_the_batch(bank, takes, tmp_path):
    phrase = tmp_path / "p.toml"
    phrase.write_text((bank / "line.toml").read_text())
    result = rendered(
        bank, takes, "--phrase", phrase, "--vary", "pitch.law=rc,linear", "--include", "basses",
        "--exclude", "round*", "--name", "{values}/{phrase}-{preset}", "--loudness", "-23", "--rate", 44100,
        "--depth", "float", "--tolerance-cents", 10,
    )  # fmt: skip
    assert result.exit_code == 0
    assert set(contents(takes)) == {
        "linear/p-deep.wav", "rc/p-deep.wav", "manifest.jsonl", "summary.html"
    }  # fmt: skip
    record = json.loads((takes / "manifest.jsonl").read_text().splitlines()[1])
    assert record["options"] == {
        "sample_rate": 44100, "depth": "float", "loudness_lufs": -23.0, "meter": True, "tolerance_cents": 10.0
    }  # fmt: skip


@pytest.mark.parametrize(
    ("options", "said"),
    [
        (["--vary", "pitch.raise=1"], "did you mean"),
        (["--vary", "pitch.rise"], "give a key and its values"),
        (["--name", "../{preset}"], "inside the output folder"),
        (["--name", "{presets}"], "placeholders are"),
        (["--loudness", "-23", "--no-meter"], "no meter is to run"),
        (["--loudness", "5"], "loudness"),
        (["--rate", "100"], "sample rate 100"),
        (["--yes"], "give --prune too"),
        (["--prune"], "give --yes"),
        (["--watch", "--dry-run"], "--watch goes on"),
        (["--watch", "--prune", "--yes"], "--watch goes on"),
        (["--cluster", "tcp://localhost:1", "--jobs", "2"], "give one of the two"),
        (["--channel", "2"], "give the phrase too"),
        (["--include", "nothing"], "holds no preset"),
        (["--exclude", ""], "a pattern is empty"),
    ],
)
def test_what_can_not_be_meant_is_told_in_a_line(bank, takes, options, said):
    result = run("batch", bank, "-o", takes, *options)
    assert result.exit_code == 2
    assert said in complaint(result)
    assert not takes.exists()


def test_a_mistake_with_json_is_json(tmp_path, takes):
    result = run("batch", tmp_path / "no", "-o", takes, "--json")
    assert result.exit_code == 2
    assert "there is no such folder" in json.loads(result.stdout)["errors"][0]


def test_pruning_asks_at_a_terminal(bank, takes):
    rendered(bank, takes)
    (bank / "lead.toml").unlink()
    result = rendered(bank, takes)
    assert "the preset of 1 output is gone (the first is lead.wav); --prune removes them" in result.stderr
    for answer, left in (("n", True), ("y", False)):
        ours, theirs = pty.openpty()
        os.write(ours, f"{answer}\n".encode())
        done = process("batch", bank, "-o", takes, "--jobs", 1, "--prune", stdin=theirs)
        os.close(ours)
        os.close(theirs)
        assert done.returncode == 0
        assert b"remove 1 output whose preset is gone?" in done.stderr
        assert (takes / "lead.wav").exists() == left
    assert b"1 removed" in done.stdout


def test_pruning_without_a_question(bank, takes):
    rendered(bank, takes)
    (bank / "lead.toml").unlink()
    assert rendered(bank, takes, "--prune", "--yes").stdout == f"{takes}: 0 rendered, 2 current, 1 removed\n"
    assert not (takes / "lead.wav").exists()


def test_progress_shows_rate_and_time_left(tmp_path, takes):
    bank = lay_bank(tmp_path / "bank", *(f"{number}.toml" for number in range(30)))
    tone = 'notes = [{ at = 0, lasts = 40, note = "C3" }]\n'
    (bank / "line.toml").write_text(tone)
    done = process("batch", bank, "-o", takes, "--jobs", 1, "--progress", "--rate", 192000)
    assert done.returncode == 0
    line = done.stderr.decode().splitlines()[0]
    assert line.startswith("rendering: ")
    assert " items/s, " in line
    assert line.endswith(" left")


def test_a_read_only_output_is_told_in_a_line():
    with open_folder() as folder:
        bank = lay_bank(folder / "bank")
        (folder / "takes").mkdir(mode=0o555)
        with no_privileges():
            result = run("batch", bank, "-o", folder / "takes", "--jobs", 1)
        assert result.exit_code == 2
        assert "you may not write there" in complaint(result)


@pytest.mark.parametrize("at", ["glidesmith.batching.batch", "glidesmith.planning.Survey.__init__"])
def test_an_interrupt_before_anything_is_done_says_how_to_go_on(bank, takes, monkeypatch, at):
    def interrupted(*arguments, **options):
        raise KeyboardInterrupt

    monkeypatch.setattr(at, interrupted)
    result = rendered(bank, takes)
    assert result.exit_code == 130
    first, second = result.stderr.splitlines()
    assert first == "glidesmith: no item is done yet; run the same command again to go on"
    assert second.startswith("glidesmith: interrupted")
    assert result.stdout == ""


def test_the_address_of_a_folder_is_one(bank, tmp_path):
    address = f"file://{tmp_path}/new%20takes"
    result = run("batch", bank, "-o", address, "--jobs", 1, "--json")
    assert result.exit_code == 0
    assert json.loads(result.stdout)["output"] == str(tmp_path / "new takes")
    assert (tmp_path / "new takes" / "lead.wav").exists()


def test_watching_from_the_command_line(bank, takes):
    command = [
        sys.executable,
        "-m",
        "glidesmith",
        "batch",
        str(bank),
        "-o",
        str(takes),
        "--jobs",
        "1",
        "--watch",
    ]
    with subprocess.Popen(
        command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, env=ENVIRONMENT
    ) as watching:
        assert watching.stdout is not None
        assert b"3 rendered" in watching.stdout.readline()
        lay_preset(bank, "lead.toml", rise_ms=4)
        assert b"1 rendered, 2 current" in watching.stdout.readline()
        watching.send_signal(signal.SIGINT)
        said = watching.communicate(timeout=60)[1]
    assert watching.returncode == 130
    assert b"Traceback" not in said
