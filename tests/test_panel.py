"""The panel's server: who is let in, what is refused and how it is told, and what everybody is shown."""

import asyncio
import base64
import hashlib
import json
import re
import socket
import threading
from pathlib import Path

import aiohttp
import numpy as np
import pytest

from conftest import PHRASES, PRESETS
from glidesmith import load_preset, measure
from glidesmith.errors import OutputError
from glidesmith.panel import FIRST_PORT, Panel
from glidesmith.panel_frames import ROW_FIELDS
from glidesmith.panel_messages import LONGEST_MESSAGE
from glidesmith.panel_room import MOST_ERRANDS, Guest, changed_parts
from glidesmith.phrase import load_preset_phrase
from panels import DEADLINE_S, Talk, opened_socket, served, talking, waited_for


@pytest.fixture(scope="module")
def folder(tmp_path_factory) -> Path:
    return tmp_path_factory.mktemp("panel")


@pytest.fixture(scope="module")
def running(folder):
    """One panel for all tests that leave it as it is."""
    with served(folder) as found:
        found.session.play()
        yield found


@pytest.fixture
def panel(running):
    """The same, with what it says in this test alone."""
    running.lines.clear()
    yield running
    assert running.still_plays()


@pytest.fixture
def own(tmp_path):
    """A panel for a test that moves things."""
    with served(tmp_path) as found:
        found.session.play()
        yield found


def asked(found, path="/", method="GET", token="", **headers):
    """Status, headers and body of a plain request; ``token`` None leaves it out, "" is the right one."""

    async def ask():
        parameters = {} if token is None else {"token": token or found.token}
        async with aiohttp.ClientSession() as client:
            request = client.request(method, found.origin + path, params=parameters, headers=headers)
            async with request as answer:
                return answer.status, dict(answer.headers), await answer.text()

    return asyncio.run(asyncio.wait_for(ask(), DEADLINE_S))


# Who is let in


def test_the_page_comes_whole_and_lets_nothing_else_run(panel):
    status, headers, body = asked(panel)
    assert status == 200
    policy = dict(part.split(" ", 1) for part in headers["Content-Security-Policy"].split("; "))
    assert policy["default-src"] == "'none'"
    assert "unsafe" not in headers["Content-Security-Policy"]
    assert policy["connect-src"] == "'self'"
    assert headers["Referrer-Policy"] == "no-referrer"
    assert headers["Cache-Control"] == "no-store"
    assert panel.token not in body
    markup = re.sub(r"<script.*?</script>", "", body, flags=re.S)
    assert all(
        link.startswith(("#", "data:")) for link in re.findall(r"""(?:src|href)=["']?([^"'\s>]*)""", markup)
    )
    for kind, found in (("script", r"<script[^>]*>(.*?)</script>"), ("style", r"<style>(.*?)</style>")):
        [text] = re.findall(found, body, re.S)
        digest = base64.b64encode(hashlib.sha256(text.encode()).digest()).decode()
        assert f"'sha256-{digest}'" in policy[f"{kind}-src"]
    assert panel.lines == []


def test_the_address_has_a_token_of_this_run(panel, folder):
    assert panel.panel.url == f"http://127.0.0.1:{panel.panel.port}/?token={panel.token}"
    assert len(panel.token) >= 32
    with served(folder) as other:
        assert other.token != panel.token


@pytest.mark.parametrize(
    ("changes", "told"),
    [
        ({"token": None}, "the token is missing"),
        ({"token": "x" * 32}, "the token is wrong"),
        (
            {"token": "\u00e9\ud83d\ude00".encode("utf-16", "surrogatepass").decode("utf-16")},
            "the token is wrong",
        ),
        ({"Host": "ferry.example"}, "the host"),
        ({"Host": "127.0.0.1"}, "the host"),
        ({"Host": "127.0.0.1:1"}, "the host"),
        ({"Host": "localhost.ferry.example"}, "the host"),
        ({"Origin": "http://ferry.example"}, "ferry.example"),
        ({"Origin": "null"}, "null"),
        ({"Origin": "https://127.0.0.1"}, "https://127.0.0.1"),
    ],
)
@pytest.mark.parametrize("path", ["/", "/player.js", "/socket"])
def test_foreign_requests_are_refused_in_one_line(panel, path, changes, told):
    needed = {"Origin": panel.origin} if path == "/socket" else {}
    status, _, body = asked(panel, path, **{**needed, **changes})
    assert status == 403
    assert told in body
    assert panel.token not in body
    [line] = panel.lines
    assert line.startswith(f"panel: refused: GET {path}: ")
    assert told in line


