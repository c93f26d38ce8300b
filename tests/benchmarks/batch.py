"""A whole bank: processor time against writing the same samples, jobs beside each other, memory.

Processor time is that of all processes of a run together, start-up included, and does not depend on how many
there are; wall time does. The reference is the time that soundfile takes to write the same samples (float32
in, 24 bit out), and nothing else.
"""

import random
import resource
import shutil
import statistics
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable
from pathlib import Path

import soundfile

SAMPLE_RATE = 48_000
LAWS, WAVES = ("linear", "rc", "log", "exp", "soft", "curve", "cosine"), ("saw", "triangle", "sine", "pulse")
NOTES = ("D3", "A3", "G3", "F3", "E3", "D3", "C4", "A3")
PRESET = """title = "Patch {number}"
[oscillator]
wave = "{wave}"
[pitch]
law = "{law}"
rise = "{rise} ms"
fall = "{fall} ms"
glide = "{glide}"
[gain]
law = "linear"
rise = "{attack} ms"
fall = "80 ms"
[amplifier]
law = "decibel"
{envelope}[phrase]
file = "../line.toml"
"""
ENVELOPE = "[envelope]\nattack = 0.01\ndecay = 0.2\nsustain = 0.6\nrelease = 0.1\n"


def lay_bank(folder: Path, count: int, seconds: float) -> Path:
    """Presets over all laws and waves, one in three with an envelope, and the phrase they play."""
    draw = random.Random(1)
    notes = [
        f'  {{ at = {k / 2}, lasts = {0.55 if k % 2 else 0.45}, note = "{NOTES[k % len(NOTES)]}" }},'
        for k in range(max(1, round(2 * seconds)))
    ]
    for number in range(count):
        place = folder / f"part-{number % 8}"
        place.mkdir(parents=True, exist_ok=True)
        text = PRESET.format(
            number=number,
            wave=draw.choice(WAVES),
            law=draw.choice(LAWS),
            rise=draw.randint(5, 120),
            fall=draw.randint(5, 120),
            glide=draw.choice(("always", "overlap")),
            attack=draw.randint(2, 20),
            envelope=ENVELOPE if number % 3 == 0 else "",
        )
        (place / f"patch-{number:05d}.toml").write_text(text)
    (folder / "line.toml").write_text("tempo_bpm = 60\nnotes = [\n" + "\n".join(notes) + "\n]\n")
    return folder


def spent(act: Callable[[], object]) -> tuple[float, float]:
    """Processor time of all processes that are started meanwhile, and wall time, in seconds."""
    before, begin = resource.getrusage(resource.RUSAGE_CHILDREN), time.perf_counter()
    act()
    after, end = resource.getrusage(resource.RUSAGE_CHILDREN), time.perf_counter()
    return after.ru_utime + after.ru_stime - before.ru_utime - before.ru_stime, end - begin


def glidesmith(*arguments: object) -> None:
    subprocess.run(
        [sys.executable, "-m", "glidesmith", *map(str, arguments)], check=True, capture_output=True
    )


def anew(bank: Path, takes: Path, *options: object) -> tuple[float, float]:
    """What rendering a bank into an empty folder takes."""
    shutil.rmtree(takes, ignore_errors=True)
    return spent(lambda: glidesmith("batch", bank, "-o", takes, *options))


def writing(takes: Path, place: Path) -> float:
    """Processor time of writing all that was rendered once more with soundfile; reading it is not counted."""
    shutil.rmtree(place, ignore_errors=True)
    place.mkdir()
    total = 0.0
    for number, path in enumerate(sorted(takes.rglob("*.wav"))):
        audio, rate = soundfile.read(path, dtype="float32")
        begin = time.process_time()
        soundfile.write(place / f"{number}.wav", audio, rate, subtype="PCM_24")
        total += time.process_time() - begin
    return total


