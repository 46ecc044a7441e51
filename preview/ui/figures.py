"""The figures that the desk computes itself, in a thread: response, corners, heard deviation."""

from __future__ import annotations

import asyncio
import math
from collections.abc import Callable
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from preview.circuit.netlist import Netlist
from preview.errors import PreviewError
from preview.session import Session
from preview.values.quality import Quality

__all__ = ["FigureKeeper", "FigurePair", "Figures", "MakeFigures", "compute_figures", "heard_band_hz"]

LOWEST_HZ, HIGHEST_HZ = 10.0, 100e3
"""The frequency axis of the curve [Hz]."""
_POINTS = 241
_SETTLE_S = 0.04
"""Changes within this time become one computation [s]."""
_MOST_KEPT = 64


@dataclass(frozen=True, slots=True)
class Figures:
    """What one circuit does, in figures."""

    frequency_hz: NDArray[np.float64] = field(default_factory=lambda: np.empty(0))
    """Frequencies of the curve, rising [Hz]."""
    gain_db: NDArray[np.float64] = field(default_factory=lambda: np.empty(0))
    """Gain at each [dB]."""
    phase_deg: NDArray[np.float64] = field(default_factory=lambda: np.empty(0))
    """Phase at each [degrees]."""
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


MakeFigures = Callable[[Netlist, float, Quality], Figures]
"""Netlist, sample rate [Hz] (0 where not known), quality -> figures. Runs in a thread of its own."""


@dataclass(slots=True)
class FigurePair:
    """Figures of the circuit now and of the circuit 'before'."""

    now: Figures | None = None
    """None until they are computed."""
    before: Figures | None = None
    """None until they are computed."""


def heard_band_hz(sample_rate_hz: float) -> float:
    """Upper end of the band in which the heard deviation is stated [Hz]."""
    return min(20e3, 0.45 * sample_rate_hz)


def compute_figures(netlist: Netlist, sample_rate_hz: float, quality: Quality) -> Figures:
    """The figures of a circuit; one that cannot be computed gives its reason as ``problem``."""
    # Imported at the first use, in the worker's thread, so that the desk is on the screen sooner.
    from preview.analysis.response import analyse, response_error_db

    try:
        found = analyse(netlist, np.geomspace(LOWEST_HZ, HIGHEST_HZ, _POINTS))
        error_db = response_error_db(netlist, sample_rate_hz, quality) if sample_rate_hz > 0.0 else None
    except PreviewError as error:
        return Figures(problem=str(error))
    return Figures(
        frequency_hz=found.frequency_hz,
        gain_db=found.gain_db,
        phase_deg=found.phase_deg,
        corners_hz=found.corners_hz,
        passband_gain_db=found.passband_gain_db,
        error_db=error_db,
        sample_rate_hz=sample_rate_hz,
        quality=quality,
    )


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
        self._kept: dict[tuple[Netlist, float, Quality], Figures] = {}

    def want(self) -> None:
        """Something may have changed."""
        self._wanted.set()

    async def run(
        self, sessions: Callable[[], tuple[Session, Session]], deliver: Callable[[Figures, Figures], None]
    ) -> None:
        """For ever: figures of the sessions now and before, delivered in the event loop."""
        while True:
            await self._wanted.wait()
            await asyncio.sleep(_SETTLE_S)
            self._wanted.clear()
            now, before = sessions()
            deliver(await self._of(now), await self._of(before))

    async def _of(self, session: Session) -> Figures:
        try:
            key = (session.netlist(), self.sample_rate_hz, session.quality)
        except PreviewError as error:
            return Figures(problem=str(error))
        found = self._kept.get(key)
        if found is None:
            found = await asyncio.to_thread(self._make, *key)
            if len(self._kept) >= _MOST_KEPT:
                self._kept.clear()
            self._kept[key] = found
        return found
