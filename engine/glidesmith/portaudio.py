"""PortAudio as `sounddevice` binds it: loaded when it is needed, kept quiet, and left behind where it hangs.

What was seen of it, and is held to here. ALSA's and JACK's libraries print on file descriptor 2. Devices are
listed once, when PortAudio is initialised. After a JACK server has died, aborting or closing its stream waits
for ever, and terminating PortAudio ends the whole process by a failed assertion. So where JACK is about and
something was lost, PortAudio is left as it is: whoever needs to see new devices looks from a process of its
own (`outputs_seen_afresh`), and then a fresh copy of the library takes over (`renew`). In all other cases it
is terminated in good order (`finish`).
"""

import atexit
import contextlib
import ctypes
import json
import os
import shutil
import subprocess
import sys
import tempfile
import threading
from collections.abc import Callable, Iterator, Sequence
from ctypes.util import find_library
from dataclasses import asdict, dataclass, replace
from pathlib import Path
from typing import Any, TextIO

from glidesmith.errors import DeviceError
from glidesmith.text import counted, printable, shown

RATES = (8000, 16000, 22050, 32000, 44100, 48000, 88200, 96000, 176400, 192000, 384000)
"""The sample rates in hertz that an output is asked about."""

NO_LIBRARY = (
    "there is no PortAudio library, which plays sound: on Debian or Ubuntu type sudo apt install "
    "libportaudio2, on Fedora sudo dnf install portaudio, on Arch sudo pacman -S portaudio; on macOS and "
    "Windows it comes with pip install --force-reinstall sounddevice"
)
NO_OUTPUT = (
    "there is no sound output: connect one or start your sound server (PipeWire, PulseAudio or JACK), "
    "then see glidesmith devices"
)

_loaded: list[Any] = []
_given_up: list[bool] = []
_MOST_TOLD = 8
_LOOK_S = 8.0
_SHORT_NAMES = {"JACK Audio Connection Kit": "JACK"}


class NoSoundError(DeviceError):
    """There is nothing to play to at all: no library, or no output."""


@dataclass(frozen=True, slots=True)
class Output:
    """A sound output. Rates are in hertz; ``rates`` is empty where they were not asked or not told."""

    name: str
    host_api: str
    index: int
    channels: int
    default_rate: int
    low_latency_s: float
    high_latency_s: float
    is_default: bool
    rates: tuple[int, ...] = ()

    @property
    def label(self) -> str:
        """The name with the system interface that it is reached through, printable."""
        return printable(f"{self.name} ({self.host_api})")


class _Quiet:
    """File descriptor 2 put aside, while sys.stderr keeps writing to where it did."""

    def __init__(self) -> None:
        self._lock = threading.Lock()
        self._depth = 0
        self._kept: int | None = None
        self._stderr: TextIO | None = None

    def begin(self) -> None:
        with self._lock:
            self._depth += 1
            if self._depth == 1:
                self._put_aside()

    def end(self) -> None:
        with self._lock:
            self._depth -= 1
            if self._depth == 0:
                self._put_back()

    def _put_aside(self) -> None:
        with contextlib.suppress(OSError, ValueError):
            sys.stderr.flush()
        try:
            self._kept = os.dup(2)
        except OSError:
            return  # it is closed: nobody would see anything
        stderr = sys.stderr
        if _descriptor(stderr) == 2:
            self._stderr = stderr
            sys.stderr = open(  # noqa: SIM115
                self._kept, "w", 1, stderr.encoding, stderr.errors, closefd=False
            )
        nowhere = os.open(os.devnull, os.O_WRONLY)
        os.dup2(nowhere, 2)
        os.close(nowhere)

    def _put_back(self) -> None:
        if self._kept is None:
            return
        with contextlib.suppress(OSError, ValueError):
            sys.stderr.flush()
        os.dup2(self._kept, 2)
        if self._stderr is not None:
            sys.stderr = self._stderr
        os.close(self._kept)
        self._kept = self._stderr = None


def _descriptor(stream: TextIO | None) -> int | None:
    try:
        return stream.fileno() if stream is not None else None
    except (OSError, ValueError):
        return None


_quiet = _Quiet()


@contextlib.contextmanager
def quiet() -> Iterator[None]:
    """While it lasts, what libraries print on file descriptor 2 goes nowhere; ``sys.stderr`` works on."""
    _quiet.begin()
    try:
        yield
    finally:
        _quiet.end()


def within(seconds: float, work: Callable[[], object]) -> bool:
    """Do a piece of work in a thread of its own; whether it was done in time.

    What takes longer goes on for as long as it likes, and keeps nothing from ending. An exception from the
    work is raised here.
    """
    problems: list[BaseException] = []

    def attempt() -> None:
        try:
            work()
        except BaseException as problem:
            problems.append(problem)

    thread = threading.Thread(target=attempt, daemon=True, name="glidesmith sound card call")
    thread.start()
    thread.join(seconds)
    if problems:
        raise problems[0]
    return not thread.is_alive()


