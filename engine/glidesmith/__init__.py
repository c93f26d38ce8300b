"""Glidesmith: a real-time audio rendering engine for auditioning glides.

The public names are imported when they are first used, so that ``import glidesmith`` costs almost nothing:

    from glidesmith import Slew, load_preset, load_phrase, render, measure
"""

from importlib import import_module
from typing import TYPE_CHECKING, Any

__version__ = "0.1.0"

if TYPE_CHECKING:
    from glidesmith.batching import batch as batch
    from glidesmith.comparison import compare as compare
    from glidesmith.errors import GlidesmithError as GlidesmithError
    from glidesmith.errors import OutputError as OutputError
    from glidesmith.errors import PhraseError as PhraseError
    from glidesmith.errors import PresetError as PresetError
    from glidesmith.errors import SettingError as SettingError
    from glidesmith.measuring import measure as measure
    from glidesmith.phrase import load_phrase as load_phrase
    from glidesmith.preset import load_preset as load_preset
    from glidesmith.rendering import render as render
    from glidesmith.slew import Slew as Slew

_HOME = {
    "GlidesmithError": "glidesmith.errors",
    "OutputError": "glidesmith.errors",
    "PhraseError": "glidesmith.errors",
    "PresetError": "glidesmith.errors",
    "SettingError": "glidesmith.errors",
    "Slew": "glidesmith.slew",
    "batch": "glidesmith.batching",
    "compare": "glidesmith.comparison",
    "load_phrase": "glidesmith.phrase",
    "load_preset": "glidesmith.preset",
    "measure": "glidesmith.measuring",
    "render": "glidesmith.rendering",
}

__all__ = [
    "GlidesmithError",
    "OutputError",
    "PhraseError",
    "PresetError",
    "SettingError",
    "Slew",
    "__version__",
    "batch",
    "compare",
    "load_phrase",
    "load_preset",
    "measure",
    "render",
]


def __getattr__(name: str) -> Any:
    home = _HOME.get(name)
    if home is None:
        raise AttributeError(f"module 'glidesmith' has no attribute {name!r}")
    value = getattr(import_module(home), name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    return sorted(__all__)
