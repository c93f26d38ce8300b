"""Debian's Chromium for tests: a page opened from disk, the network refused, the clock of its audio held."""

import base64
import os
import shutil
import signal
import threading
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from io import BytesIO
from pathlib import Path
from typing import Any

import numpy as np
import soundfile

from conftest import PRESETS
from glidesmith import load_phrase, load_preset, measure, render
from glidesmith.candidates import heard_settings
from glidesmith.curves import curves
from glidesmith.preset import settings_hash

CHROMIUM = shutil.which("chromium")
NEEDED = "needs Debian's package `chromium`, and `playwright` from PyPI (without its own browsers)"

LONGEST_WAIT_MS = 15_000
"""A page that does not come to what is waited for is broken."""

LONGEST_TEST_S = 120.0
"""A page that hangs, in an endless loop or waiting for what never comes, takes its browser down with it."""

SWITCHES = [
    "--headless=new",
    "--no-sandbox",
    "--disable-gpu",
    "--disable-quic",
    "--no-first-run",
    "--disable-background-networking",
    "--disable-component-update",
    "--disable-sync",
    "--autoplay-policy=no-user-gesture-required",
    "--host-resolver-rules=MAP * ~NOTFOUND",
]

CANDIDATES = {
    "rc, rise 60 ms": {"pitch.law": "rc", "pitch.rise": 0.06, "pitch.fall": 0.09},
    "exp, rise 300 ms": {"pitch.law": "exp", "pitch.rise": 0.3, "pitch.fall": 0.3},
    "cosine, rise 120 ms": {"pitch.law": "cosine", "pitch.rise": 0.12, "pitch.fall": 0.12, "gain.rise": 0.0},
}

# An audio context that renders offline: its clock stands still while keys are pressed, so that what the page
# plays can be checked sample by sample, whatever the machine is doing. `perform` takes pairs of a time in
# seconds and a key; it returns the output, and for each key the time and the position shown before and after.
OFFLINE = """
window.AudioContext = class extends OfflineAudioContext {
  constructor({ sampleRate }) {
    super(1, SECONDS * sampleRate, sampleRate);
    window.testContext = this;
  }
  resume() { return Promise.resolve(); }
  suspend() { return Promise.resolve(); }
};
window.perform = async (presses, milliseconds) => {
  const real = OfflineAudioContext.prototype;
  const wait = () => new Promise((done) => setTimeout(() => requestAnimationFrame(done), milliseconds));
  const position = () => parseFloat(document.getElementById("position").textContent);
  const seen = [];
  for (const [time, key] of presses) {
    real.suspend.call(testContext, time).then(async () => {
      await wait();
      const before = position();
      const changed = { key: key.replace("shift ", ""), shiftKey: key.startsWith("shift "), bubbles: true };
      document.body.dispatchEvent(new KeyboardEvent("keydown", changed));
      await wait();
      seen.push([testContext.currentTime, before, position()]);
      real.resume.call(testContext);
    });
  }
  const samples = (await real.startRendering.call(testContext)).getChannelData(0);
  const bytes = new Uint8Array(samples.buffer, samples.byteOffset, samples.byteLength);
  let text = "";
  for (let i = 0; i < bytes.length; i += 32768) text += String.fromCharCode(...bytes.subarray(i, i + 32768));
  return { seen, samples: btoa(text) };
};
"""

# An audio context whose clock goes on only when `passTime` is called: a round needs clips to be heard for a
# while, and no test shall wait for that.
HELD = """
window.AudioContext = class extends OfflineAudioContext {
  #now = 0;
  constructor({ sampleRate }) {
    super(1, sampleRate, sampleRate);
    window.passTime = (seconds) => { this.#now += seconds; };
  }
  get currentTime() { return this.#now; }
  resume() { return Promise.resolve(); }
  suspend() { return Promise.resolve(); }
};
"""


