"""The meters by name. A meter's module, and with it the compiled loops, is loaded when one is built."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from importlib import import_module
from typing import Any

from preview.errors import UsageError
from preview.meters.reading import Meter
from preview.meters.weighting import Weighting

__all__ = ["METERS", "MeterKind", "meter_kind"]


@dataclass(frozen=True, slots=True)
class MeterKind:
    """One line of the catalogue."""

    name: str
    """As it is written in options."""
    title: str
    """In words."""
    standard: str
    """What it follows; empty where there is no standard."""
    module: str
    """Module of this room."""
    maker: str
    """What makes one: a class or a function in it."""
    options: Mapping[str, Any] = field(default_factory=dict)
    """What sets this kind apart from others of its class."""
    counts_from_full_scale: bool = False
    """Whether the meter must know the volts of full scale."""

    def build(self, sample_rate_hz: float, channels: int, *, full_scale_v: float) -> Meter:
        """A meter of this kind; allocates and compiles."""
        options = dict(self.options)
        if self.counts_from_full_scale:
            options["full_scale_v"] = full_scale_v
        made = getattr(import_module(f"preview.meters.{self.module}"), self.maker)
        meter: Meter = made(sample_rate_hz, channels, **options)
        return meter


METERS: tuple[MeterKind, ...] = (
    MeterKind("sample-peak", "sample peak", "IEC 60268-18", "sample_peak", "SamplePeakMeter"),
    MeterKind("true-peak", "true peak", "ITU-R BS.1770-5, annex 2", "true_peak", "TruePeakMeter"),
    MeterKind("rms", "RMS", "AES17", "rms", "RmsMeter"),
    MeterKind("a-weighted", "A-weighted RMS", "IEC 61672-1", "rms", "RmsMeter", {"weighting": Weighting.A}),
    MeterKind("c-weighted", "C-weighted RMS", "IEC 61672-1", "rms", "RmsMeter", {"weighting": Weighting.C}),
    MeterKind("noise-rms", "468-weighted RMS", "AES17", "rms", "RmsMeter", {"weighting": Weighting.AES17}),
    MeterKind("noise-quasi-peak", "468 quasi-peak", "ITU-R BS.468-4", "quasi_peak", "QuasiPeakMeter"),
    MeterKind(
        "loudness",
        "loudness",
        "ITU-R BS.1770-5, EBU Tech 3341 and 3342",
        "loudness",
        "LoudnessMeter",
        counts_from_full_scale=True,
    ),
    MeterKind("vu", "VU", "IEC 60268-17", "vu", "VuMeter"),
    MeterKind("ppm-i", "PPM type I", "IEC 60268-10", "ppm", "PpmMeter", {"kind": "I"}),
    MeterKind("ppm-iia", "PPM type IIa", "IEC 60268-10", "ppm", "PpmMeter", {"kind": "IIa"}),
    MeterKind("ppm-iib", "PPM type IIb", "IEC 60268-10", "ppm", "PpmMeter", {"kind": "IIb"}),
    MeterKind("crest", "crest factor", "", "crest", "CrestMeter"),
    MeterKind("dc", "DC", "", "dc", "DcMeter"),
    MeterKind(
        "clip-log", "visits to full scale", "", "clip_log", "full_scale_log", counts_from_full_scale=True
    ),
)


def meter_kind(name: str) -> MeterKind:
    """The kind of that name.

    Raises
    ------
    UsageError
        No such meter.
    """
    found = next((kind for kind in METERS if kind.name == name), None)
    if found is None:
        raise UsageError(f"'{name}': no such meter", "there are " + ", ".join(kind.name for kind in METERS))
    return found
