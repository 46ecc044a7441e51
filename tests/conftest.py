"""Fixtures for every room: a private sound server, so that PortAudio plays without a sound card."""

from __future__ import annotations

import contextlib
import ctypes.util
import os
import shutil
import signal
import socket
import subprocess
import sys
import tempfile
import time
from collections.abc import Iterator
from pathlib import Path

import numpy as np
import pytest
from numpy.typing import NDArray

_CONFIG = """
pcm.ears {{ type pulse server "unix:{folder}/native" device "ears" fallback "" handle_underrun 1 }}
pcm.ears_mon {{ type pulse server "unix:{folder}/native" device "ears.monitor" }}
pcm.feed {{ type pulse server "unix:{folder}/native" device "feed" fallback "" handle_underrun 1 }}
pcm.feed_mon {{ type pulse server "unix:{folder}/native" device "feed.monitor" }}
pcm.!default {{ type asym playback.pcm "ears" capture.pcm "feed_mon" }}
"""

_SINK = "module-null-sink sink_name={name} rate=48000 format=float32le channels=2 norewinds=1"

_RECORD = """
import sys, threading
import numpy as np, sounddevice as sd
frames, path = int(sys.argv[1]), sys.argv[2]
out = np.zeros((frames, 2), np.float32)
at = overflows = 0
done, begun = threading.Event(), threading.Event()
def take(block, count, times, status):
    global at, overflows
    begun.set()
    overflows += bool(status.input_overflow)
    n = max(0, min(count, frames - at))
    out[at:at + n] = block[:n]
    at += n
    if at >= frames:
        done.set()
def until_told():
    global frames
    sys.stdin.readline()
    frames = min(frames, at + 24000)
threading.Thread(target=until_told, daemon=True).start()
with sd.InputStream(device="ears_mon", samplerate=48000, channels=2, dtype="float32",
                    blocksize=1024, latency=0.2, callback=take):
    begun.wait(5)
    print("recording", flush=True)
    done.wait(frames / 48000 + 10)
np.save(path, out[:at])
print("overflows", overflows, flush=True)
"""


class Recording:
    """A running recording of what is played, made by a process of its own."""

    def __init__(self, env: dict[str, str], frames: int, path: Path) -> None:
        self._path = path
        self._process = subprocess.Popen(
            [sys.executable, "-c", _RECORD, str(frames), str(path)],
            env=env,
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
            stderr=subprocess.PIPE,
            text=True,
        )
        assert self._process.stdout is not None
        first = self._process.stdout.readline()
        if first.strip() != "recording":
            self._process.kill()
            raise RuntimeError(f"the recording did not begin: {self._process.communicate()[1][-2000:]}")

    def samples(self) -> NDArray[np.float32]:
        """End it half a second from now, or earlier if it is full; shape (frames, 2), 48 kHz."""
        out, trouble = self._process.communicate("enough\n", timeout=120)
        assert self._process.returncode == 0, trouble[-2000:]
        assert "overflows 0" in out, "the recorder itself lost samples: the machine is too busy to judge"
        return np.load(self._path)

    def end(self) -> None:
        """End the process if it still runs."""
        if self._process.poll() is None:
            self._process.kill()
            self._process.communicate()