def example_set(sample_rate: int = 48_000) -> tuple[dict[str, Any], list[bytes], int]:
    """The data of a page, its audio, and the bytes of the same audio as WAVs. Loudness is made up."""
    preset = load_preset(PRESETS / "night-ferry-lead.toml")
    assert preset.phrase is not None
    phrase = load_phrase(preset.phrase.file)
    entries, audio, wav_bytes = [], [], 0
    for number, (label, changes) in enumerate(CANDIDATES.items(), 1):
        changed = preset.changed(changes)
        samples = render(changed, phrase, sample_rate).audio
        codes = (np.round(samples.astype(np.float64) * 2**23)).astype(np.int32) << 8
        file = BytesIO()
        soundfile.write(file, codes, sample_rate, subtype="PCM_24", format="FLAC")
        audio.append(file.getvalue())
        wav_bytes += 44 + 3 * samples.size
        entries.append(
            {
                "number": number,
                "label": label,
                "file": f"{number:02d}.wav",
                "settings_sha256": settings_hash(changed),
                "varied": changes,
                "settings": heard_settings(changed),
                "gain_db": [-3.2, -2.9, -3.4][number - 1],
                "lufs": -23.0,
                "true_peak_dbtp": -9.4,
                "frames": samples.size,
                "facts": measure(changed, phrase).as_dict(),
                "differs": [],
                "curves": curves(changed, phrase, samples.size / sample_rate),
            }
        )
    data = {
        "kind": "glidesmith comparison",
        "version": 1,
        "engine": "0.1.0",
        "set": "5e7" + 61 * "0",
        "title": "Night ferry lead",
        "phrase": {"title": phrase.title, "sha256": phrase.content_hash(), "length_s": float(phrase.end)},
        "sample_rate": sample_rate,
        "tolerance_cents": 5.0,
        "equal": {"mode": "settings", "interval_semitones": None, "from": None, "up_s": None, "down_s": None},
        "loudness": {"common_lufs": -23.0, "target_lufs": -23.0, "limited_by": None, "gated": True},
        "candidates": entries,
    }
    return data, audio, wav_bytes


def decoded(flac: bytes) -> np.ndarray:
    """The samples of a FLAC file, float64 (n,)."""
    return soundfile.read(BytesIO(flac))[0]


class Tab:
    """A page in the browser: what it complained of and what it asked the network for."""

    def __init__(self, page: Any) -> None:
        self.page = page
        self.complaints: list[str] = []
        self.requests: list[str] = []
        page.on("console", lambda message: self.complaints.append(f"{message.type}: {message.text}"))
        page.on("pageerror", lambda error: self.complaints.append(str(error)))
        page.on("request", lambda request: self.requests.append(request.url))

    def wait_until_ready(self) -> None:
        """Wait until the clips are decoded."""
        self.page.wait_for_selector("#play:enabled")

    def wait_for_position(self, seconds: float) -> None:
        """Wait until the position shown is past so many seconds."""
        self.page.wait_for_function(
            "(seconds) => parseFloat(document.getElementById('position').textContent) > seconds", arg=seconds
        )

    def hear(self, keys: str, seconds: float = 0.7) -> None:
        """Press keys, each clip playing for so long of the held clock before the next."""
        for key in keys:
            self.page.keyboard.press(key)
            self.page.evaluate("(seconds) => passTime(seconds)", seconds)

    def perform(self, presses: list[tuple[float, str]], wait_ms: float = 5) -> tuple[np.ndarray, np.ndarray]:
        """Press keys at times of the offline context; begin playing first.

        Returns the output, float64 (n,), and for each press the context's time, and the position shown before
        and after it, in seconds, (m, 3).
        """
        given = [[list(press) for press in presses], wait_ms]
        found = self.page.evaluate("([presses, wait]) => perform(presses, wait)", given)
        samples = np.frombuffer(base64.b64decode(found["samples"]), "<f4").astype(np.float64)
        return samples, np.array(found["seen"])


@contextmanager
def browser() -> Iterator[Any]:
    """A Chromium of its own, closed at the end."""
    from playwright.sync_api import sync_playwright

    with sync_playwright() as playwright:
        chromium = playwright.chromium.launch(executable_path=CHROMIUM, args=SWITCHES)
        try:
            yield chromium
        finally:
            chromium.close()


@contextmanager
def opened(
    chromium: Any, path: Path, offline_s: float | None = None, held: bool = False, **settings: Any
) -> Iterator[Tab]:
    """A page opened from disk in a fresh profile, the network refused, ready to play.

    ``offline_s`` makes its audio context render offline, for so many seconds (see `OFFLINE`); ``held`` makes
    its clock stand still (see `HELD`).
    """
    context = chromium.new_context(accept_downloads=True, **settings)
    end = threading.Timer(LONGEST_TEST_S, _end, [_process_id(chromium)])
    end.daemon = True
    end.start()
    try:
        context.set_default_timeout(LONGEST_WAIT_MS)
        context.set_offline(True)
        if offline_s is not None:
            context.add_init_script(OFFLINE.replace("SECONDS", str(offline_s)))
        if held:
            context.add_init_script(HELD)
        tab = Tab(context.new_page())
        tab.page.goto(path.as_uri())
        tab.wait_until_ready()
        yield tab
    finally:
        end.cancel()
        context.close()


def _process_id(chromium: Any) -> int:
    session = chromium.new_browser_cdp_session()
    processes = session.send("SystemInfo.getProcessInfo")["processInfo"]
    session.detach()
    return next(each["id"] for each in processes if each["type"] == "browser")


def _end(process_id: int) -> None:
    with suppress(ProcessLookupError):
        os.kill(process_id, signal.SIGKILL)
