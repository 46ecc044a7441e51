"""The response as a table: for a JSON object, for lines on a screen, for comma-separated values."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from preview.analysis.response import analyse, heard
from preview.circuit.netlist import Netlist
from preview.dsp.bilinear import sections
from preview.errors import CircuitError
from preview.network.operating import Bound, operating_point, small_signal
from preview.network.statespace import Topology
from preview.network.transfer import input_impedance, output_impedance
from preview.values.levels import format_volts
from preview.values.notation import format_value
from preview.values.quality import Quality

__all__ = ["PREFERRED_HZ", "ResponseTable", "second_order_sections", "tabulate"]

Real = NDArray[np.float64]

_THIRD_OCTAVES = (1.0, 1.25, 1.6, 2.0, 2.5, 3.15, 4.0, 5.0, 6.3, 8.0)
PREFERRED_HZ = tuple(round(f * 10.0**d, 6) for d in (1, 2, 3, 4) for f in _THIRD_OCTAVES)[:34]
"""Third-octave preferred frequencies of ISO 266, 10 Hz to 20 kHz [Hz]."""

_NO_OHM = 1e-9
"""An impedance below this is 0 and rounding [ohm]."""
_COLUMNS = (
    "frequency_hz",
    "gain_db",
    "phase_deg",
    "group_delay_s",
    "input_impedance_ohm",
    "input_impedance_deg",
    "output_impedance_ohm",
    "output_impedance_deg",
)

_BOUNDS: dict[Bound, str] = {
    "high": "highest output voltage",
    "low": "lowest output voltage",
    "source": "largest output current",
    "sink": "largest current into its output",
}


@dataclass(frozen=True, slots=True)
class ResponseTable:
    """A response at some frequencies; arrays have shape (f,)."""

    columns: dict[str, Real]
    """Values by name with unit: frequency, gain, phase, group delay, impedances (magnitude and angle)."""
    corners_hz: tuple[float, ...]
    """Corners [Hz]."""
    passband_gain_db: float
    """Gain of the passband [dB]."""
    dc_output_v: float
    """Voltage of the output without a signal [V]; nan where it has no single one."""
    dc_limiting: dict[str, Bound]
    """Op-amps that rest at a limit without a signal, and at which."""

    def with_columns(self, columns: dict[str, Real]) -> ResponseTable:
        """The same table with further columns."""
        return replace(self, columns={**self.columns, **columns})

    def as_object(self) -> dict[str, object]:
        """The table with its unit in each key."""
        return {
            **{name: [float(v) for v in values] for name, values in self.columns.items()},
            "corners_hz": list(self.corners_hz),
            "passband_gain_db": self.passband_gain_db,
            "dc_output_v": self.dc_output_v,
            "dc_limiting": dict(self.dc_limiting),
        }

    def as_csv(self) -> str:
        """Comma-separated values with a line of names; what is not a finite number is left empty."""
        rows = zip(*self.columns.values(), strict=True)
        lines = [",".join(self.columns)]
        lines += [",".join(f"{v:.10g}" if math.isfinite(v) else "" for v in row) for row in rows]
        return "\n".join(lines)

    def as_lines(self) -> list[str]:
        """The table for a screen."""
        corners = ", ".join(format_value(f, "frequency") for f in self.corners_hz) or "none"
        c = self.columns
        heads = ["frequency", "gain", "phase", "delay", "Z in", "Z out"]
        heads += ["noise"] if "noise_v_rthz" in c else []
        lines = [
            f"passband gain {round(self.passband_gain_db, 2) + 0.0:.2f} dB, corners {corners}",
            self._rest(),
            "".join(f"{head:>12}" for head in heads),
        ]
        for i, f in enumerate(c["frequency_hz"]):
            cells = [
                format_value(float(f), "frequency"),
                f"{c['gain_db'][i]:.3f} dB",
                f"{c['phase_deg'][i]:.2f} deg",
                _or_dash(float(c["group_delay_s"][i]), "time"),
                _or_dash(float(c["input_impedance_ohm"][i]), "resistance"),
                _or_dash(float(c["output_impedance_ohm"][i]), "resistance"),
            ]
            if "noise_v_rthz" in c:
                cells.append(f"{format_volts(float(c['noise_v_rthz'][i]))}/√Hz")
            lines.append("".join(f"{cell:>12}" for cell in cells))
        return lines

    def _rest(self) -> str:
        """Where it rests, in words."""
        if not math.isfinite(self.dc_output_v):
            return "without a signal the output comes to no rest"
        words = [f"without a signal {format_volts(self.dc_output_v)} at the output"]
        words += [f"{name} rests at its {_BOUNDS[bound]}" for name, bound in self.dc_limiting.items()]
        return "; ".join(words)


def _or_dash(value: float, kind: str) -> str:
    if not math.isfinite(value):
        return "-"
    if kind == "time":
        return format_value(value, "time")
    return format_value(value if value > _NO_OHM else 0.0, "resistance")


def tabulate(
    netlist: Netlist,
    frequency_hz: Sequence[float] = PREFERRED_HZ,
    *,
    sample_rate_hz: float | None = None,
    quality: Quality = Quality.STANDARD,
) -> ResponseTable:
    """The response at some frequencies.

    Parameters
    ----------
    netlist : Netlist
        Checked circuit.
    frequency_hz : sequence of float
        Where [Hz].
    sample_rate_hz : float, optional
        Rate at which the running computation is asked [Hz]; None for the exact circuit. The impedances
        are the exact circuit's in both cases.
    quality : Quality
        Quality of the running computation.

    Raises
    ------
    CircuitError
        The circuit cannot be computed.
    """
    f = np.asarray(frequency_hz, dtype=np.float64)
    exact = analyse(netlist, f)
    gain_db, phase_deg, delay_s = exact.gain_db, exact.phase_deg, exact.group_delay_s
    corners_hz = exact.corners_hz
    passband_gain_db = exact.passband_gain_db
    if sample_rate_hz is not None:
        gain = heard(netlist, sample_rate_hz, quality, f)
        with np.errstate(divide="ignore"):
            gain_db = 20.0 * np.log10(np.abs(gain))
        phase_deg = np.degrees(np.angle(gain))
        step = 1e-4
        turn = np.angle(
            heard(netlist, sample_rate_hz, quality, f * (1 + step))
            / heard(netlist, sample_rate_hz, quality, f * (1 - step))
        )
        delay_s = -turn / (2.0 * np.pi * f * 2.0 * step)
        corners_hz = tuple(
            corner
            for near in exact.corners_hz
            if near < 0.45 * sample_rate_hz
            and (corner := _heard_corner(netlist, sample_rate_hz, quality, near, passband_gain_db))
            is not None
        )
    z_in, z_out = input_impedance(netlist, f), output_impedance(netlist, f)
    columns = (
        f,
        gain_db,
        phase_deg,
        delay_s,
        np.abs(z_in),
        np.degrees(np.angle(z_in)),
        np.abs(z_out),
        np.degrees(np.angle(z_out)),
    )
    named = {
        name: np.asarray(column, dtype=np.float64) for name, column in zip(_COLUMNS, columns, strict=True)
    }
    try:
        rest = operating_point(netlist)
    except CircuitError:
        return ResponseTable(named, corners_hz, passband_gain_db, math.nan, {})
    return ResponseTable(
        named, corners_hz, passband_gain_db, rest.volts[netlist.output_node], dict(rest.limiting)
    )


def _heard_corner(
    netlist: Netlist, sample_rate_hz: float, quality: Quality, near_hz: float, passband_gain_db: float
) -> float | None:
    """Where the running computation is 3.01 dB below the passband, close to the circuit's own corner [Hz]."""

    def above_db(f: float) -> float:
        gain = abs(complex(heard(netlist, sample_rate_hz, quality, np.array([f]))[0]))
        return 20.0 * math.log10(max(gain, 1e-30)) - passband_gain_db + 10.0 * math.log10(2.0)

    low, high = near_hz * 0.98, near_hz * 1.02
    at_low, at_high = above_db(low), above_db(high)
    if at_low * at_high > 0.0:
        return None
    for _ in range(50):
        middle = math.sqrt(low * high)
        at_middle = above_db(middle)
        if at_middle * at_low > 0.0:
            low, at_low = middle, at_middle
        else:
            high = middle
    return math.sqrt(low * high)


def second_order_sections(
    netlist: Netlist, sample_rate_hz: float, *, prewarp_hz: float | None = None
) -> list[list[float]]:
    """IIR second-order sections of the stage, rows ``b0 b1 b2 a0 a1 a2``, by the bilinear transform.

    Raises
    ------
    CircuitError
        There are none for it.
    """
    linear = small_signal(netlist)
    topology = Topology(linear)
    A, B, C, D = topology.evaluate(topology.values_of(linear)[None]).closed()
    rows = sections(A[0], B[0], C[0], D[0], sample_rate_hz, prewarp_hz=prewarp_hz)
    return [[float(v) for v in row] for row in rows]