@pytest.mark.parametrize(
    ("path", "method", "status"),
    [
        ("/", "POST", 405),
        ("/", "DELETE", 405),
        ("/../../etc/passwd", "GET", 404),
        ("/%2e%2e/%2e%2e/etc/passwd", "GET", 404),
        ("/presets/night-ferry-lead.toml", "GET", 404),
        ("/socket", "GET", 400),
    ],
)
def test_whatever_else_is_asked_for_is_refused_in_one_line(panel, path, method, status):
    found, _, _ = asked(panel, path, method, Origin=panel.origin)
    assert found == status
    assert len(panel.lines) == 1


@pytest.mark.parametrize(
    "request_text",
    [
        b"\x16\x03\x01\x02\x00\x01\x00\x01\xfc\x03\x03" + bytes(64),
        b"GET / HTTP/1.1\r\nHost: a\r\nContent-Length: x\r\n\r\n",
        b"GET /" + b"a" * 20_000 + b" HTTP/1.1\r\n\r\n",
        b"hello\r\n\r\n",
    ],
    ids=["tls", "length", "long", "words"],
)
def test_what_is_no_request_gets_no_traceback(panel, request_text):
    with socket.create_connection(("127.0.0.1", panel.panel.port), DEADLINE_S) as raw:
        raw.settimeout(DEADLINE_S)
        raw.sendall(request_text)
        assert raw.recv(64).startswith(b"HTTP/1.0 400") or raw.recv(64) == b""
    assert len(panel.lines) == 1
    assert all("\n" not in line and "Traceback" not in line for line in panel.lines)


@pytest.mark.parametrize("changes", [{"Origin": None}, {"Origin": "http://ferry.example"}, {"token": "no"}])
def test_a_socket_from_elsewhere_is_not_opened(panel, changes):
    async def attempt():
        async with aiohttp.ClientSession() as client:
            with pytest.raises(aiohttp.WSServerHandshakeError) as refused:
                await opened_socket(client, panel, **changes)
            return refused.value.status

    assert asyncio.run(attempt()) == 403
    assert len(panel.lines) == 1


def test_localhost_by_name_is_let_in(panel):
    host = f"localhost:{panel.panel.port}"
    assert asked(panel, Host=host, Origin=f"http://{host}")[0] == 200


def test_a_host_for_a_tunnel_must_be_named(folder):
    with served(folder) as found:
        far = Panel(found.session, hosts=["localhost:9000"], tell=found.lines.append)
        with far:

            async def ask(host):
                async with (
                    aiohttp.ClientSession() as client,
                    client.get(far.url, headers={"Host": host}) as answer,
                ):
                    return answer.status

            assert asyncio.run(ask("localhost:9000")) == 200
            assert asyncio.run(ask("localhost:9001")) == 403


# What is refused


@pytest.mark.parametrize(
    "text",
    [
        "",
        "play",
        "[]",
        "null",
        '{"do": 7}',
        '{"do": "explode"}',
        '{"do": "set"}',
        '{"do": "set", "slot": 9, "key": "pitch.rise", "value": 1}',
        '{"do": "set", "slot": true, "key": "pitch.rise", "value": 1}',
        '{"do": "set", "slot": 1, "key": "pitch.raise", "value": 1}',
        '{"do": "set", "slot": 1, "key": ["pitch.rise"], "value": 1}',
        '{"do": "set", "slot": 1, "key": "pitch.rise", "value": NaN}',
        '{"do": "set", "slot": 1, "key": "pitch.rise", "value": 1e999}',
        '{"do": "set", "slot": 1, "key": "pitch.rise", "value": {"a": 1}}',
        '{"do": "level", "db": 20}',
        '{"do": "level", "db": 1' + 9_000 * "0" + "}",
        '{"do": "tempo", "percent": 0}',
        '{"do": "play", "and": "more"}',
        '{"do": "key_down", "note": 60, "velocity": -1}',
        '{"do": "frames", "count": 1000000000}',
        12_000 * "[",
        '{"do": "play\\u0000\\u202e\\n"}',
    ],
)  # fmt: skip
def test_messages_that_make_no_sense_are_refused_in_one_line(panel, text):
    async def talk(one):
        await one.socket.send_str(text)
        return await one.told("refused")

    told = talking(panel, talk)
    [line] = panel.lines
    assert line.isprintable()
    assert len(line) < 400
    assert told in line or len(told) > 300


