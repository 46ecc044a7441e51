"""The figures that the desk computes itself, in a thread: response, corners, heard deviation, noise."""

from __future__ import annotations

import asyncio
import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from preview.circuit.drive import IDEAL_SOURCE, NO_LOAD
from preview.circuit.netlist import Netlist
from preview.circuit.opamp import Limit
from preview.errors import PreviewError
from preview.session import Session
from preview.values.quality import Quality

__all__ = [
    "FigureJob",
    "FigureKeeper",
    "FigureSet",
    "Figures",
    "MakeFigures",
    "compute_figures",
    "heard_band_hz",
    "job_of",
]

Real = NDArray[np.float64]

LOWEST_HZ, HIGHEST_HZ = 1.0, 1e6
"""The frequency axis [Hz]."""
_POINTS = 361
_SETTLE_S = 0.01
"""Changes within this time become one computation [s]."""
_MOST_KEPT = 64


def _nothing() -> Real:
    return np.empty(0)


@dataclass(frozen=True, slots=True)
class Figures:
    """What one circuit does, in figures."""

    frequency_hz: Real = field(default_factory=_nothing)
    """Frequencies of the curves, rising [Hz]."""
    gain_db: Real = field(default_factory=_nothing)
    """Gain at each, from the source to the loaded output [dB]."""
    phase_deg: Real = field(default_factory=_nothing)
    """Phase at each [degrees]."""
    drawn_db: Real | None = None
    """Gain as drawn, from an ideal source and without a load [dB]; None where that is the same circuit."""
    heard_db: Real | None = None
    """Gain of the running computation [dB], NaN above the band that it covers; None while the rate is unknown."""
    noise_v_rthz: Real | None = None
    """Noise density at the output [V/sqrt(Hz)]; None where it is not known."""
    noise_vrms: float = math.nan
    """Noise at the output, 20 Hz to 20 kHz [V rms]."""
    rest_v: Mapping[str, float] = field(default_factory=dict)
    """Voltage of every node without a signal [V]."""
    offset_v: Mapping[str, float] = field(default_factory=dict)
    """The part of it that the op-amps' offsets and input currents make [V]."""
    speed_db: float = 0.0
    """Largest change of the gain up to 20 kHz by the op-amps' finite speed [dB]."""
    corners_hz: tuple[float, ...] = ()
    """Frequencies 3 dB below the passband gain [Hz]."""
    passband_gain_db: float = math.nan
    """Gain in the passband [dB]."""
    error_db: float | None = None
    """Largest deviation of the heard response from the circuit's [dB]; None while the rate is unknown."""
    sample_rate_hz: float = 0.0
    """Sample rate for which that deviation holds [Hz]."""
    quality: Quality = Quality.STANDARD
    """Quality for which it holds."""
    problem: str = ""
    """Why there are no figures; empty where there are."""

    def at(self, values: Real | None, frequency_hz: float) -> float:
        """One of the curves at a frequency; NaN outside of it."""
        if values is None or len(self.frequency_hz) == 0:
            return math.nan
        places = np.log(self.frequency_hz)
        return float(np.interp(math.log(frequency_hz), places, values, left=math.nan, right=math.nan))


@dataclass(frozen=True, slots=True)
class FigureJob:
    """What is to be computed."""

    netlist: Netlist
    """The circuit as it is driven and loaded."""
    drawn: Netlist | None = None
    """The circuit as drawn; None where it is the same."""
    sample_rate_hz: float = 0.0
    """Sample rate of the running computation [Hz]; 0 where it is not known."""
    quality: Quality = Quality.STANDARD
    """Its quality."""


MakeFigures = Callable[[FigureJob], Figures]
"""Runs in a thread of its own."""


@dataclass(slots=True)
class FigureSet:
    """Figures of the circuit now, of the circuit 'before' and of the one before the last change."""

    now: Figures | None = None
    """None until they are computed."""
    before: Figures | None = None
    """None until they are computed."""
    last: Figures | None = None
    """None until they are computed, and where nothing was changed."""


def heard_band_hz(sample_rate_hz: float) -> float:
    """Upper end of the band in which the heard deviation is stated [Hz]."""
    return min(20e3, 0.45 * sample_rate_hz)


def job_of(session: Session, sample_rate_hz: float) -> FigureJob:
    """What is to be computed for a session; raises CircuitError."""
    drawn = None
    if (session.source, session.load) != (IDEAL_SOURCE, NO_LOAD):
        drawn = replace(session, source=IDEAL_SOURCE, load=NO_LOAD).netlist()
    return FigureJob(session.netlist(), drawn, sample_rate_hz, session.quality)


