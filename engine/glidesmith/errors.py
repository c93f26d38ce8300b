"""What can go wrong, drawn once.

    GlidesmithError
    ├── SettingError (ValueError)      a value outside its rule, from Python or from the command line
    │   ├── PresetError                a preset file; every mistake in it, a line each
    │   └── LogError                   the log of a session
    ├── PhraseError (ValueError)       a phrase file, TOML or Standard MIDI File
    ├── OutputError (OSError)          something that can't be written
    ├── ClusterError (OSError)         a scheduler or workers that can't be had, or went away
    └── DeviceError (OSError)          a sound output that isn't there, or refuses

Each message is one line a mistake and says what, where, which value, which rule and how to mend it.
"""


class GlidesmithError(Exception):
    """Base of every error that a user can mend. ``lines`` holds one line a mistake."""

    def __init__(self, *lines: str) -> None:
        self.lines: tuple[str, ...] = lines
        super().__init__("\n".join(lines))

    def __str__(self) -> str:
        return "\n".join(self.lines)


class SettingError(GlidesmithError, ValueError):
    """A setting with a value that its rule does not allow."""


class PresetError(SettingError):
    """A preset file that can't be used; one line a mistake."""


class LogError(SettingError):
    """A session's log that can't be replayed."""


class PhraseError(GlidesmithError, ValueError):
    """A phrase file that can't be used."""


class OutputError(GlidesmithError, OSError):
    """A file or folder that can't be written."""


class ClusterError(GlidesmithError, OSError):
    """A scheduler or workers that can't be had, or that went away."""


class DeviceError(GlidesmithError, OSError):
    """A sound output that isn't there, or refuses what it is asked for."""