class SoundServer:
    """A private daemon with two null sinks of 48 kHz, stereo, float32: ``ears`` to play, ``feed`` to feed.

    Only processes that are started with ``env`` hear of it: PortAudio reads its configuration once.
    """

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        config = folder / "asound.conf"
        config.write_text(_CONFIG.format(folder=folder))
        self.env = {k: v for k, v in os.environ.items() if not k.startswith("PULSE_")}
        self.env |= {
            "ALSA_CONFIG_PATH": str(config),
            "HOME": str(folder),
            "XDG_RUNTIME_DIR": str(folder),
            "PULSE_RUNTIME_PATH": str(folder),
            "NUMBA_CACHE_DIR": os.environ.get("NUMBA_CACHE_DIR", str(folder / "numba")),
        }
        """Environment for a process that shall play and record here."""
        self._recordings: list[Recording] = []
        self._start()

    def _start(self) -> None:
        folder = self.folder
        self._log = open(folder / "log", "ab")  # noqa: SIM115 - closed by end()
        command = ["pulseaudio", "-n", "--daemonize=no", "--use-pid-file=no", "--exit-idle-time=-1"]
        command += ["--realtime=no", "--high-priority=no", "--disable-shm=1", "--log-target=stderr"]
        for module in (
            _SINK.format(name="ears"),
            _SINK.format(name="feed"),
            f"module-native-protocol-unix socket={folder}/native auth-anonymous=1 auth-cookie-enabled=0",
            f"module-cli-protocol-unix socket={folder}/cli",
        ):
            command += ["-L", module]
        self._process = subprocess.Popen(
            command, env=self.env, stdin=subprocess.DEVNULL, stdout=self._log, stderr=self._log
        )
        deadline = time.monotonic() + 10
        while not self._answers():
            if self._process.poll() is not None or time.monotonic() > deadline:
                self.end()
                raise RuntimeError(f"the sound server does not start: {(folder / 'log').read_text()[-2000:]}")
            time.sleep(0.01)  # polling a process, with a deadline

    @property
    def pid(self) -> int:
        """The daemon's process id."""
        return self._process.pid

    def _answers(self) -> bool:
        with contextlib.suppress(OSError):
            return "ears" in self.command("list-sinks")
        return False

    def command(self, line: str) -> str:
        """Give the daemon a line of its own command language; its answer."""
        with socket.socket(socket.AF_UNIX, socket.SOCK_STREAM) as link:
            link.settimeout(5)
            link.connect(str(self.folder / "cli"))
            link.sendall(f"{line}\n".encode())
            link.shutdown(socket.SHUT_WR)
            answer = b""
            with contextlib.suppress(ConnectionError):
                while data := link.recv(65_536):
                    answer += data
        return answer.decode(errors="replace")

    def record(self, frames: int) -> Recording:
        """Begin to record what ``ears`` plays, at most so many frames; returns when the recording runs."""
        number = len(self._recordings)
        recording = Recording(self.env, frames, self.folder / f"recording{number}.npy")
        self._recordings.append(recording)
        return recording

    def run(self, script: str, *arguments: str, timeout_s: float = 60.0) -> str:
        """Run a Python script in a process that hears of this server; its standard output."""
        done = subprocess.run(
            [sys.executable, "-c", script, *arguments],
            env=self.env,
            capture_output=True,
            text=True,
            timeout=timeout_s,
            check=False,
        )
        assert done.returncode == 0, done.stderr[-3000:]
        return done.stdout

    def start(self, script: str, *arguments: str) -> subprocess.Popen[str]:
        """Start a Python script in a process that hears of this server; its three streams are text pipes."""
        return subprocess.Popen(
            [sys.executable, "-c", script, *arguments],
            env=self.env,
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
            stderr=subprocess.PIPE,
            text=True,
        )

    def unplug(self) -> None:
        """Take both sinks away; with one left the daemon would move what plays over to it."""
        for index in self._sinks_loaded():
            self.command(f"unload-module {index}")

    def plug(self) -> None:
        """Bring the sinks back after ``unplug``."""
        for name in ("ears", "feed"):
            self.bring(name)

    def bring(self, name: str) -> None:
        """Bring one sink back."""
        self.command("load-module " + _SINK.format(name=name))

    def take_away(self, name: str) -> None:
        """Take one sink away, through which nobody plays."""
        blocks = self.command("list-modules").split("index: ")[1:]
        (index,) = [block.split()[0] for block in blocks if f"sink_name={name} " in block]
        self.command(f"unload-module {index}")

    def _sinks_loaded(self) -> list[str]:
        blocks = self.command("list-modules").split("index: ")[1:]
        return [block.split()[0] for block in blocks if "module-null-sink" in block]

    def freeze(self) -> None:
        """Stop the daemon in its tracks: callbacks cease, without any error."""
        self._process.send_signal(signal.SIGSTOP)

    def thaw(self) -> None:
        """Let a frozen daemon go on."""
        self._process.send_signal(signal.SIGCONT)

    def restart(self) -> None:
        """Start the daemon anew after ``end``."""
        for left in ("native", "cli"):
            (self.folder / left).unlink(missing_ok=True)
        self._start()

    def end(self) -> None:
        """End what was started, by its id."""
        for recording in self._recordings:
            recording.end()
        if self._process.poll() is None:
            self.thaw()
            self._process.terminate()
            try:
                self._process.wait(5)
            except subprocess.TimeoutExpired:
                self._process.kill()
                self._process.wait(5)
        self._log.close()


def _what_is_missing() -> str:
    if sys.platform != "linux":
        return "the private sound server is made for Linux"
    if shutil.which("pulseaudio") is None:
        return "pulseaudio is not installed (apt install pulseaudio libasound2-plugins)"
    if ctypes.util.find_library("portaudio") is None:
        return "PortAudio is not installed (apt install libportaudio2)"
    return ""


@pytest.fixture
def sound_server() -> Iterator[SoundServer]:
    """A private sound server for one test; the test is skipped, with the reason, where it cannot run."""
    missing = _what_is_missing()
    if missing:
        pytest.skip(missing)
    folder = Path(tempfile.mkdtemp(prefix="snd"))  # short: the path of a socket is limited
    server: SoundServer | None = None
    try:
        server = SoundServer(folder)
        yield server
    finally:
        if server is not None:
            server.end()
        shutil.rmtree(folder, ignore_errors=True)
