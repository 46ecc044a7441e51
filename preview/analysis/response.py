"""The response of a stage: exact, and as the running computation makes it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from preview.circuit.netlist import Netlist
from preview.dsp.oversample import PASSBAND_RATIO, design, factor_for
from preview.dsp.smallsignal import following_step
from preview.network import transfer
from preview.network.operating import small_signal
from preview.network.stability import check_stable
from preview.values.quality import Quality

__all__ = ["Deviation", "Response", "analyse", "deviation", "find_corners", "heard", "response_error_db"]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]

SEARCH_HZ = (1e-3, 1e8)
"""Range in which corners are looked for [Hz]."""
PASSBAND_HZ = 100e3
"""Up to where the passband's gain is looked for, unless it is still rising there [Hz]."""
STEEP = 1e-3
"""A gain that rises by more than this share from one frequency of the search to the next is not flat."""


@dataclass(frozen=True, slots=True)
class Response:
    """Small-signal response of the circuit as drawn, driven and loaded."""

    frequency_hz: Real
    """Frequencies [Hz], shape (f,)."""
    gain: Complex
    """Output volts per source volt, shape (f,)."""
    group_delay_s: Real
    """Group delay [s], shape (f,)."""
    corners_hz: tuple[float, ...]
    """Frequencies 3.01 dB below the passband gain, rising [Hz]."""
    passband_gain_db: float
    """Largest gain [dB]."""

    @property
    def gain_db(self) -> Real:
        """Gain [dB], shape (f,)."""
        with np.errstate(divide="ignore"):
            return np.asarray(20.0 * np.log10(np.abs(self.gain)), dtype=np.float64)

    @property
    def phase_deg(self) -> Real:
        """Phase in -180..180 [degrees], shape (f,)."""
        return np.asarray(np.angle(self.gain, deg=True), dtype=np.float64)


def analyse(netlist: Netlist, frequency_hz: ArrayLike | None = None) -> Response:
    """Exact response of a circuit to a small signal around its operating point.

    Parameters
    ----------
    netlist : Netlist
        Checked circuit.
    frequency_hz : array_like, optional
        Frequencies [Hz]; 10 Hz to 100 kHz, 24 a decade, where not given.

    Raises
    ------
    CircuitError
        The circuit cannot be solved or is not stable.
    """
    netlist = small_signal(netlist)
    check_stable(netlist)
    f = (
        np.geomspace(10.0, 100e3, 97)
        if frequency_hz is None
        else np.atleast_1d(np.asarray(frequency_hz, float))
    )
    passband, corners = find_corners(netlist)
    return Response(
        frequency_hz=f,
        gain=transfer.response(netlist, f),
        group_delay_s=transfer.group_delay(netlist, f),
        corners_hz=corners,
        passband_gain_db=passband,
    )


def find_corners(netlist: Netlist) -> tuple[float, tuple[float, ...]]:
    """Passband gain [dB] and the frequencies at which it has fallen by the square root of two [Hz].

    The passband gain is the largest up to 100 kHz: a crest that a real op-amp adds far above is not the passband of
    the stage. Where the gain still rises steeply there it is the largest at any frequency. A gain that still rises
    at an end of the range searched (an integrator, a differentiator) has no passband: the largest gain found is
    given, and no corner.
    """
    linear = small_signal(netlist)

    def magnitude(f: Real) -> Real:
        return np.abs(transfer.response(linear, f))

    f = np.geomspace(*SEARCH_HZ, 1101)
    gain = magnitude(f)
    top = _top(f, gain)
    next_to_it = gain[1] if top == 0 else gain[-2]
    if top in (0, len(f) - 1) and gain[top] > 1.001 * next_to_it:
        return float(20.0 * np.log10(gain[top])), ()
    lower, upper = f[max(top - 1, 0)], f[min(top + 1, len(f) - 1)]
    for _ in range(4):
        inside = np.geomspace(lower, upper, 33)
        values = magnitude(inside)
        best = int(np.argmax(values))
        if values[best] > gain[top]:  # a resonance may be narrower than the grid: its top is put into it
            f[top], gain[top] = inside[best], values[best]
        lower, upper = inside[max(best - 1, 0)], inside[min(best + 1, 32)]
    peak = float(gain[top])
    if peak <= 0.0:
        return float("-inf"), ()
    limit = peak / np.sqrt(2.0)
    above = gain >= limit
    corners = []
    for i in np.flatnonzero(above[1:] != above[:-1]):
        low, high, rising = f[i], f[i + 1], bool(above[i + 1])
        for _ in range(9):
            inside = np.geomspace(low, high, 33)
            over = magnitude(inside) >= limit
            over[0], over[-1] = not rising, rising
            at = int(np.argmax(over == rising))
            low, high = inside[at - 1], inside[at]
        corners.append(float(np.sqrt(low * high)))
    return float(20.0 * np.log10(peak)), tuple(corners)


