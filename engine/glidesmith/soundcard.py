"""The sound card: streams a source to an output, notices when the output is gone, and comes back to it.

The audio thread runs compiled code only, by the documented expert mode of `sounddevice`: PortAudio gets a C
function and a pointer. A plain Python callback is there for platforms where that can't be had, and for
comparison. There is no portable sign of a lost device, so a thread of its own watches the count of frames.
No call to PortAudio that may wait for ever is waited for.
"""

import contextlib
import math
import threading
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

from glidesmith.errors import DeviceError
from glidesmith.lease import Lease, keep_for_ever
from glidesmith.portaudio import (
    NO_OUTPUT,
    NoSoundError,
    Output,
    find_output,
    give_up,
    library,
    outputs,
    outputs_seen_afresh,
    quiet,
    rates_of,
    renew,
    takes,
    within,
)
from glidesmith.text import printable

WANTED_RATE = 48_000
"""The sample rate in hertz of live, unless told otherwise: that of `render`."""

NO_COMPILED_CALLBACK = (
    "compiled callbacks can't be had here: this plays through a Python callback, which drops out whenever "
    "Python is busy; --latency high makes that rarer"
)

_OPEN_S = 10.0
_CLOSE_S = 2.0
_TICK_S = 0.1
_RETRY_S = 0.5
_STALLED_S = 1.2
_SHARED_S = 0.02
_SHARED = ("default", "pulse", "pipewire", "sysdefault", "dmix")


class CountersLike(Protocol):
    """What a callback counts. Times are of one callback, in microseconds."""

    @property
    def frames(self) -> int: ...  # noqa: D102
    @property
    def callbacks(self) -> int: ...  # noqa: D102
    @property
    def underflows(self) -> int: ...  # noqa: D102
    @property
    def median_us(self) -> float: ...  # noqa: D102
    @property
    def p999_us(self) -> float: ...  # noqa: D102
    @property
    def worst_us(self) -> float: ...  # noqa: D102
    @property
    def last_block(self) -> int: ...  # noqa: D102


class Source(Protocol):
    """What a sound card plays; the live engine is one."""

    def callback(self, channels: int) -> tuple[int, int]:
        """Addresses of a compiled PortAudio stream callback and of its userdata.

        The callback fills ``frames`` x ``channels`` interleaved float32. It may never wait, allocate, read a
        file or touch Python. Raises NotImplementedError where there is no such thing.
        """

    def fill(self, out: NDArray[np.float32], underflow: bool = False) -> None:
        """What the callback does, from Python: fill ``out``, float32 (frames, channels), and count."""

    def counters(self) -> CountersLike:
        """What the callback, or ``fill``, has counted."""


@dataclass(frozen=True, slots=True)
class DeviceFacts:
    """What is played to, and how: ``block`` 0 lets the output choose; ``latency_s`` is what it granted."""

    device: str
    host_api: str
    sample_rate: int
    block: int
    latency_s: float
    channels: int
    compiled: bool


@dataclass(frozen=True, slots=True)
class Choice:
    """An output and the sample rate to play at, with what there is to say about them."""

    output: Output
    sample_rate: int
    remarks: tuple[str, ...] = ()


def choose_output(device: str | None = None, sample_rate: int | None = None) -> Choice:
    """The output to play to and a sample rate that it takes.

    ``device`` is a name, a part of one or a number, by default the system's own choice; ``sample_rate`` is in
    hertz, by default 48,000 or the nearest that the output takes.

    Raises DeviceError with one line where there is no such output, or it refuses the rate.
    """
    found = outputs(ask_rates=False)
    if not found:
        raise NoSoundError(NO_OUTPUT)
    if device is not None:
        return _with_rate(find_output(device, found), sample_rate)
    first, *others = sorted(found, key=lambda output: not output.is_default)
    try:
        return _with_rate(first, sample_rate)
    except _HeldError:
        for other in others:
            with contextlib.suppress(DeviceError):
                choice = _with_rate(other, sample_rate)
                held = f"{first.label} can't be opened now, so this plays to {other.label}"
                return Choice(other, choice.sample_rate, (held, *choice.remarks))
        raise


class _HeldError(DeviceError):
    """An output that refuses whatever it is asked."""


class _NoAnswerError(DeviceError):
    """An output that does not answer in time."""


def _with_rate(output: Output, sample_rate: int | None) -> Choice:
    wanted = WANTED_RATE if sample_rate is None else sample_rate
    if takes(output, wanted):
        return Choice(output, wanted)
    rates = rates_of(output)
    if not rates:
        raise _HeldError(
            f"{output.label} can't be opened now: another program may hold it; close that, or give another "
            "--device (see glidesmith devices)"
        )
    if sample_rate is not None:
        listed = ", ".join(str(rate) for rate in rates)
        raise DeviceError(f"{output.label} does not take {sample_rate} Hz: give --rate {listed}")
    nearest = min(rates, key=lambda rate: abs(math.log(rate / wanted)))
    return Choice(
        output, nearest, (f"{output.label} does not take {wanted:,} Hz: playing at {nearest:,} Hz",)
    )


