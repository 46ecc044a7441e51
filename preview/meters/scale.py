"""Readings in volts on the scales of the trade: V, dBu, dBV and dBFS."""

from __future__ import annotations

from enum import StrEnum
from typing import Literal

from preview.values.levels import (
    FullScale,
    dbu_from_vrms,
    dbv_from_vrms,
    format_db,
    format_volts,
    ratio_db,
    vrms_from_vpk,
)

__all__ = ["Scale", "on_scale", "written"]

Measured = Literal["peak", "rms"]


class Scale(StrEnum):
    """What a reading is counted in."""

    VOLTS = "V"
    """Volts, peak or RMS as it was measured."""
    DBU = "dBu"
    """dB re 0.7746 V rms."""
    DBV = "dBV"
    """dB re 1 V rms."""
    DBFS = "dBFS"
    """dB re full scale."""


def on_scale(
    volts: float, scale: Scale, *, measured: Measured, full_scale_v: float, sine_referenced: bool = True
) -> float:
    """A reading in volts on a scale.

    Parameters
    ----------
    volts : float
        The reading [V].
    measured : {"peak", "rms"}
        What it is. A peak in dBu or dBV is the level of the sine with that peak.
    full_scale_v : float
        Peak volts of full scale.
    sine_referenced : bool
        Whether 0 dBFS RMS is a sine at full scale, as in AES17; else it is a square wave, 3.01 dB more.
    """
    if scale is Scale.VOLTS:
        return volts
    if scale is Scale.DBFS:
        as_sine = measured == "rms" and sine_referenced
        return ratio_db(volts / (vrms_from_vpk(full_scale_v) if as_sine else full_scale_v))
    vrms = vrms_from_vpk(volts) if measured == "peak" else volts
    return dbu_from_vrms(vrms) if scale is Scale.DBU else dbv_from_vrms(vrms)


def written(
    volts: float, scale: Scale, *, measured: Measured, full_scale: FullScale, sine_referenced: bool = True
) -> str:
    """The reading as text: ``8.70 V peak``, ``+4.0 dBu``, ``-20.0 dBFS (full scale +24 dBu)``."""
    level = on_scale(
        volts,
        scale,
        measured=measured,
        full_scale_v=full_scale.volts,
        sine_referenced=sine_referenced,
    )
    if scale is Scale.VOLTS:
        return f"{format_volts(level)} {measured}"
    text = format_db(level, scale.value)
    return f"{text} (full scale {full_scale.text})" if scale is Scale.DBFS else text
