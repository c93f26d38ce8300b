"""The facts as a table for reading."""

from glidesmith.facts import table
from glidesmith.measuring import measure
from making import make_phrase, make_preset


def test_the_table_is_aligned_and_says_in_words_what_never_lands_and_what_clicks():
    phrase = make_phrase((0, 1, 50), (1, 2, 57), (2, "2.1", 52), ("2.1", 4, 64), title="Ferry line")
    facts = measure(make_preset(title="Lead", pitch={"law": "rc", "rise": 0.06, "fall": 0.09}), phrase)
    lines = table(facts).splitlines()
    assert lines[0] == "Lead, playing Ferry line (in tune: within 5 cents)"
    head = next(line for line in lines if line.startswith("glide"))
    rows = lines[lines.index(head) + 1 : lines.index(head) + 4]
    assert [row.split("  ")[0] for row in rows] == ["D3 to A3", "A3 to E3", "E3 to E4"]
    at = head.index("lands after")
    assert rows[0][at:].startswith("296 ms")
    assert rows[1][at:].startswith("NEVER, 165 cents off")
    assert all(row[at - 2 : at] == "  " for row in rows)
    assert [line.split()[-1] for line in lines[-7:-3]] == ["CLICK", "smooth", "smooth", "smooth"]
    assert lines[-2] == "3 glides: 1 never lands, the worst 165 cents off (A3 to E3 at 2.000 s)."
    assert lines[-1] == "4 gates: 1 with an edge that clicks (the first at 0.000 s); no peak is lowered."
    assert table(facts).isascii()


def test_the_table_names_jumps_silence_and_nothing_at_all():
    jumps = table(
        measure(
            make_preset(pitch={"glide": "never"}, gain={"rise": 0.5}), make_phrase((0, 1, 60), (2, 3, 62))
        )
    )
    assert "at once" in jumps
    assert "jumps" in jumps
    assert "silent" in jumps
    assert "1 glide: all land at once." in jumps
    lone = table(measure(make_preset(gain={"rise": 0.5}), make_phrase((0, "0.25", 60)))).splitlines()
    assert "no glides" in lone
    assert lone[-2] == "0 glides: the pitch's target never changes."
    assert lone[-1] == "1 gate: no edge clicks; the slew takes up to 6.0 dB off the peaks."


def test_titles_are_escaped_in_the_table_and_a_file_without_one_is_named_by_its_name():
    facts = measure(make_preset(title="red \x1b[31m"), make_phrase((0, 1, 60), title="two\nlines"))
    assert table(facts).splitlines()[0].startswith(r"red \x1b[31m, playing two\nlines (")
    assert measure(make_preset(title=""), make_phrase((0, 1, 60), (1, 9, 72))).preset == "untitled"
