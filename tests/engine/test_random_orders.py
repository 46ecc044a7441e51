"""Random orders to an engine whose device is a loop here, several times as fast as the sound: none makes a click."""

from __future__ import annotations

import multiprocessing
import random
import threading
import time
from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.signal import firwin, lfilter

from preview.audio.sink import FileSink
from preview.circuit.library import find_stage, with_overrides
from preview.engine import host as engine_host
from preview.engine import messages
from preview.engine.host import Host
from preview.engine.messages import Snapshot
from preview.engine.player import Player
from preview.engine.process import EngineConfig
from preview.session import Session
from preview.values.quality import Quality
from tests.engine.running import session_of

RATE_HZ, BLOCK, TONE_HZ = 48_000, 512, 200
SECONDS, SPEED = 240.0, 4.0
LOW = ("inverting-low-pass", "inverting-band-pass", "inverting-high-pass")  # at most 12 times: nothing clips

pytestmark = [pytest.mark.slow, pytest.mark.timeout(600)]


class ByHand:
    """In place of the device: the test takes the blocks of whatever plays."""

    live_latency_s = 0.0
    input_name = stood_in_for = ""
    device = None
    player: Player | None = None

    def __init__(self, **_: object) -> None:
        """There is only one device."""

    def play(self, player: Player | None, inlet: object = None) -> None:
        """Play this from now on."""
        ByHand.player = player

    def watch(self) -> None:
        """Nothing can be lost."""

    def close(self) -> None:
        """Nothing to let go of."""


def drawn(audio: Path, name: str = "inverting-low-pass", opamp: str = "ideal") -> Session:
    stage = with_overrides(find_stage(name), {}, {None: opamp})[0]
    return session_of(audio, stage=stage, supply=stage.supply)


def an_order(dice: random.Random, audio: Path) -> messages.Command:
    """One of everything that can be asked for while it plays."""
    circuit = drawn(audio, dice.choice(LOW), dice.choice(("ideal", "TL072", "NE5532"))).netlist()
    return dice.choice(
        (
            messages.SetPart("R2", dice.choice((47e3, 68e3, 82e3, 100e3, 120e3))),
            messages.SetPart("R1", dice.choice((10e3, 12e3, 15e3, 22e3))),
            messages.Seek(dice.randrange(90_000)),
            messages.SelectCandidate(dice.choice("ABC")),
            messages.SetCircuit(circuit),
            messages.SetBypass(dice.random() < 0.5),
            messages.SetRegion(*dice.choice(((0, 48_000), (24_000, 72_000), (None, None)))),
            messages.ListenNull(dice.choice((("A", "B"), ("B", "C"), None))),
            messages.SetMatch(dice.random() < 0.5),
            messages.SetVolume(dice.choice((0.0, -1.0, -3.0))),
            messages.SetQuality(dice.choice((Quality.DRAFT, Quality.STANDARD))),
        )
    )


class Hiss:
    """Energy above 15 kHz, block by block, against that of the tone in a quarter of a second as a soak counts it."""

    def __init__(self) -> None:
        self._taps = firwin(401, 15_000, fs=RATE_HZ, pass_zero=False, window=("kaiser", 12.0))
        self._memory = np.zeros(len(self._taps) - 1)
        self.level = 0.0
        """Largest sample [1]."""

    def db(self, block: NDArray[np.float32]) -> float:
        """Of the next block [dB]."""
        samples = block[:, 0].astype(np.float64)
        self.level = max(self.level, float(np.abs(samples).max()))
        high, self._memory = lfilter(self._taps, 1.0, samples, zi=self._memory)
        tone = 0.5 * self.level**2 * np.sum(np.blackman(RATE_HZ // 4) ** 2)
        return float(10.0 * np.log10(np.dot(high, high) / tone + 1e-30)) if tone else -300.0


@pytest.fixture
def tone(tmp_path: Path) -> Path:
    """Two seconds of a 200 Hz sine, so soft that no stage here brings it to full scale, mono."""
    path = tmp_path / "tone.wav"
    with FileSink(path, sample_rate_hz=RATE_HZ, channels=1) as sink:
        sink.write(0.03 * np.sin(2 * np.pi * TONE_HZ * np.arange(2 * RATE_HZ) / RATE_HZ)[:, np.newaxis])
    return path


@pytest.mark.parametrize("pause_s", [(0.1, 0.6), (0.01, 0.2)], ids=["a person", "a machine"])
def test_random_orders_make_no_click(
    tone: Path, monkeypatch: pytest.MonkeyPatch, pause_s: tuple[float, float]
) -> None:
    monkeypatch.setattr(engine_host, "Outlet", ByHand)
    monkeypatch.setattr(engine_host, "FADE_WAIT_S", 0.0)
    monkeypatch.setattr(engine_host, "gc", SimpleNamespace(collect=int, freeze=int, disable=int))
    desk, pipe = multiprocessing.Pipe()
    config = EngineConfig(drawn(tone), start_volume_db=0.0, block_frames=BLOCK, play=True, silent=True)
    host = Host(pipe, config)
    thread = threading.Thread(target=host.live)
    thread.start()
    told: list[Snapshot] = []

    def listen() -> None:
        while desk.poll():
            if isinstance(what := desk.recv(), Snapshot):
                told.append(what)

    dice, hiss, clicks = random.Random(7), Hiss(), list[str]()
    block, next_s, last = np.zeros((BLOCK, 1), np.float32), 3.0, ""
    try:
        desk.send(messages.KeepCandidate("B", drawn(tone, "inverting-high-pass").netlist()))
        desk.send(messages.KeepCandidate("C", drawn(tone, opamp="TL072").netlist()))
        give_up_s = time.monotonic() + 120.0
        while len(told) < 3 or not all(c.ready for c in told[-1].candidates):
            assert time.monotonic() < give_up_s
            listen()
            if ByHand.player is not None:
                ByHand.player.fill(block)
            time.sleep(BLOCK / RATE_HZ)
        began_s = time.monotonic()
        for number in range(round(SECONDS * RATE_HZ / BLOCK)):
            now_s = number * BLOCK / RATE_HZ
            if now_s >= next_s:
                order = an_order(dice, tone)
                desk.send(order)
                last, next_s = f"{now_s:.3f} s {order!r:.80}", now_s + dice.uniform(*pause_s)
            assert ByHand.player is not None
            ByHand.player.fill(block)
            loud_db = hiss.db(block)
            if now_s > 3.0 and loud_db > -90.0:
                clicks.append(f"{loud_db:.0f} dB at {now_s:.3f} s after {last}")
            listen()
            time.sleep(max(0.0, began_s + now_s / SPEED - time.monotonic()))
    finally:
        desk.send(messages.Quit())
        thread.join(30)
        host.close()
    assert 0.1 < hiss.level < 0.9
    assert told[-1].dropouts == 0, "the disk was late: the machine is too busy to judge"
    assert clicks == []
