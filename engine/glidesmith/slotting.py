"""Presets and their files on the way into a slot: what has to be read is read here, and nowhere later."""

from pathlib import Path

from glidesmith.console import Slot, Source
from glidesmith.errors import SettingError
from glidesmith.phrase import Phrase
from glidesmith.preset import Preset
from glidesmith.text import file_name


def filled_slot(preset: Preset, phrase: Phrase, name: str) -> Slot:
    """A slot with a preset that was loaded, and a phrase. Raises SettingError for an unfit cycle."""
    preset = with_given(preset)
    return Slot(name, preset, phrase, cycle_of(preset), Source(preset.path, preset.path, preset, preset))


def with_given(preset: Preset) -> Preset:
    """The same preset, with what its file would say where it came from none."""
    return preset if preset.given is not None else preset.changed({})


def cycle_of(preset: Preset) -> bytes | None:
    """The samples of a preset's cycle, float64, little-endian; None without one. Raises SettingError."""
    if preset.oscillator.wave != "file" or preset.oscillator.file is None:
        return None
    return cycle_at(preset.oscillator.file, preset.where)


def cycle_at(file: Path, where: str = "") -> bytes:
    """The samples of the cycle in a file. Raises SettingError, which begins with ``where``."""
    from glidesmith.wavetable import read_cycle

    return read_cycle(file, where).astype("<f8").tobytes()


def file_beside(preset: Preset, file: str) -> Path:
    """A file that a preset names: relative to its folder."""
    if not file.strip() or "\0" in file:
        raise SettingError(f"oscillator.file = {file_name(file)}: must be the path of a file")
    return preset.path.parent / file if preset.path else Path(file)