def library() -> Any:
    """The module `sounddevice`, with PortAudio initialised.

    Raises NoSoundError with one line where there is no such library, or it does not start.
    """
    if not _loaded:
        if "sounddevice" not in sys.modules and sys.platform.startswith("linux"):
            _try_out()
        with quiet():
            if (found := find_library("portaudio")) is not None:
                _pin(found)  # before anything can interrupt the start
            sounddevice = _imported()
        _pin(str(_library_file(sounddevice)))
        atexit.unregister(sounddevice._exit_handler)
        atexit.register(finish)
        _loaded.append(sounddevice)
    if not _loaded[0]._initialized and not _given_up:
        with quiet():
            _loaded[0]._initialize()
    return _loaded[0]


def give_up() -> None:
    """Never terminate PortAudio as it is now: a server that it talked to is gone."""
    _given_up.append(True)


def finish() -> None:
    """Terminate PortAudio, unless it was given up; done at the process's end.

    A client that only vanishes makes a JACK server drop samples of everybody's.
    """
    if not _loaded or _given_up or not _loaded[0]._initialized:
        return
    with quiet(), contextlib.suppress(_loaded[0].PortAudioError):
        try:
            if not within(_LOOK_S, _loaded[0]._terminate):
                give_up()
        except RuntimeError:  # so late there are no new threads
            _loaded[0]._terminate()


def _imported() -> Any:
    try:
        import sounddevice
    except ModuleNotFoundError as problem:
        raise NoSoundError(f"Python's {problem.name} is missing: pip install sounddevice") from None
    except OSError:
        raise NoSoundError(NO_LIBRARY) from None
    except Exception as problem:
        said = printable(str(problem))
        raise NoSoundError(f"PortAudio does not start ({said}): is your sound system running?") from None
    return sounddevice


def _pin(file: str) -> None:
    """Never unload a library: threads and callbacks of its own may run to the process's end."""
    with contextlib.suppress(OSError):  # whoever needs it will say so
        ctypes.CDLL(file)


def has_jack(sounddevice: Any) -> bool:
    """Whether PortAudio talks to a JACK server, and so must not be terminated."""
    return any("JACK" in api["name"] for api in sounddevice.query_hostapis())


def renew() -> None:
    """Make PortAudio look for devices again.

    No stream may be in use, and none from before may be touched again. Raises DeviceError where that can't be
    done in this process.
    """
    sounddevice = library()
    with quiet():
        if not _given_up and not has_jack(sounddevice) and within(_LOOK_S, sounddevice._terminate):
            started = within(_LOOK_S, sounddevice._initialize)
        else:
            copy = _fresh_copy(sounddevice)
            _given_up.clear()
            sounddevice._lib, sounddevice._initialized = copy, 0
            started = within(_LOOK_S, sounddevice._initialize)
    if not started:
        raise DeviceError("PortAudio does not start again; end live and start it anew")


def _fresh_copy(sounddevice: Any) -> Any:
    """PortAudio loaded once more, from a copy of its file: with a state of its own."""
    source = _library_file(sounddevice)
    try:
        descriptor, name = tempfile.mkstemp(suffix=source.suffix, prefix="glidesmith-")
        os.close(descriptor)
        shutil.copyfile(source, name)
        copy = sounddevice._ffi.dlopen(name)
        _pin(name)
    except OSError as problem:
        raise DeviceError(
            f"PortAudio can't be loaded afresh ({printable(str(problem))}); end live and start it anew"
        ) from None
    with contextlib.suppress(OSError):  # where a loaded file can't be removed it goes with the folder
        Path(name).unlink()
    return copy


class _Symbol(ctypes.Structure):
    """Dl_info of dladdr(3)."""

    _fields_ = (
        ("file", ctypes.c_char_p),
        ("base", ctypes.c_void_p),
        ("name", ctypes.c_char_p),
        ("address", ctypes.c_void_p),
    )


def _library_file(sounddevice: Any) -> Path:
    """The file that PortAudio was first loaded from."""
    known = getattr(sounddevice, "_glidesmith_file", None)
    if known is None:
        known = sounddevice._libname
        if not Path(known).is_absolute():
            ffi, found = sounddevice._ffi, _Symbol()
            address = int(ffi.cast("intptr_t", ffi.addressof(sounddevice._lib, "Pa_Initialize")))
            ctypes.CDLL(None).dladdr(ctypes.c_void_p(address), ctypes.byref(found))
            known = os.fsdecode(found.file or b"")
        sounddevice._glidesmith_file = known
    return Path(known).resolve()


def outputs(ask_rates: bool = True) -> list[Output]:
    """Every sound output there is, in PortAudio's order.

    Raises DeviceError where PortAudio is missing. ``ask_rates`` also asks each which of `RATES` it takes,
    which opens it for a moment.
    """
    sounddevice = library()
    with quiet():
        apis = [api["name"] for api in sounddevice.query_hostapis()]
        found = [
            Output(
                device["name"],
                _SHORT_NAMES.get(apis[device["hostapi"]], apis[device["hostapi"]]),
                device["index"],
                device["max_output_channels"],
                round(device["default_samplerate"]),
                device["default_low_output_latency"],
                device["default_high_output_latency"],
                False,
            )
            for device in sounddevice.query_devices()
            if device["max_output_channels"] > 0
        ]
        found = with_default(found, sounddevice._lib.Pa_GetDefaultOutputDevice())
        return [replace(output, rates=rates_of(output)) for output in found] if ask_rates else found


