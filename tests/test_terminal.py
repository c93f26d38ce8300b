"""Keys and the status line, on pseudo-terminals of the tests' own."""

import os
import select
import subprocess
import sys
import time

import pytest

from glidesmith.terminal import PLAIN_PAUSE_S, Keys, StatusLine, split_keys

pty = pytest.importorskip("pty", reason="there are no pseudo-terminals on this system")
termios = pytest.importorskip("termios")

READ = """
import sys
from glidesmith.terminal import Keys
with Keys() as keys:
    print("ready", keys.available, flush=True)
    while True:
        for key in keys.read(0.2):
            print("got", key, flush=True)
            if key == "q":
                sys.exit(3)
            if key == "x":
                raise RuntimeError
"""


class Terminal:
    """A process on a terminal of its own."""

    def __init__(self, *code: str, env: dict[str, str] | None = None):
        self.near, far = pty.openpty()
        self.before = termios.tcgetattr(far)
        self.far = far

        def take_over() -> None:
            os.setsid()
            import fcntl

            fcntl.ioctl(far, termios.TIOCSCTTY, 0)

        self.process = subprocess.Popen(
            [sys.executable, "-c", *code], stdin=far, stdout=far, stderr=far, preexec_fn=take_over, env=env
        )
        self.said = ""

    def press(self, keys: str) -> None:
        os.write(self.near, keys.encode())

    def until(self, words: str) -> str:
        """Read on until the process has said something; all that it said so far."""
        end = time.monotonic() + 180
        while words not in self.said:
            assert time.monotonic() < end, self.said
            self.read(0.1)
        return self.said

    def read(self, patience_s: float) -> None:
        """Take what the process has said, if it says something soon."""
        while select.select([self.near], [], [], patience_s)[0]:
            try:
                data = os.read(self.near, 4096)
            except OSError:  # nobody has the far end any more
                return
            self.said += data.decode()
            patience_s = 0.0

    def settings(self) -> list:
        return termios.tcgetattr(self.far)

    def close(self) -> None:
        self.process.kill()
        self.process.wait()
        os.close(self.near)
        os.close(self.far)


@pytest.fixture
def terminal():
    opened = []

    def make(*code: str) -> Terminal:
        opened.append(Terminal(*code))
        return opened[-1]

    yield make
    for one in opened:
        one.close()


@pytest.mark.parametrize(
    ("text", "keys"),
    [
        ("q", ["q"]),
        ("12 ", ["1", "2", " "]),
        ("\x1b[A\x1b[B\x1b[C\x1b[D", ["up", "down", "right", "left"]),
        ("\x1bOA", ["up"]),
        ("\x1b[1;5Ax\x1b[15~y", ["x", "y"]),  # with Control held, and a function key
        ("\r\n\t\x7f", []),
        ("\x1b[", []),
        ("ü+", ["ü", "+"]),
    ],
)
def test_what_a_terminal_sends_is_split_into_keys(text, keys):
    """Sequences as ECMA-48 gives them."""
    assert split_keys(text) == keys


def test_keys_come_without_enter_and_the_terminal_is_put_back(terminal):
    one = terminal(READ)
    one.until("ready True")
    assert one.settings()[3] & termios.ICANON == 0
    one.press("a")
    one.until("got a")
    one.press("\x1b[Aq")
    one.until("got up")
    assert one.process.wait(60) == 3
    assert one.settings() == one.before


def test_an_error_puts_the_terminal_back(terminal):
    one = terminal(READ)
    one.until("ready True")
    one.press("x")
    assert one.process.wait(60) == 1
    assert one.settings() == one.before


SHELL = """
import os, signal, sys, termios
signal.signal(signal.SIGTTOU, signal.SIG_IGN)
child = os.fork()
if child == 0:
    os.setpgid(0, 0)
    os.tcsetpgrp(0, os.getpid())
    os.execv(sys.executable, [sys.executable, "-c", sys.argv[1]])
_, status = os.waitpid(child, os.WUNTRACED)
os.tcsetpgrp(0, os.getpid())
print("stopped", os.WIFSTOPPED(status), bool(termios.tcgetattr(0)[3] & termios.ICANON), flush=True)
os.tcsetpgrp(0, child)
os.kill(child, signal.SIGCONT)
os.waitpid(child, 0)
"""


def test_a_stop_puts_the_terminal_back_until_it_goes_on(terminal):
    """Under a small shell, which like any other starts it in the foreground and takes the terminal back."""
    one = terminal(SHELL, READ)
    one.until("ready True")
    one.press("\x1a")  # Ctrl-Z
    one.until("stopped True True")
    one.press("b")
    one.until("got b")
    assert one.settings()[3] & termios.ICANON == 0
    one.press("q")
    one.process.wait(60)
    assert one.settings() == one.before


def test_without_a_terminal_there_are_no_keys_and_time_passes():
    done = subprocess.run(
        [sys.executable, "-c", READ.replace("while True", "for _ in range(2)")],
        stdin=subprocess.DEVNULL,
        capture_output=True,
        text=True,
        check=True,
    )
    assert done.stdout == "ready False\n"


def test_a_closed_standard_input_gives_no_keys(monkeypatch):
    monkeypatch.setattr("sys.stdin", None)
    with Keys() as keys:
        assert not keys.available
        assert keys.read(0.0) == []


STATUS = """
import time
from glidesmith.terminal import StatusLine
status = StatusLine()
status.show("slot 1: Night ferry lead" + 100 * "!")
time.sleep(0.15)
status.show("slot 2")
status.say("underway")
status.show("never seen")
status.clear()
"""


def test_on_a_terminal_the_status_is_redrawn_in_one_line(terminal):
    one = terminal(STATUS)
    one.process.wait(60)
    one.until("underway")
    one.read(0.2)
    said = one.said
    assert "\rslot 1: Night ferry lead" in said
    assert "never seen" not in said
    assert max(len(line) for line in said.replace("\r\n", "\r").split("\r")) <= 80
    before, _, after = said.partition("underway\r\n")
    assert before.endswith("\r")
    assert after.startswith("\rslot 2")
    assert after.endswith("\r")


def test_elsewhere_the_status_is_a_plain_line_now_and_then(capfd):
    now = [100.0]
    status = StatusLine(clock=lambda: now[0])
    for moment, text in (
        (0.1, "early"),
        (PLAIN_PAUSE_S, "in time"),
        (0.1, "again"),
        (PLAIN_PAUSE_S, "later\x1b"),
    ):
        now[0] += moment
        status.show(text, at_once=True)
    status.say("said")
    status.clear()
    assert capfd.readouterr().err == "in time\nlater\\x1b\nsaid\n"


def test_an_unwanted_status_is_not_shown(capfd):
    now = [0.0]
    status = StatusLine(wanted=False, clock=lambda: now[0])
    now[0] = 100.0
    status.show("never seen")
    status.say("said")
    assert capfd.readouterr().err == "said\n"