def test_bytes_are_refused_in_one_line(panel):
    async def talk(one):
        await one.socket.send_bytes(b"\x00\x01")
        await one.say(do="match", on=True)
        await one.until(lambda found: isinstance(found, bytes))

    talking(panel, talk)
    assert waited_for(lambda: len(panel.lines) == 1)


def test_a_huge_message_closes_its_panel_and_no_other(panel):
    async def talk(one, other):
        await one.socket.send_str('{"do": "play", "x": "' + LONGEST_MESSAGE * "a" + '"}')
        while not isinstance(await one.next(), aiohttp.WSMsgType):
            pass
        assert one.socket.close_code == aiohttp.WSCloseCode.MESSAGE_TOO_BIG
        other.frames.clear()
        await other.until(lambda found: isinstance(found, bytes))

    talking(panel, talk, panels=2)
    assert waited_for(lambda: panel.lines)
    [line] = panel.lines
    assert "bytes" in line


@pytest.mark.parametrize(
    "message",
    [
        {"do": "save", "slot": 1, "path": "/etc/glidesmith.toml"},
        {"do": "save", "slot": 1, "path": "../outside.toml"},
        {"do": "save", "slot": 1, "path": "link/outside.toml"},
        {"do": "save", "slot": 1, "path": "inside.txt"},
        {"do": "save", "slot": 1, "path": ""},
        {"do": "save", "slot": 1, "path": "a\0b.toml"},
        {"do": "save", "slot": 1, "path": 1500 * "a" + ".toml"},
        {"do": "capture", "path": "/tmp/outside.wav"},
        {"do": "capture", "path": "capture.toml"},
        {"do": "load", "slot": 1, "path": "/etc/passwd"},
        {"do": "load", "slot": 1, "path": "link/there.toml"},
        {"do": "phrase", "path": "../there.mid"},
        {"do": "set", "slot": 1, "key": "oscillator.file", "value": "/etc/outside.wav"},
        {"do": "set", "slot": 1, "key": "oscillator.file", "value": "../../../outside.wav"},
    ],
)  # fmt: skip
def test_paths_outside_are_refused_in_one_line(panel, folder, tmp_path, message):
    link = folder / "link"
    link.unlink(missing_ok=True)
    link.symlink_to(tmp_path, target_is_directory=True)
    (tmp_path / "there.toml").write_bytes((PRESETS / "night-ferry-lead.toml").read_bytes())

    async def talk(one):
        await one.say(**message, id=7)
        found = await one.until(lambda found: isinstance(found, dict) and "refused" in found)
        assert found["id"] == 7
        return found["refused"]

    told = talking(panel, talk)
    assert told
    assert len(panel.lines) == 1
    assert sorted(path.name for path in tmp_path.iterdir()) == ["there.toml"]
    assert [path for path in folder.iterdir() if path != link] == []


def test_a_value_against_its_rule_is_told_with_its_key(panel):
    async def talk(one):
        await one.say(do="set", slot=1, key="pitch.rise", value="80 parsecs", id=3)
        return await one.until(lambda found: isinstance(found, dict) and "refused" in found)

    found = talking(panel, talk)
    assert (found["id"], found["key"]) == (3, "pitch.rise")
    assert found["refused"].startswith('pitch.rise = "80 parsecs": must be a time')


# Moves


