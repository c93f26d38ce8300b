"""Keys played by hand on one voice: last note first, as `glidesmith.keyboard` has it for a phrase.

The latest pressed of the held keys sounds; releasing it returns to the latest that is still held, gliding
under ``always`` and ``overlap`` and never starting the envelope again. The first key glides from nowhere: it
is there at once, and so is the first after a panic.
"""

from dataclasses import dataclass
from typing import TYPE_CHECKING

from glidesmith.converter import converted_volts

if TYPE_CHECKING:
    from glidesmith.preset import Preset


@dataclass(frozen=True, slots=True)
class Sounding:
    """What the voice is to do: go to ``volts``, at once with ``jump``, the gate at ``level`` (0 to 1), and
    the envelope starts with ``trigger``. ``tick_samples``: the converter takes it at the next tick of so
    many samples; 0 is at once."""

    volts: float
    jump: bool
    level: float
    trigger: bool
    tick_samples: float


class Keys:
    """The keys held at present, in order of pressing, with their velocities."""

    def __init__(self) -> None:
        self._held: dict[int, float] = {}
        self._sounded = False
        self.last: int | None = None

    def press(self, preset: "Preset", sample_rate: int, note: int, velocity: float) -> Sounding | None:
        """A key goes down; None where it is down already."""
        if note in self._held:
            return None
        legato = bool(self._held)
        self._held[note] = velocity
        glides = preset.pitch.glide == "always" or (legato and preset.pitch.glide == "overlap")
        jump = not (glides and self._sounded)
        self._sounded = True
        retriggers = preset.envelope is not None and preset.envelope.retrigger
        return self._sound(preset, sample_rate, note, jump, not legato or retriggers)

    def release(self, preset: "Preset", sample_rate: int, note: int) -> Sounding | bool:
        """A key goes up: what sounds now, True where silence follows, False where nothing changes."""
        if note not in self._held:
            return False
        del self._held[note]
        if not self._held:
            return True
        earlier = next(reversed(self._held))
        if earlier == self.last:
            return False
        return self._sound(preset, sample_rate, earlier, preset.pitch.glide == "never", False)

    def let_go(self, sounded: bool) -> None:
        """Forget the keys that are held: a phrase plays now, or nothing. ``sounded``: there is a pitch to
        glide from."""
        self._held.clear()
        self.last = None
        self._sounded = sounded

    def volts(self, preset: "Preset") -> float | None:
        """Where the pitch of the last key lies in another preset; None where no key was played last."""
        return None if self.last is None else key_volts(preset, self.last)

    def _sound(self, preset: "Preset", sample_rate: int, note: int, jump: bool, trigger: bool) -> Sounding:
        self.last = note
        level = 10.0 ** (-preset.amplifier.velocity_db * (1.0 - self._held[note]) / 20.0)
        rate_hz = preset.converter.rate_hz if preset.converter else 0.0
        tick_samples = sample_rate / rate_hz if rate_hz else 0.0
        return Sounding(key_volts(preset, note), jump, level, trigger, tick_samples)


class Holders:
    """Who holds which key down: one that several hold stays down until the last of them lets it go."""

    def __init__(self) -> None:
        self._of: dict[int, set[object]] = {}

    def add(self, note: int, holder: object) -> None:
        """A holder has pressed a key."""
        self._of.setdefault(note, set()).add(holder)

    def leave(self, note: int, holder: object) -> bool:
        """A holder lets a key go; whether it comes up, which it does where nobody holds it."""
        holders = self._of.get(note, set())
        holders.discard(holder)
        if holders:
            return False
        self._of.pop(note, None)
        return True

    def clear(self) -> None:
        """Forget all: the transport has taken the keys away."""
        self._of.clear()


def key_volts(preset: "Preset", note: int) -> float:
    """The pitch voltage of a key, as it comes from the converter."""
    volts = (note - preset.tuning.zero_volts) / 12.0
    return converted_volts(preset.converter, volts)[0] if preset.converter else volts
