"""The desk in a real terminal: signals, a closed terminal, a crash, another size; the terminal as it was afterwards."""

from __future__ import annotations

import contextlib
import fcntl
import os
import select
import signal
import struct
import subprocess
import sys
import termios
import time
from collections.abc import Callable, Iterator
from pathlib import Path

import pytest

pty = pytest.importorskip("pty", reason="needs a pseudo-terminal")

DEMO = Path(__file__).parents[2] / "demo_audio" / "announcement.flac"
LISTEN = [sys.executable, "-m", "preview", "listen", str(DEMO), "--silent"]
LEAVE_SCREEN, SHOW_CURSOR = b"\x1b[?1049l", b"\x1b[?25h"
PATIENCE_S = 60.0


class Terminal:
    """A program on a pseudo-terminal."""

    def __init__(
        self, command: list[str], folder: Path, size: tuple[int, int] = (80, 24), **variables: str
    ) -> None:
        self.master, self._slave = pty.openpty()
        self.resize(*size)
        self.before = termios.tcgetattr(self._slave)
        (folder / "preview").mkdir(exist_ok=True)
        (folder / "preview" / "hearing-caution-seen").touch()
        homes = {name: str(folder) for name in ("XDG_CONFIG_HOME", "XDG_STATE_HOME")}
        environment = {**os.environ, **homes, "TERM": "xterm-256color", **variables}
        self.process = subprocess.Popen(
            command,
            stdin=self._slave,
            stdout=self._slave,
            stderr=self._slave,
            env=environment,
            start_new_session=True,
            preexec_fn=lambda: fcntl.ioctl(0, termios.TIOCSCTTY, 0),  # so that closing it is told by SIGHUP
        )
        self.shown = b""

    def resize(self, columns: int, rows: int) -> None:
        """Another size of the window."""
        fcntl.ioctl(self.master, termios.TIOCSWINSZ, struct.pack("HHHH", rows, columns, 0, 0))

    def read(self, seconds: float = 0.05) -> None:
        """Take in what is shown."""
        if select.select([self.master], [], [], seconds)[0]:
            with contextlib.suppress(OSError):
                self.shown += os.read(self.master, 65_536)

    def until(self, condition: Callable[[], bool]) -> None:
        """Read until it holds; fails at the deadline."""
        give_up_s = time.monotonic() + PATIENCE_S
        while not condition():
            assert time.monotonic() < give_up_s, self.shown[-2000:]
            self.read()

    def until_shown(self, text: str) -> None:
        """Read until the text is on the screen."""
        self.until(lambda: text.encode() in self.shown)

    def type(self, keys: bytes) -> None:
        """Press keys."""
        os.write(self.master, keys)

    def code(self) -> int:
        """Wait for the end; the exit code."""
        self.until(lambda: self.process.poll() is not None)
        while select.select([self.master], [], [], 0.1)[0]:
            length = len(self.shown)
            self.read()
            if len(self.shown) == length:
                break
        assert self.process.returncode is not None
        return self.process.returncode

    @property
    def restored(self) -> bool:
        """Whether the terminal is as it was: settings, screen, cursor."""
        same = termios.tcgetattr(self._slave)[:4] == self.before[:4]
        return same and LEAVE_SCREEN in self.shown and SHOW_CURSOR in self.shown

    def end(self) -> None:
        """End what still runs."""
        if self.process.poll() is None:
            self.process.kill()
            self.process.wait(10)
        for descriptor in (self.master, self._slave):
            with contextlib.suppress(OSError):
                os.close(descriptor)


@pytest.fixture
def terminal(tmp_path) -> Iterator[Callable[..., Terminal]]:
    opened: list[Terminal] = []

    def open_one(command: list[str] = LISTEN, **given: object) -> Terminal:
        opened.append(Terminal(command, tmp_path, **given))  # type: ignore[arg-type]  # sizes and variables
        return opened[-1]

    yield open_one
    for one in opened:
        one.end()


def test_q_leaves_with_0_and_the_terminal_as_it_was(terminal) -> None:
    desk = terminal()
    desk.until_shown("parts")
    desk.type(b"q")
    assert desk.code() == 0
    assert desk.restored


@pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGTERM, signal.SIGHUP])
def test_a_signal_from_outside_ends_with_130_and_the_terminal_as_it_was(terminal, number) -> None:
    desk = terminal()
    desk.until_shown("parts")
    desk.process.send_signal(number)
    assert desk.code() == 130
    assert desk.restored
    assert b"interrupted" in desk.shown
    assert b"Traceback" not in desk.shown


def test_a_terminal_that_is_closed_ends_the_desk(terminal) -> None:
    desk = terminal()
    desk.until_shown("parts")
    os.close(desk.master)
    give_up_s = time.monotonic() + PATIENCE_S
    while desk.process.poll() is None:
        assert time.monotonic() < give_up_s, "the desk outlives its terminal"
        time.sleep(0.02)  # polling a process, with a deadline


def test_the_window_may_be_made_smaller_and_larger(terminal) -> None:
    desk = terminal()
    desk.until_shown("parts")
    for size in ((20, 5), (1, 1), (160, 48)):
        desk.resize(*size)
        os.kill(desk.process.pid, signal.SIGWINCH)
        desk.read(0.3)
    desk.until_shown("inverting-band-pass" if b"band-pass" in desk.shown else "circuit")
    desk.type(b"q")
    assert desk.code() == 0
    assert desk.restored


def test_a_desk_that_is_killed_leaves_its_session_and_no_engine(terminal, tmp_path) -> None:
    desk = terminal()
    desk.until_shown("silent clock")  # while it compiles for the first time an engine hears nothing
    desk.type(b"\x1b[C")
    desk.until_shown("R1 11 k")
    kept = tmp_path / "preview" / "desks"
    desk.until(lambda: any("11000" in file.read_text("utf-8") for file in kept.glob("*.session.toml")))
    children = _children(desk.process.pid)
    assert children
    desk.process.kill()
    desk.process.wait(10)
    give_up_s = time.monotonic() + 5.0
    while any(Path(f"/proc/{number}").exists() for number in children):
        assert time.monotonic() < give_up_s, "an engine outlives its desk"
        time.sleep(0.02)  # polling processes, with a deadline
    again = terminal()
    again.until_shown("a session was left behind")
    again.type(b"A\r")
    again.until_shown("R1 11 k")
    again.type(b"q")
    assert again.code() == 0


def _children(process_id: int) -> list[int]:
    """Processes that it has started, and that these have started."""
    path = Path(f"/proc/{process_id}/task/{process_id}/children")
    if not path.exists():
        pytest.skip("needs /proc")
    own = [int(number) for number in path.read_text("utf-8").split()]
    return own + [below for number in own for below in _children(number)]


CRASH = """
import sys
from pathlib import Path
from preview.circuit.library import find_stage
from preview.errors import PreviewError
from preview.session import Session
from preview.ui.app import DeskApp
from preview.ui.running import run_desk
from preview.ui.link import StillLink
from preview.values.levels import parse_full_scale

def fail(self):
    raise RuntimeError("a fault to try it with")

DeskApp.{method} = fail
stage = find_stage("inverting-low-pass")
session = Session(None, stage, stage.supply, parse_full_scale("+18 dBu"))
try:
    run_desk(session, StillLink(), autoplay=False)
except PreviewError as error:
    print(error, file=sys.stderr)
    sys.exit(error.exit_code)
"""


@pytest.mark.parametrize("method", ["poll", "on_mount", "show", "compose"])
def test_after_a_crash_the_terminal_is_as_it_was_and_one_line_says_why(terminal, method) -> None:
    desk = terminal([sys.executable, "-c", CRASH.format(method=method)], PREVIEW_DEBUG="0")
    assert desk.code() == 1
    assert desk.restored
    said = desk.shown.rpartition(LEAVE_SCREEN)[2].decode()
    assert "the desk stopped on a fault of its own (RuntimeError: a fault to try it with)" in said
    assert said.count("\n") <= 3


def test_a_terminal_that_promises_no_screen_gets_lines(terminal) -> None:
    desk = terminal(TERM="dumb")
    desk.until_shown("line mode: 'help' lists what can be typed")
    assert b"no screen to draw on" in desk.shown
    desk.type(b"bypass\r")
    desk.until_shown("BYPASS: the input is heard")
    desk.type(b"quit\r")
    assert desk.code() == 0
    assert b"\x1b[" not in desk.shown