class _PythonLease:
    """A lease of the plain Python callback: fills the device's buffer while it is held."""

    def __init__(self, source: Source) -> None:
        self._source = source
        self._held = True
        self._playing = threading.Lock()
        self.frames = 0

    def fill(self, out: NDArray[np.float32], frames: int, _: object, status: Any) -> None:
        """What PortAudio calls; see `sounddevice.OutputStream`."""
        with self._playing:
            if not self._held:
                out.fill(0.0)
                return
            self._source.fill(out, bool(status.output_underflow))
            self.frames += frames

    def revoke(self) -> bool:
        """From here on the stream gets silence."""
        with self._playing:
            self._held = False
        return True


class SoundCard:
    """Plays a source to an output until it is stopped, whatever happens to the output in between.

    Parameters
    ----------
    source : Source
        What is played, at ``choice.sample_rate``.
    choice : Choice
        From `choose_output`.
    block : int
        Frames a callback, 0 for what the output prefers.
    latency : "low", "high", float or None
        Seconds, or one of the output's own two; None is low, or 20 ms where other programs share it.
    compiled : bool
        False plays through the plain Python callback.
    """

    def __init__(
        self,
        source: Source,
        choice: Choice,
        *,
        block: int = 0,
        latency: str | float | None = None,
        compiled: bool = True,
    ) -> None:
        self._source, self._choice = source, choice
        self._block, self._latency = block, latency
        self._compiled = compiled
        self._notices: list[str] = []
        self._complaint = ""
        self._stream: Any = None
        self._lease: Any = None
        self._begun = False
        self._facts: DeviceFacts | None = None
        self._using = threading.Lock()
        self._ending = threading.Event()
        self._watcher = threading.Thread(target=self._watch_over, daemon=True, name="glidesmith device watch")
        self.left_behind = False
        """Whether a stream could not be closed; then end the process without ado, since its end may hang."""

    @property
    def facts(self) -> DeviceFacts:
        """What is played to, as it was when last it was opened. Raises DeviceError before ``start``."""
        if self._facts is None:
            raise DeviceError("the sound card has not been started")
        return self._facts

    @property
    def playing(self) -> bool:
        """Whether the output is there and takes samples."""
        return self._stream is not None

    def counters(self) -> CountersLike:
        """What was counted so far."""
        return self._source.counters()

    def open(self) -> DeviceFacts:
        """Open the output, which is where it may refuse. Raises DeviceError with one line."""
        with self._using:
            self._open(self._choice.output)
        return self.facts

    def start(self) -> DeviceFacts:
        """Begin to play; opens the output unless that was done. Raises DeviceError with one line."""
        with self._using:
            if self._stream is None:
                self._open(self._choice.output)
            self._begin(self._choice.output)
        self._watcher.start()
        return self.facts

    def watch(self) -> list[str]:
        """What there is to tell about the output since this was last asked, a line each."""
        told, self._notices = self._notices, []
        return told

    def stop(self) -> bool:
        """Play what is in the output's buffer, and close it; whether that went well. It never hangs."""
        self._ending.set()
        if not self._using.acquire(timeout=_CLOSE_S + _OPEN_S):
            self.left_behind = True
            return False
        try:
            self._close(gently=True)
        finally:
            self._using.release()
        if self._watcher.is_alive():
            self._watcher.join(_CLOSE_S)
        return not self.left_behind

    def _open(self, output: Output) -> None:
        """Open a stream; what goes wrong is a DeviceError."""
        sounddevice = library()
        channels = min(output.channels, 2)
        settings = {
            "samplerate": self._choice.sample_rate,
            "blocksize": self._block,
            "device": output.index,
            "channels": channels,
            "dtype": "float32",
            "latency": self._latency_for(output),
        }
        lease, callback = self._callback(sounddevice, channels)
        made: list[Any] = []

        def attempt() -> None:
            made.append(sounddevice._StreamBase(kind="output", **callback, **settings))

        try:
            self._in_time(attempt, output)
        except _NoAnswerError:
            self._leave_behind(made, lease)
            raise
        self._stream, self._lease, self._begun = made[0], lease, False
        self._facts = DeviceFacts(
            printable(output.name),
            output.host_api,
            self._choice.sample_rate,
            self._block,
            float(self._stream.latency),
            channels,
            self._compiled,
        )

    def _begin(self, output: Output) -> None:
        try:
            self._in_time(self._stream.start, output)
            self._begun = True
        except DeviceError:
            self._close(gently=False)
            raise

    def _in_time(self, work: Callable[[], object], output: Output) -> None:
        """A call to PortAudio that may take long; what goes wrong is a DeviceError."""
        with quiet():
            try:
                done = within(_OPEN_S, work)
            except library().PortAudioError as problem:
                raise _refusal(output, self._choice.sample_rate, problem) from None
        if not done:
            raise _NoAnswerError(
                f"{output.label} does not answer: restart your sound server, or give another --device"
            )

    def _callback(self, sounddevice: Any, channels: int) -> tuple[Any, dict[str, Any]]:
        """A lease, and what a stream is told to play by it. The first time this may compile for a while."""
        if self._compiled:
            try:
                lease, ffi = Lease(*self._source.callback(channels), channels), sounddevice._ffi
            except NotImplementedError:
                self._compiled = False
                self._notices.append(NO_COMPILED_CALLBACK)
            else:
                return lease, {
                    "callback": ffi.cast("PaStreamCallback *", lease.callback),
                    "userdata": ffi.cast("void *", lease.userdata),
                }
        python = _PythonLease(self._source)
        return python, {"callback": python.fill, "wrap_callback": "array"}

    def _latency_for(self, output: Output) -> str | float:
        if self._latency is not None:
            return self._latency
        is_shared = output.host_api == "ALSA" and output.name.split(":")[0] in _SHARED
        return max(_SHARED_S, output.low_latency_s) if is_shared else "low"

    def _close(self, gently: bool) -> None:
        """Close the stream, or leave it behind without any right to play.

        A stream whose JACK server is gone is not even asked: that may wait for ever, or end the process.
        """
        stream, lease = self._stream, self._lease
        self._stream = self._lease = None
        if stream is None:
            return

        def attempt() -> None:
            if gently:
                stream.stop()
            stream.close()

        safe = not self._begun or self.facts.host_api != "JACK" or stream.active
        if gently and safe and within(_CLOSE_S + self.facts.latency_s, attempt):
            return
        lease.revoke()
        if gently or not safe or not within(_CLOSE_S, attempt):
            self._leave_behind(stream, lease)

    def _leave_behind(self, stream: Any, lease: Any) -> None:
        """Give up a stream that can't be closed; whatever becomes of it, it will be silent."""
        lease.revoke()
        keep_for_ever((stream, lease, self._source))
        give_up()
        self.left_behind = True

    def _watch_over(self) -> None:
        while not self._ending.is_set():
            if not self._runs_until_stalled():
                return
            output = self._choice.output
            self._notices.append(
                f"{output.label} is gone: its device or sound server stopped; this goes on once it is back"
            )
            with self._using:
                self._close(gently=False)
            while not self._ending.wait(_RETRY_S):
                if self._regain():
                    break

    def _runs_until_stalled(self) -> bool:
        """Return True once no frames are asked for any more, and False when the end has come.

        Time counts by this thread's own ticks, so that a process that was put to sleep sees no stall.
        """
        frames, ticks = self._lease.frames, 0
        limit = stalled_after_s(self.facts)
        while not self._ending.wait(_TICK_S):
            with self._using:
                if self._stream is None:
                    return False
                now, active = self._lease.frames, self._stream.active
            ticks = 0 if now != frames else ticks + 1
            frames = now
            if ticks * _TICK_S >= limit or (ticks and not active):
                return True
        return False

    def _regain(self) -> bool:
        """Open the output again, by its name, if it is there."""
        before = self._choice.output
        if not _named(before, outputs_seen_afresh()):
            return False
        with self._using:
            if self._ending.is_set():
                return False
            try:
                renew()
                found = _named(before, outputs(ask_rates=False))
                if not found:
                    return False
                self._open(found[0])
                self._begin(found[0])
            except DeviceError as problem:
                if problem.lines[0] != self._complaint:
                    self._complaint = problem.lines[0]
                    self._notices.append(self._complaint)
                return False
        self._notices.append(f"{before.label} is back")
        return True


def stalled_after_s(facts: DeviceFacts) -> float:
    """How long an output may ask for nothing before it counts as gone: 1.2 s, for long blocks longer."""
    return max(_STALLED_S, 2.0 * facts.latency_s, 3.0 * facts.block / facts.sample_rate)


def _named(output: Output, found: Sequence[Output]) -> list[Output]:
    return [other for other in found if (other.name, other.host_api) == (output.name, output.host_api)]


def _refusal(output: Output, sample_rate: int, problem: Exception) -> DeviceError:
    """What to tell a user about a stream that does not open."""
    said = printable(str(problem.args[0])).removeprefix("Error opening _StreamBase: ")
    if "sample rate" in said.lower():
        listed = ", ".join(str(rate) for rate in rates_of(output)) or "another"
        return DeviceError(f"{output.label} does not take {sample_rate} Hz: give --rate {listed}")
    return DeviceError(
        f"{output.label} can't be opened ({said}): another program may hold it; close that, or give another "
        "--device, --block or --latency"
    )