def test_moves_are_made_and_shown(own):
    async def talk(one):
        await one.until_state(lambda state: state)
        await one.say(do="set", slot=1, key="pitch.rise", value="123 ms")
        await one.until_state(lambda state: one.slot(1)["settings"]["pitch.rise"] == 0.123)
        assert one.slot(1)["changed"]
        await one.say(do="undo")
        await one.until_state(lambda state: one.slot(1)["settings"]["pitch.rise"] == 0.06)
        await one.say(do="redo")
        await one.until_state(lambda state: one.slot(1)["settings"]["pitch.rise"] == 0.123)
        await one.say(do="set", slot=1, key="pitch.glide", value=None)
        await one.until_state(lambda state: one.slot(1)["settings"]["pitch.glide"] == "always")
        await one.say(do="table", slot=1, table="drone", on=True)
        await one.until_state(lambda state: "drone.note" in one.slot(1)["settings"])
        await one.say(do="table", slot=1, table="drone", on=False)
        await one.until_state(lambda state: "drone.note" not in one.slot(1)["settings"])
        await one.say(do="copy", **{"from": 1, "to": 5})
        await one.until_state(lambda state: [slot["number"] for slot in state["slots"]] == [1, 2, 3, 5])
        await one.say(do="select", slot=2)
        await one.until_state(lambda state: state["current"] == 2)
        await one.say(do="select", slot=3, when="loop")
        await one.until_state(lambda state: state["waiting_slot"] == 3)
        await one.say(do="tempo", percent=80)
        await one.until_state(lambda state: state["tempo_percent"] == 80)
        await one.say(do="transpose", semitones=-5)
        await one.until_state(lambda state: state["transpose"] == -5)
        await one.say(do="level", db=-40)
        await one.until_state(lambda state: state["level_db"] == -40)
        await one.say(do="loop", on=False)
        await one.say(do="match", on=False)
        await one.until_state(lambda state: not state["loop"] and not state["match"])
        await one.say(do="stop")
        await one.until_state(lambda state: state["playing"] == "stopped")
        await one.say(do="play")
        await one.until_state(lambda state: state["playing"] == "phrase")
        await one.say(do="panic")
        await one.until_state(lambda state: state["playing"] == "stopped")

    talking(own, talk)
    assert own.lines == []


def test_a_move_is_made_in_the_handler_that_reads_it(tmp_path):
    """Whatever is slow waits beside: a session that takes its time over facts does not hold up a move."""
    with served(tmp_path) as found:
        asked_for, leave = threading.Event(), threading.Event()
        facts = found.session.facts

        def slow_facts(slot):
            asked_for.set()
            leave.wait(DEADLINE_S)
            return facts(slot)

        found.session.facts = slow_facts

        async def talk(one):
            await one.until_state(lambda state: state)
            assert await asyncio.to_thread(asked_for.wait, DEADLINE_S)
            await one.say(do="set", slot=1, key="pitch.fall", value=0.2)
            await one.until_state(lambda state: one.slot(1)["settings"]["pitch.fall"] == 0.2)
            leave.set()
            await one.told("figures")

        talking(found, talk)


def test_a_panel_has_few_errands_at_a_time_and_figures_wait_for_none(tmp_path):
    """What it asks for beyond is refused in a line; what waits when it goes is never begun."""
    with served(tmp_path) as found:
        leave, begun = threading.Event(), []
        found.session.load = lambda slot, path: begun.append(path) or leave.wait(DEADLINE_S)
        path = str(PRESETS / "deck-tune.toml")

        async def ask(one):
            await one.told("figures")
            for number in range(MOST_ERRANDS + 3):
                await one.say(do="load", slot=2, path=path, id=number)
            refused = [
                await one.until(lambda found: isinstance(found, dict) and "refused" in found)
                for _ in range(3)
            ]
            assert [entry["id"] for entry in refused] == [MOST_ERRANDS + number for number in range(3)]
            await one.say(do="set", slot=1, key="pitch.fall", value=0.2)
            assert (await one.told("figures"))["facts"]

        async def look(one):
            await one.say(do="files")
            await one.told("files")

        talking(found, ask)
        room = found.panel._room
        assert waited_for(lambda: not room._guests and not room._errands)  # all that waited is called off
        leave.set()
        talking(found, look)
        assert len(begun) <= 2  # those that were under way, one a worker
        assert len(found.lines) == 3


def test_however_often_files_are_asked_for_they_are_looked_for_once(own):
    looks, leave = [], threading.Event()
    files = own.panel._folders.files
    own.panel._folders.files = lambda: looks.append(1) or (leave.wait(DEADLINE_S) and files())

    async def talk(one, two):
        for _ in range(300):
            await one.say(do="files")
        await two.say(do="files")
        await one.say(do="set", slot=1, key="pitch.fall", value=0.2)
        await one.until_state(lambda state: state and one.slot(1)["settings"]["pitch.fall"] == 0.2)
        leave.set()
        for panel in (one, two):
            assert (await panel.told("files"))["presets"]

    talking(own, talk, panels=2)
    assert len(looks) <= 3


