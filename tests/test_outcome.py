"""What a run did, as people and scripts are told."""

import json
from pathlib import Path

from glidesmith.manifest import Line
from glidesmith.outcome import Failed, NeverLands, Outcome
from records import make_record


def make_never(*short_by_cents):
    return [
        {"note": number, "start_s": 0.5 * number, "from": "D3", "to": to, "short_by_cents": short}
        for number, (to, short) in enumerate(zip(("A3", "G3", "F3"), short_by_cents, strict=False))
    ]


def line_with(count):
    return Line(None, 0, 0, "lead.toml", "cd" * 32, count)


def landing(before, *short_by_cents):
    record = make_record("lead.wav", glides=5, never_lands=make_never(*short_by_cents))
    return NeverLands.of(record, None if before is None else line_with(before))


def test_the_worst_glide_stands_for_all():
    found = landing(None, 12.0, 66.0, 30.0)
    assert (found.item, found.count, found.glides, found.before) == ("lead.wav", 3, 5, None)
    assert (found.worst_from, found.worst_to, found.short_by_cents) == ("D3", "G3", 66.0)


def test_no_longer_is_what_landed_in_the_run_before():
    outcome = Outcome(Path("bank"), Path("takes"))
    new, same, worse, better = (landing(before, 10.0, 20.0) for before in (None, 2, 1, 3))
    outcome.never_land += [new, same, worse, better]
    assert outcome.no_longer == [worse]


def test_all_is_well_unless_something_failed_or_was_not_tried():
    assert Outcome(Path("bank"), Path("takes")).all_well
    assert not Outcome(Path("bank"), Path("takes"), stopped="the disk is full").all_well
    failed = Failed("bad.toml", "", ("bad.toml: is no preset",))
    assert not Outcome(Path("bank"), Path("takes"), failed=[failed]).all_well


def test_it_is_fit_for_json_and_names_the_place_people_know():
    outcome = Outcome(Path("bank"), Path("books"), address="s3://bucket/takes", made=["lead.wav"])
    outcome.failed.append(Failed("bad.toml", "bad.wav", ("one", "two")))
    outcome.never_land.append(landing(1, 10.0, 20.0))
    facts = json.loads(json.dumps(outcome.as_dict()))
    assert facts["output"] == outcome.place == "s3://bucket/takes"
    assert facts["manifest"] == "s3://bucket/takes/manifest.jsonl"
    assert facts["summary"] == "s3://bucket/takes/summary.html"
    assert facts["failed"] == [{"preset": "bad.toml", "item": "bad.wav", "errors": ["one", "two"]}]
    assert facts["never_land"][0]["worst"] == {"from": "D3", "to": "G3", "short_by_cents": 20.0}
    assert facts["stopped"] is None
    assert outcome.manifest == Path("books/manifest.jsonl")
    assert Outcome(Path("bank"), Path("takes")).place == "takes"