def _top(f: Real, gain: Real) -> int:
    """Where the passband's gain is read off.

    Where the gain goes on rising a little beyond 100 kHz, that is where it is flattest: at the end of a high-pass's
    rise, or before the rise towards a crest far above.
    """
    edge = int(np.searchsorted(f, PASSBAND_HZ))
    top = int(np.argmax(gain[: edge + 1]))
    if top < edge:
        return top
    slope = np.diff(np.log(np.maximum(gain, 1e-300)))
    if slope[edge - 1] > STEEP:
        return int(np.argmax(gain))
    at = edge
    if slope[edge] > slope[edge - 1]:
        while at > 1 and 0.0 < slope[at - 2] <= slope[at - 1]:
            at -= 1
        return at
    while at < len(slope) and 0.0 < slope[at] <= slope[at - 1]:
        at += 1
    return at


def heard(netlist: Netlist, sample_rate_hz: float, quality: Quality, frequency_hz: ArrayLike) -> Complex:
    """Response of the running computation with its delay taken out, shape (f,), complex.

    Computed from the matrices and filters that the running computation uses: interpolation, the four-sample mean
    of the signal, the circuit's step, the mean of the output over a step, decimation.
    """
    f = np.atleast_1d(np.asarray(frequency_hz, dtype=np.float64))
    filters = design(factor_for(quality, sample_rate_hz))
    step_s = 1.0 / (sample_rate_hz * filters.factor)
    M = following_step(netlist, step_s)
    size = M.shape[0] - 1
    theta = 2.0 * np.pi * f * step_s
    z = np.exp(1j * theta)
    mean = (13.0 * (1.0 + z) - 1.0 / z - z * z) / 24.0
    inputs = np.stack([np.ones_like(z), mean, z], axis=1)
    held = z[:, None, None] * np.eye(size) - M[:size, :size]
    states = np.linalg.solve(held, (inputs @ M[:size, size:].T)[..., None])[..., 0]
    out = states @ M[size, :size] + inputs @ M[size, size:]
    centred = out * np.exp(-0.5j * theta)
    ratio = f / sample_rate_hz
    return np.asarray(
        filters.up_response(ratio) * centred * filters.down_response(ratio), dtype=np.complex128
    )


@dataclass(frozen=True, slots=True)
class Deviation:
    """How far the running computation is from the exact circuit."""

    gain_db: float
    """Largest deviation of the gain [dB]."""
    phase_deg: float
    """Largest deviation of the phase [degrees]."""
    from_hz: float
    """Lowest frequency looked at [Hz]."""
    to_hz: float
    """Highest frequency looked at [Hz]."""


def deviation(netlist: Netlist, sample_rate_hz: float, quality: Quality) -> Deviation:
    """Largest deviation of the heard from the exact response, 10 Hz to 20 kHz or the edge of the flat band.

    At rates of logs it begins at a hundredth of that edge.

    Where the circuit's own gain is more than 80 dB below its largest there is nothing to hear and to compare.
    """
    netlist = small_signal(netlist)
    top = min(20e3, PASSBAND_RATIO * sample_rate_hz)
    low = min(10.0, 0.01 * top)
    f = np.geomspace(low, top, 160)
    exact = transfer.response(netlist, f)
    loud = np.abs(exact) > 1e-4 * np.abs(exact).max()
    if not loud.any():
        return Deviation(0.0, 0.0, low, top)
    ratio = heard(netlist, sample_rate_hz, quality, f[loud]) / exact[loud]
    return Deviation(
        float(np.abs(20.0 * np.log10(np.abs(ratio))).max()),
        float(np.abs(np.angle(ratio, deg=True)).max()),
        low,
        top,
    )


def response_error_db(netlist: Netlist, sample_rate_hz: float, quality: Quality) -> float:
    """Largest deviation of the heard from the exact gain, 10 Hz to 20 kHz or the edge of the flat band [dB]."""
    return deviation(netlist, sample_rate_hz, quality).gain_db