def test_no_cycle_outside_is_read_beside_the_preset_of_a_copy(own, tmp_path, tmp_path_factory):
    """A copy belongs to no file, but names in it start from the folder of the preset that was copied."""
    cycle = next((PRESETS / "cycles").glob("*.wav")).read_bytes()
    outside = tmp_path_factory.mktemp("outside")
    (outside / "cycle.wav").write_bytes(cycle)
    (tmp_path / "sub").mkdir()
    (tmp_path / "sub" / "own.wav").write_bytes(cycle)
    (tmp_path / "sub" / "link").symlink_to(outside, target_is_directory=True)
    text = (PRESETS / "night-ferry-lead.toml").read_text()
    (tmp_path / "sub" / "mine.toml").write_text(text.replace("../shared/phrases", str(PHRASES)))

    async def talk(one):
        await one.say(do="load", slot=2, path="sub/mine.toml")
        await one.told("done")
        await one.say(**{"do": "copy", "from": 2, "to": 3})
        await one.say(do="set", slot=3, key="oscillator.file", value="link/cycle.wav")
        assert "outside" in await one.told("refused")
        await one.say(do="set", slot=3, key="oscillator.file", value="own.wav")
        assert await one.told("done") == "set"

    talking(own, talk)


def test_a_preset_is_saved_where_it_may_be_and_comments_are_kept(own, tmp_path):
    (tmp_path / "mine.toml").write_text("# by ear\n" + (PRESETS / "winch-constant-rate.toml").read_text())
    phrase = load_preset(PRESETS / "winch-constant-rate.toml").phrase
    own_text = (tmp_path / "mine.toml").read_text().replace("../shared/phrases", str(PHRASES))
    (tmp_path / "mine.toml").write_text(own_text)
    assert phrase is not None

    async def talk(one):
        await one.say(do="load", slot=2, path="mine.toml")
        assert await one.told("done") == "load"
        await one.say(do="set", slot=2, key="pitch.rise", value="77 ms")
        await one.say(do="save", slot=2, path="mine.toml", replace=True)
        assert await one.told("done") == "save"
        await one.say(do="save", slot=1, path="mine.toml")
        assert "mine.toml" in await one.told("refused")
        await one.say(do="files")
        files = await one.told("files")
        assert str(tmp_path / "mine.toml") in files["presets"]
        assert str(PHRASES / "engine-room.mid") in files["phrases"]

    talking(own, talk)
    assert load_preset(tmp_path / "mine.toml").pitch.slew.rise == 0.077
    assert (tmp_path / "mine.toml").read_text().startswith("# by ear\n")


def test_a_capture_is_made_with_its_running_time(own, tmp_path):
    import soundfile

    async def talk(one):
        await one.say(do="capture", path="heard.wav")
        await one.until_state(lambda state: state["capture"])
        await one.until_state(lambda state: state["capture"]["seconds"] > 1)
        await one.say(do="capture_stop", id=4)
        done = await one.until(
            lambda found: isinstance(found, dict) and "done" in found and found.get("id") == 4
        )
        await one.until_state(lambda state: state["capture"] is None)
        return done["facts"]

    facts = talking(own, talk)
    assert soundfile.info(tmp_path / "heard.wav").frames == facts["frames"] > 48_000


# What everybody is shown


def test_two_panels_are_shown_the_same_and_both_may_move(own):
    async def talk(one, other):
        await one.until_state(lambda state: state)
        await other.until_state(lambda state: state)
        assert one.state == other.state or one.state["revision"] != other.state["revision"]
        await one.say(do="set", slot=1, key="pitch.rise", value=0.3)
        await other.until_state(lambda state: other.slot(1)["settings"]["pitch.rise"] == 0.3)
        await other.say(do="select", slot=3)
        await one.until_state(lambda state: state["current"] == 3)
        await one.say(do="stop")
        await asyncio.gather(
            *(each.until_state(lambda state: state["playing"] == "stopped") for each in (one, other))
        )
        revision = max(one.state["revision"], other.state["revision"])
        for each in (one, other):
            await each.until_state(lambda state: state["revision"] >= revision)
        return one.state, other.state

    first, second = talking(own, talk, panels=2)
    assert first == second == json.loads(json.dumps(own.session.state()))