def compute_figures(job: FigureJob) -> Figures:
    """The figures of a circuit; one that cannot be computed gives its reason as ``problem``."""
    # Imported at the first use, in the worker's thread, so that the desk is on the screen sooner.
    from preview.analysis.response import analyse, heard, response_error_db
    from preview.network.noise import OutputNoise
    from preview.network.operating import operating_point
    from preview.network.transfer import response

    frequency_hz = np.geomspace(LOWEST_HZ, HIGHEST_HZ, _POINTS)
    rate_hz = job.sample_rate_hz
    error_db = heard_db = drawn_db = None
    try:
        found = analyse(job.netlist, frequency_hz)
        if job.drawn is not None:
            drawn_db = _db(response(job.drawn, frequency_hz))
        if rate_hz > 0.0:
            error_db = response_error_db(job.netlist, rate_hz, job.quality)
            heard_db = np.full(len(frequency_hz), math.nan)
            covered = frequency_hz <= 0.45 * rate_hz
            heard_db[covered] = _db(heard(job.netlist, rate_hz, job.quality, frequency_hz[covered]))
        noise = OutputNoise(job.netlist)
        noise_v_rthz, noise_vrms = noise.spectrum(frequency_hz).output_v_rthz, noise.total().output_vrms
        rest_v = operating_point(job.netlist).volts
        true_v = operating_point(_without(job.netlist, "offset")).volts
        audio = frequency_hz[(frequency_hz >= 20.0) & (frequency_hz <= 20e3)]
        change_db = _db(response(job.netlist, audio)) - _db(response(_without(job.netlist, "speed"), audio))
    except PreviewError as error:
        return Figures(problem=str(error))
    return Figures(
        frequency_hz=found.frequency_hz,
        gain_db=found.gain_db,
        phase_deg=found.phase_deg,
        drawn_db=drawn_db,
        heard_db=heard_db,
        corners_hz=found.corners_hz,
        passband_gain_db=found.passband_gain_db,
        error_db=error_db,
        sample_rate_hz=rate_hz,
        quality=job.quality,
        noise_v_rthz=noise_v_rthz,
        noise_vrms=noise_vrms,
        rest_v=rest_v,
        offset_v={node: volts - true_v[node] for node, volts in rest_v.items()},
        speed_db=float(np.abs(change_db[np.isfinite(change_db)]).max(initial=0.0)),
    )


def _without(netlist: Netlist, limit: Limit) -> Netlist:
    """The circuit with one limit or fault taken away from every op-amp."""
    sites = (replace(site, model=site.model.without((limit,))) for site in netlist.opamps)
    return replace(netlist, opamps=tuple(sites))


def _db(gain: NDArray[np.complex128]) -> Real:
    with np.errstate(divide="ignore"):
        return np.asarray(20.0 * np.log10(np.abs(gain)), dtype=np.float64)


class FigureKeeper:
    """Computes figures whenever they are wanted: of the newest state only, in one thread at a time.

    Parameters
    ----------
    make : callable
        Computes the figures of one circuit.
    """

    def __init__(self, make: MakeFigures) -> None:
        self.sample_rate_hz = 0.0
        self._make = make
        self._wanted = asyncio.Event()
        self._kept: dict[FigureJob, Figures] = {}

    def want(self) -> None:
        """Something may have changed."""
        self._wanted.set()

    async def run(
        self,
        sessions: Callable[[], tuple[Session, Session, Session | None]],
        deliver: Callable[[FigureSet], None],
    ) -> None:
        """For ever: figures of the sessions now, before and last, delivered in the event loop as they come."""
        found = FigureSet()
        while True:
            await self._wanted.wait()
            await asyncio.sleep(_SETTLE_S)
            self._wanted.clear()
            now, before, last = sessions()
            found = FigureSet(await self.of(now), found.before, found.last)
            deliver(found)  # what a key has changed comes first, the ghosts after it
            found = FigureSet(found.now, await self.of(before), await self.of(last) if last else None)
            deliver(found)

    async def of(self, session: Session) -> Figures:
        """The figures of a session, computed in a thread unless they are still known."""
        try:
            job = job_of(session, self.sample_rate_hz)
        except PreviewError as error:
            return Figures(problem=str(error))
        found = self._kept.get(job)
        if found is None:
            found = await asyncio.to_thread(self._make, job)
            if len(self._kept) >= _MOST_KEPT:
                self._kept.clear()
            self._kept[job] = found
        return found
