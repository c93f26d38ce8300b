"""Orders of a batch, made up: short items, all different."""

from collections.abc import Iterator

from glidesmith.phrase import parse_phrase
from glidesmith.preset import preset_from_mapping, settings_hash
from glidesmith.production import Options, Order, PhraseFile

NOTES = ("D3", "A3", "G3", "F3")


def make_phrase_file(notes: int = 2, seconds: float = 0.1) -> PhraseFile:
    """A phrase of so many slurred notes, each so long."""
    rows = [
        f'  {{ at = {seconds * number}, lasts = {seconds * 1.1}, note = "{NOTES[number % len(NOTES)]}" }},'
        for number in range(notes)
    ]
    text = 'title = "Short"\ntempo_bpm = 60.0\nnotes = [\n' + "\n".join(rows) + "\n]\n"
    digest = parse_phrase(text).content_hash()
    return PhraseFile(f"short-{notes}.toml", digest, None, None, 7200.0, text.encode())


def make_order(
    number: int = 0, phrase: PhraseFile | None = None, options: Options | None = None, **pitch: object
) -> Order:
    """The order of an item "part-0/take-00000.wav"; each number has another rise."""
    patch = preset_from_mapping(
        {
            "title": f"Take {number}",
            "pitch": {"law": "rc", "rise": 0.01 + number * 1e-5, "fall": 0.02, **pitch},
            "gain": {"rise": 0.004, "fall": 0.02},
        }
    )
    item = f"part-{number % 3}/take-{number:05d}"
    return Order(
        item=f"{item}.wav",
        preset=f"{item}.toml",
        patch=patch,
        settings_sha256=settings_hash(patch),
        phrase=phrase or make_phrase_file(),
        varied={},
        sources={f"{item}.toml": "0" * 64},
        without_effect=(),
        options=options or Options(),
    )


def make_orders(
    count: int, phrase: PhraseFile | None = None, options: Options | None = None
) -> Iterator[Order]:
    """Orders that differ in their settings and share one phrase."""
    shared = phrase or make_phrase_file()
    for number in range(count):
        yield make_order(number, shared, options)