def peak_megabytes(bank: Path, takes: Path) -> float:
    """The largest resident size of any process of a run."""
    shutil.rmtree(takes, ignore_errors=True)
    code = (
        "import resource, subprocess, sys; subprocess.run(sys.argv[1:], check=True, capture_output=True); "
        "print(resource.getrusage(resource.RUSAGE_CHILDREN).ru_maxrss)"
    )
    command = [sys.executable, "-m", "glidesmith", "batch", bank, "-o", takes, "--jobs", "1"]
    done = subprocess.run([sys.executable, "-c", code, *command], check=True, capture_output=True, text=True)
    return int(done.stdout) / 1024


def _line(what: str, ratios: list[float], limit: str, more: str = "") -> str:
    spread = f"{min(ratios):.3g} to {max(ratios):.3g}; {limit}"
    return f"{what}: {statistics.median(ratios):.3g} ({spread}){more}"


def _against_writing(folder: Path, bank: Path, runs: int, size: str) -> list[str]:
    metered, plain, jobs = [], [], []
    for _ in range(runs):
        whole, one_s = anew(bank, folder / "takes", "--jobs", 1)
        reference = writing(folder / "takes", folder / "reference")
        without, _ = anew(bank, folder / "takes", "--jobs", 1, "--no-meter")
        _, two_s = anew(bank, folder / "takes", "--jobs", 2)
        metered.append(whole / reference)
        plain.append(without / reference)
        jobs.append(two_s / one_s)
    times = f" — {whole:.3g} s, {reference:.3g} s and {without:.3g} s in the last run"
    return [
        _line(f"processor time of a batch of {size} / writing its samples with soundfile", metered,
              "at most 6.0, aim 2.0", times),
        _line(f"the same with --no-meter / writing, {size}", plain, "at most 4.5, aim 2.0"),
        _line(f"wall time with 2 jobs / 1 job, {size}", jobs, "at most 0.65"),
    ]  # fmt: skip


def _again(folder: Path, bank: Path, runs: int, count: int) -> str:
    anew(bank, folder / "takes")
    time.sleep(0.2)
    glidesmith("batch", bank, "-o", folder / "takes")
    each_ms = []
    for _ in range(max(runs, 3)):
        whole_s, _ = spent(lambda: glidesmith("batch", bank, "-o", folder / "takes"))
        bare_s, _ = spent(lambda: glidesmith("--version"))
        each_ms.append((whole_s - bare_s) / count * 1e3)
    what = f"a second run over {count} items beyond --version / items, processor ms"
    return _line(what, each_ms, "at most 0.3")


def _by_size(folder: Path, scale: float) -> list[str]:
    """Cost against the number of short items, and the memory of the largest process."""
    rows, peaks = ["short items: processor ms each to render, ms each to find current, MB"], {}
    for full in (100, 400, 1_000, 4_000, 10_000):
        count = max(8, round(full * scale))
        bank, takes = lay_bank(folder / f"bank-{full}", count, 0.5), folder / "short"
        peaks[full] = peak_megabytes(bank, takes)
        whole, _ = anew(bank, takes, "--jobs", 2)
        time.sleep(0.2)
        glidesmith("batch", bank, "-o", takes)
        again, _ = spent(lambda bank=bank, takes=takes: glidesmith("batch", bank, "-o", takes))
        bare, _ = spent(lambda: glidesmith("--version"))
        rows.append(
            f"  {count:6,}: {whole / count * 1e3:.3g} ms, {(again - bare) / count * 1e3:.3g} ms, "
            f"{peaks[full]:.0f} MB"
        )
        shutil.rmtree(bank)
    ratio = peaks[4_000] / peaks[400]
    rows.append(f"peak memory with 4,000 items / 400 items: {ratio:.2f} (at most 1.2)")
    return rows


def report(runs: int, scale: float) -> list[str]:
    """Each claim of the batch, a line each, and a table over sizes."""
    count, seconds = max(6, round(400 * scale)), 8.0 if scale >= 0.1 else 0.5
    size = f"{count} presets of {seconds:g} s"
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        bank = lay_bank(folder / "bank", count, seconds)
        glidesmith("batch", bank, "-o", folder / "takes")
        lines = _against_writing(folder, bank, max(1, runs // 3), size)
        lines.append(_again(folder, bank, runs, count))
        return [*lines, *_by_size(folder, scale)]