def test_whoever_comes_back_is_told_all_anew(own):
    async def move(one):
        await one.until_state(lambda state: state)
        await one.say(do="set", slot=2, key="gain.fall", value=0.5)
        await one.until_state(lambda state: one.slot(2)["settings"]["gain.fall"] == 0.5)

    async def look(one):
        await one.until_state(lambda state: state)
        assert one.slot(2)["settings"]["gain.fall"] == 0.5
        return (await one.told("figures"))["facts"]["phrase"]

    talking(own, move)
    assert talking(own, look) == "Ferry line"


def test_keys_held_by_a_panel_that_goes_come_up(own):
    async def hold(one):
        await one.until_state(lambda state: state)
        await one.say(do="key_down", note=60)
        await one.say(do="key_down", note=67, velocity=0.5)
        await one.until_state(lambda state: state["playing"] == "keys")

    talking(own, hold)

    def gates():
        return own.session.deck.rows(0)[1]["gate"][-20:]

    assert waited_for(lambda: len(gates()) == 20 and not gates().any())


def test_a_key_that_two_panels_hold_comes_up_with_the_last(own):
    async def talk(one, two):
        def gates():
            return own.session.deck.rows(0)[1]["gate"][-20:]

        async def sounds(still: bool):
            await asyncio.to_thread(waited_for, lambda: gates().all() == still and gates().any() == still)
            assert gates().all() == still

        await one.say(do="key_down", note=60, id=1)
        await two.say(do="key_down", note=60, id=2)
        await one.told("taken")
        await two.told("taken")
        await sounds(True)
        await one.say(do="key_up", note=60, id=3)
        await one.say(do="level", db=-40, id=4)
        assert await one.told("taken") == 4
        await asyncio.sleep(0.2)
        await sounds(True)
        await two.say(do="key_up", note=60, id=5)
        assert await two.told("taken") == 5
        await sounds(False)

    talking(own, talk, panels=2)


def test_facts_and_curves_follow_what_is_moved(own):
    preset = load_preset(PRESETS / "night-ferry-lead.toml")
    phrase = load_preset_phrase(preset)

    async def talk(one):
        figures = await one.told("figures")
        assert figures["facts"] == measure(preset, phrase).as_dict()
        assert figures["curves"] == json.loads(json.dumps(own.session.curves(1)))
        await one.say(do="set", slot=1, key="pitch.rise", value=0.011)
        while True:
            figures = await one.told("figures")
            if figures["facts"] == measure(preset.changed({"pitch.rise": 0.011}), phrase).as_dict():
                break
        await one.say(do="select", slot=3)
        while (await one.told("figures"))["slot"] != 3:
            pass

    talking(own, talk)


def test_frames_say_what_the_deck_did(own):
    async def talk(one):
        for _ in range(12):
            await one.until(lambda found: isinstance(found, bytes))

    talk_to = Talk(None)

    async def keep(one):
        await talk(one)
        talk_to.frames = one.frames

    talking(own, keep)
    own.session.stop()
    known = own.session.deck.rows(0)[1]
    by_sample = {int(row["sample"]): row for row in known}
    seen = 0
    for frame in talk_to.frames:
        kind, count = frame[0], int(np.frombuffer(frame, "<u4", 1, 4)[0])
        sample = float(np.frombuffer(frame, "<f8", 1, 8)[0])
        rows = np.frombuffer(frame, "<f4", offset=48).reshape(count, len(ROW_FIELDS))
        assert kind == 1
        for row in rows:
            told = dict(zip(ROW_FIELDS, row.tolist(), strict=True))
            row = by_sample[round(sample - told["back"])]
            assert told["position_s"] == np.float32(row["position"] / 48_000)
            for name in ROW_FIELDS[2:]:
                assert told[name] == np.float32(row[name])
            seen += 1
    assert seen > 40


def test_a_state_is_what_its_changes_make_of_the_one_before():
    generator = np.random.default_rng(5)
    known = Talk(None)
    before: dict = {}
    for revision in range(300):
        numbers = sorted(set(generator.integers(1, 9, 4).tolist()))
        slots = [{"number": number, "value": int(generator.integers(0, 2))} for number in numbers]
        after = {"revision": revision, "slots": slots, "current": int(generator.integers(0, 3))}
        changes = changed_parts(before, after)
        known._merge({"change": dict(changes)} if before else {"state": after})
        assert known.state == after
        assert all(slot not in before.get("slots", []) for slot in changes.get("slots", []) if before)
        before = after


