"""The noise of a stage as a report: what leaves it, and which part makes how much of it."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from preview.circuit.netlist import Netlist
from preview.network.noise import AUDIO_BAND_HZ, TEMPERATURE_K, NoiseTotal, OutputNoise
from preview.values.levels import dbu_from_vrms, format_db, format_volts
from preview.values.notation import format_value

__all__ = ["NoiseBudget", "NoiseShare", "noise_budget"]

Real = NDArray[np.float64]

_SHOWN = 12
"""Most contributors that the lines for a screen name."""
_NAMED_RATIO = 5e-4
"""Least share of the power that has a line of its own there."""


@dataclass(frozen=True, slots=True)
class NoiseShare:
    """What one source makes of the noise at the output."""

    designator: str
    """R1, U1 ..."""
    kind: str
    """``thermal``, ``voltage``, ``current +``, ``current -`` or ``shot``."""
    vrms: float
    """Its noise alone [V rms]."""
    power_ratio: float
    """Its share of the power of all."""


@dataclass(frozen=True, slots=True)
class NoiseBudget:
    """Density at some frequencies, shape (f,), and total over a band."""

    output_v_rthz: Real
    """Density at the output [V/sqrt(Hz)]."""
    input_v_rthz: Real
    """The same as if it came from the signal's source [V/sqrt(Hz)]."""
    total: NoiseTotal
    """Noise over the band."""

    @property
    def shares(self) -> tuple[NoiseShare, ...]:
        """Every source, the largest first."""
        of_all = max(self.total.output_vrms**2, np.finfo(float).tiny)
        shares = [
            NoiseShare(source.designator, source.kind, float(vrms), float(vrms**2 / of_all))
            for source, vrms in zip(self.total.sources, self.total.source_vrms, strict=True)
        ]
        return tuple(sorted(shares, key=lambda share: -share.vrms))

    @property
    def columns(self) -> dict[str, Real]:
        """Densities by name with unit."""
        return {"noise_v_rthz": self.output_v_rthz, "noise_input_v_rthz": self.input_v_rthz}

    def as_object(self) -> dict[str, object]:
        """Total and contributors with the unit in each key."""
        return {
            "noise_total_vrms": self.total.output_vrms,
            "noise_total_dbu": dbu_from_vrms(self.total.output_vrms),
            "noise_band_hz": list(self.total.band_hz),
            "noise_temperature_k": TEMPERATURE_K,
            "contributors": [
                {"designator": s.designator, "noise": s.kind, "vrms": s.vrms, "power_ratio": s.power_ratio}
                for s in self.shares
            ],
        }

    def as_lines(self) -> list[str]:
        """Total and contributors for a screen."""
        low, high = (format_value(f, "frequency") for f in self.total.band_hz)
        level = format_db(dbu_from_vrms(self.total.output_vrms), "dBu")
        lines = [
            f"noise {low} to {high}: {format_volts(self.total.output_vrms)} rms, {level}, parts at {TEMPERATURE_K:g} K"
        ]
        shares = self.shares
        named = [share for share in shares[:_SHOWN] if share.power_ratio >= _NAMED_RATIO]
        lines += [_row(f"{s.designator} {s.kind}", s.vrms, s.power_ratio) for s in named]
        rest = shares[len(named) :]
        if rest:
            vrms = math.sqrt(sum(share.vrms**2 for share in rest))
            lines.append(_row(f"{len(rest)} more", vrms, sum(share.power_ratio for share in rest)))
        return lines


def _row(name: str, level_vrms: float, power_ratio: float) -> str:
    return f"{name:>24}{format_volts(level_vrms):>12} rms{100.0 * power_ratio:>8.1f} %"


def noise_budget(
    netlist: Netlist, frequency_hz: Sequence[float], *, band_hz: tuple[float, float] = AUDIO_BAND_HZ
) -> NoiseBudget:
    """The exact noise at a stage's output.

    Parameters
    ----------
    netlist : Netlist
        Checked circuit.
    frequency_hz : sequence of float
        Where the density is wanted, above 0 Hz [Hz].
    band_hz : tuple of float
        Band of the total [Hz].

    Raises
    ------
    CircuitError
        The circuit cannot be computed.
    """
    noise = OutputNoise(netlist)
    spectrum = noise.spectrum(frequency_hz)
    return NoiseBudget(spectrum.output_v_rthz, spectrum.input_v_rthz, noise.total(*band_hz))