def with_default(found: Sequence[Output], index: int) -> list[Output]:
    """The same outputs with the default marked: the one of this index, or a better way to the same place.

    ALSA's way to a JACK server is a detour where PortAudio reaches the server itself.
    """
    chosen = next((output for output in found if output.index == index), None)
    if chosen is not None and (chosen.host_api, chosen.name) == ("ALSA", "jack"):
        chosen = next((output for output in found if output.host_api == "JACK"), chosen)
    return [replace(output, is_default=output is chosen) for output in found]


def rates_of(output: Output) -> tuple[int, ...]:
    """Those of `RATES`, and its own default rate, that an output takes; none where it can't be asked now."""
    return tuple(rate for rate in sorted({*RATES, output.default_rate}) if takes(output, rate))


def takes(output: Output, sample_rate: int) -> bool:
    """Whether an output takes a sample rate in hertz."""
    sounddevice = library()
    with quiet():
        try:
            sounddevice.check_output_settings(
                output.index, min(output.channels, 2), "float32", samplerate=sample_rate
            )
        except (sounddevice.PortAudioError, ValueError):
            return False
        return True


def find_output(text: str, among: Sequence[Output] | None = None) -> Output:
    """The output that a number or a name means: the index of `outputs`, the whole name, or words of it.

    Raises DeviceError with one line that lists the candidates where none fits, or several do.
    """
    found = outputs(ask_rates=False) if among is None else among
    if not found:
        raise NoSoundError(NO_OUTPUT)
    if text.isdecimal():
        fitting = [output for output in found if output.index == int(text)]
    else:
        fitting = _named(text, found)
    if len(fitting) == 1:
        return fitting[0]
    if fitting:
        raise DeviceError(
            f"{shown(text)} fits {counted(len(fitting), 'output', 'outputs')}: {_listed(fitting)}; "
            "give more of the name, or the number"
        )
    raise DeviceError(f"there is no output {shown(text)}: give the number or a part of {_listed(found)}")


def _named(text: str, found: Sequence[Output]) -> list[Output]:
    """The outputs of this name; where there is none, those whose label has every word of it."""
    wanted = text.casefold().strip()
    exact = [output for output in found if wanted in (output.name.casefold(), output.label.casefold())]
    words = wanted.split()
    return exact or [
        output for output in found if words and all(word in output.label.casefold() for word in words)
    ]


def _listed(found: Sequence[Output]) -> str:
    told = ", ".join(f"{output.index} {shown(output.label)}" for output in found[:_MOST_TOLD])
    rest = len(found) - _MOST_TOLD
    return f"{told} and {rest} more (see glidesmith devices)" if rest > 0 else told


def outputs_seen_afresh() -> list[Output]:
    """The outputs of this moment, as a process of its own sees them, since PortAudio in this one may not.

    There are none where that process can't be run or does not answer in time.
    """
    try:
        return [Output(**fields) for fields in json.loads(_asked_elsewhere().stdout)]
    except (OSError, ValueError, TypeError, subprocess.SubprocessError):
        return []


def _try_out() -> None:
    """Start PortAudio in a process of its own first: with some settings of ALSA it ends the process."""
    try:
        done = _asked_elsewhere()
    except subprocess.TimeoutExpired:
        raise NoSoundError(
            "PortAudio does not answer: restart your sound server (PipeWire, PulseAudio or JACK)"
        ) from None
    except OSError:
        return  # there are no other processes here
    if done.returncode < 0 and not done.stdout:
        raise NoSoundError(
            "PortAudio breaks down on this system's sound settings: see what aplay -L says, and mend "
            "/etc/asound.conf, ~/.asoundrc or the package alsa-lib's settings (Debian: libasound2-data)"
        )


def _asked_elsewhere() -> "subprocess.CompletedProcess[bytes]":
    """What `_tell_outputs` prints in a process of its own."""
    folder = str(Path(__file__).resolve().parents[1])
    paths = os.pathsep.join(filter(None, (folder, os.environ.get("PYTHONPATH"))))
    return subprocess.run(
        [sys.executable, "-P", "-c", "from glidesmith.portaudio import _tell_outputs; _tell_outputs()"],
        stdin=subprocess.DEVNULL,
        stdout=subprocess.PIPE,
        stderr=subprocess.DEVNULL,
        timeout=_LOOK_S,
        env=os.environ | {"PYTHONPATH": paths},
    )


def _tell_outputs() -> None:
    """Print the outputs."""
    import sounddevice  # noqa: F401 — here, so that nothing is tried out once more

    print(json.dumps([asdict(output) for output in outputs(ask_rates=False)]), flush=True)
