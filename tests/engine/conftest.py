"""A recording in memory and a circuit without surprises, to see what the player itself does."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from pathlib import Path

import numpy as np
import pytest
from numpy.typing import NDArray

from preview.audio.prefetch import Prefetch
from preview.audio.sink import FileSink
from preview.circuit.opamp import OpAmpReading
from preview.engine.player import Player
from preview.engine.process import EngineConfig, EngineProcess
from preview.engine.readings import FaultReading
from preview.meters.level import LevelMeter
from preview.session import Session
from preview.values.quality import Quality

RATE_HZ = 8000
TONE_RATE_HZ = 48000


class MemorySource:
    """A recording in memory."""

    def __init__(self, samples: NDArray[np.float64]) -> None:
        self._samples = samples
        self._next = 0
        self.sample_rate_hz = RATE_HZ

    @property
    def channels(self) -> int:
        return int(self._samples.shape[1])

    @property
    def frames(self) -> int:
        return len(self._samples)

    def read(self, samples_out: NDArray[np.float64]) -> int:
        count = min(len(samples_out), self.frames - self._next)
        samples_out[:count] = self._samples[self._next : self._next + count]
        self._next += count
        return count

    def seek(self, frame: int) -> None:
        self._next = frame

    def close(self) -> None:
        pass


class DelayCircuit:
    """A gain and a delay, both known; bypass is immediate."""

    def __init__(self, gain: float = 2.0, latency_frames: int = 37, channels: int = 1) -> None:
        self.gain = gain
        self.latency_frames = latency_frames
        self.gliding = False
        self.swapping = False
        self.fault: FaultReading | None = None
        self.hurry = 1
        self.letter = "A"
        self.null: tuple[str, str] | None = None
        self.match_gain = 1.0
        self.fail_with: float | None = None
        self.resets = 0
        self._events, self._peak_v = 0, 0.0
        self._bypass = False
        self._held = np.zeros((latency_frames, channels))

    def process(self, volts_in: NDArray[np.float64], volts_out: NDArray[np.float64]) -> None:
        both = np.concatenate([self._held, volts_in])
        self._held = both[len(volts_in) :]
        volts_out[:] = both[: len(volts_in)] * (1.0 if self._bypass else self.gain)
        self._events += 1
        self._peak_v = max(self._peak_v, float(np.abs(volts_out).max(initial=0.0)))
        self._left = volts_out.copy()
        if self.fail_with is not None:
            volts_out[-1] = self.fail_with

    @property
    def heard(self) -> NDArray[np.float64] | None:
        return None if self.match_gain == 1.0 else self._left * self.match_gain

    def reset(self) -> None:
        self._held[:] = 0.0
        self.fault = None
        self.resets += 1

    def set_bypass(self, on: bool) -> None:
        self._bypass = on

    def readings(self) -> tuple[OpAmpReading, ...]:
        """It claims one clip event a block."""
        return (OpAmpReading("U1", self._peak_v, 1.0, -1.0, 3.0, self._events, 0.001, 5.0),)

    def clear_readings(self) -> None:
        self._events, self._peak_v = 0, 0.0


class Rig:
    """A player on a memory recording, driven by hand."""

    def __init__(self, samples: NDArray[np.float64], *, loop: bool, volume_db: float, in_volts: bool) -> None:
        self.samples = samples
        self.reader = Prefetch(MemorySource(samples), loop=loop)
        channels = samples.shape[1]
        self.circuit = DelayCircuit(channels=channels)
        self.player = Player(
            self.reader,
            sample_rate_hz=RATE_HZ,
            channels=channels,
            full_scale_v=4.0,
            meters=(LevelMeter(RATE_HZ, channels), LevelMeter(RATE_HZ, channels)),
            volume_db=volume_db,
            max_frames=256,
            in_volts=in_volts,
        )
        self.player.inbox.append(self.take_circuit)

    def take_circuit(self) -> None:
        """Give the player its circuit."""
        self.player.take_circuit(self.circuit, Quality.STANDARD)

    def hear(self, frames: int, *, block: int = 64, channels: int = 1) -> NDArray[np.float32]:
        """The next frames as the device would get them; the disk is never late."""
        out = np.zeros((frames, channels), np.float32)
        for first in range(0, frames, block):
            assert self.reader.wait_ready(frames=4 * block)
            self.player.fill(out[first : first + block])
        return out


@pytest.fixture
def make_rig() -> Iterator[Callable[..., Rig]]:
    """Makes rigs and closes their readers."""
    rigs: list[Rig] = []

    def make(
        samples: NDArray[np.float64] | None = None,
        *,
        loop: bool = False,
        volume_db: float = 0.0,
        in_volts: bool = False,
    ) -> Rig:
        if samples is None:
            samples = np.random.default_rng(7).uniform(-0.4, 0.4, (4000, 1))
        rigs.append(Rig(samples, loop=loop, volume_db=volume_db, in_volts=in_volts))
        return rigs[-1]

    yield make
    for rig in rigs:
        rig.reader.close()


@pytest.fixture
def tone(tmp_path: Path) -> Path:
    """Two seconds of a 200 Hz sine, 0.1 of full scale, mono."""
    path = tmp_path / "tone.wav"
    with FileSink(path, sample_rate_hz=TONE_RATE_HZ, channels=1) as sink:
        sink.write(0.1 * np.sin(2 * np.pi * 200 * np.arange(2 * TONE_RATE_HZ) / TONE_RATE_HZ)[:, np.newaxis])
    return path


@pytest.fixture
def start(tmp_path: Path) -> Iterator[Callable[..., EngineProcess]]:
    """Starts engines on the silent clock and ends them."""
    engines: list[EngineProcess] = []

    def make(session: Session, **changes: object) -> EngineProcess:
        config = EngineConfig(session=session, silent=True, log=tmp_path / "engine.log", **changes)  # type: ignore[arg-type]
        engines.append(EngineProcess.start(config))
        return engines[-1]

    yield make
    for engine in engines:
        engine.close()