def test_a_browser_that_falls_behind_is_let_go():
    async def flood():
        closed = asyncio.get_running_loop().create_future()

        class Stuck:
            async def send_str(self, text):
                await asyncio.sleep(0)

            async def close(self, code):
                closed.set_result(code)

        guest = Guest(Stuck())
        for number in range(1000):
            guest.say(number=number)
        assert guest.waiting.qsize() < 200
        await guest.write()
        return await closed

    assert asyncio.run(flood()) == aiohttp.WSCloseCode.TRY_AGAIN_LATER


# Starting and stopping


def test_a_taken_port_is_told_in_one_line(panel):
    with pytest.raises(OutputError) as problem:
        Panel(panel.session, panel.panel.port).start()
    [line] = problem.value.lines
    assert str(panel.panel.port) in line
    assert "in use" in line


@pytest.mark.parametrize("port", [70_000, -1])
def test_a_port_that_does_not_exist_is_told_in_one_line(panel, port):
    with pytest.raises(OutputError) as problem:
        Panel(panel.session, port).start()
    assert len(problem.value.lines) == 1


def test_a_panel_that_may_choose_takes_the_next_free_port(panel, folder):
    with served(folder) as other:
        assert other.panel.port != panel.panel.port
        assert other.panel.port > FIRST_PORT - 1


def test_only_this_machine_reaches_it(panel):
    addresses = {info[4][0] for info in socket.getaddrinfo(socket.gethostname(), None, socket.AF_INET)}
    for address in addresses - {"127.0.0.1"}:
        with pytest.raises(ConnectionRefusedError):
            socket.create_connection((address, panel.panel.port), 1.0).close()


def test_stopping_closes_all_panels_and_frees_the_port(tmp_path):
    with served(tmp_path) as found:
        port = found.panel.port

        async def talk(one):
            await one.until_state(lambda state: state)
            stopping = asyncio.create_task(asyncio.to_thread(found.panel.stop))
            while not isinstance(kind := await one.next(), aiohttp.WSMsgType):
                pass
            await stopping
            return kind, one.socket.close_code

        assert talking(found, talk) == (aiohttp.WSMsgType.CLOSE, aiohttp.WSCloseCode.GOING_AWAY)
        found.panel.stop()
        again = Panel(found.session, port)
        with again:
            assert again.port == port


def test_a_move_is_acknowledged_with_its_sample(own, tmp_path):
    """The stamp is the log's, and the time told is that at which the sample was made, to some blocks."""

    async def talk(one):
        await one.until_state(lambda state: state)
        found = []
        for number, message in enumerate(
            [
                {"do": "set", "slot": 1, "key": "pitch.rise", "value": "99 ms"},
                {"do": "select", "slot": 2},
                {"do": "table", "slot": 1, "table": "drone", "on": True},
                {"do": "key_down", "note": 50},
                {"do": "key_up", "note": 50},
                {"do": "tempo", "percent": 120},
                {"do": "level", "db": -33},
            ],
            100,
        ):
            await one.say(**message, id=number)
            found.append(await one.until(lambda found: isinstance(found, dict) and "taken" in found))
        return found

    found = talking(own, talk)
    assert [entry["taken"] for entry in found] == list(range(100, 107))
    stamps = [entry["sample"] for entry in found]
    assert stamps == sorted(stamps)
    starts = dict(own.driver.times)
    for entry in found:
        assert entry["sample"] in starts  # moves are taken where a block begins
        assert entry["made_ms"] / 1000 == pytest.approx(starts[entry["sample"]], abs=1.0)


def test_the_folders_are_those_that_were_named_at_the_start(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    with served(tmp_path) as found:
        usual = Panel(found.session, tell=found.lines.append)
        with usual:
            found.panel = usual

            async def talk(one):
                folders = (await one.told("hello"))["folders"]
                await one.say(do="phrase", path=str(PHRASES / "ferry-line.toml"))
                assert await one.told("done") == "phrase"
                await one.say(do="save", slot=1, path=str(PHRASES / "mine.toml"))
                assert "outside" in await one.told("refused")
                await one.say(do="capture", path="heard.wav")
                await one.until_state(lambda state: state["capture"])
                await one.say(do="capture_stop")
                await one.told("done")
                return folders

            assert talking(found, talk) == [str(tmp_path), str(PRESETS)]
            assert (tmp_path / "heard.wav").exists()
