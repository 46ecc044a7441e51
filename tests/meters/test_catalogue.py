"""The catalogue, and what every meter in it has in common."""

from __future__ import annotations

import dataclasses
import subprocess
import sys
import tracemalloc

import numpy as np
import pytest

from preview.errors import UsageError
from preview.meters import kernels
from preview.meters.catalogue import METERS, MeterKind, meter_kind
from preview.meters.reading import Meter
from tests.meters.signals import FULL_SCALE_V

RATE = 48_000
EVERY = pytest.mark.parametrize("kind", METERS, ids=lambda kind: kind.name)


def build(kind: MeterKind, channels: int = 2) -> Meter:
    return kind.build(RATE, channels, full_scale_v=FULL_SCALE_V)


def programme(frames: int, channels: int = 2) -> np.ndarray:
    """Noise with bursts beyond full scale, a gap and DC."""
    volts = np.random.default_rng(5).standard_normal((frames, channels)) * 3.0 + 0.1
    volts[frames // 2 : frames // 2 + 700] = 0.0
    return volts


@EVERY
@pytest.mark.parametrize("chunk", [1, 17, 509])
def test_a_reading_does_not_depend_on_how_the_signal_is_cut(kind: MeterKind, chunk: int) -> None:
    volts = programme(24_000)
    whole, cut = build(kind), build(kind)
    whole.feed(volts)
    for start in range(0, len(volts), chunk):
        cut.feed(volts[start : start + chunk])
    one, other = whole.read(), cut.read()
    assert one == other
    assert any(
        value not in (0.0, (0.0, 0.0), ())
        for value in (getattr(one, field.name) for field in dataclasses.fields(one))
    )


@EVERY
def test_a_reset_is_a_new_meter(kind: MeterKind) -> None:
    used, fresh = build(kind), build(kind)
    used.feed(programme(30_000))
    used.reset()
    for meter in (used, fresh):
        meter.feed(programme(5000) * 0.1)
    assert used.read() == fresh.read()


@EVERY
def test_what_is_not_finite_counts_as_0_v(kind: MeterKind) -> None:
    clean = programme(4000)
    clean[100, 0] = clean[2000, 1] = clean[2001, 1] = 0.0
    dirty = clean.copy()
    dirty[100, 0], dirty[2000, 1], dirty[2001, 1] = np.nan, np.inf, -np.inf
    one, other = build(kind), build(kind)
    one.feed(clean)
    other.feed(dirty)
    assert one.read() == other.read()


@EVERY
def test_channels_are_measured_apart(kind: MeterKind) -> None:
    # a column of a larger array, which is not contiguous, reads as the same column alone
    volts = programme(6000, 3)
    both, alone = build(kind, 2), build(kind, 1)
    both.feed(volts[:, 1:])
    alone.feed(volts[:, 2:].copy())
    several, one = both.read(), alone.read()
    for field in dataclasses.fields(one):
        value = getattr(one, field.name)
        if isinstance(value, tuple) and field.name != "events":
            np.testing.assert_array_equal(getattr(several, field.name)[1], value[0])


@EVERY
def test_feeding_neither_compiles_nor_allocates_arrays(kind: MeterKind) -> None:
    meter = build(kind)
    volts = programme(2048)
    columns = programme(2048, 4)[:, ::2]
    names = [name for name in vars(kernels) if hasattr(getattr(kernels, name), "signatures")]
    before = {name: len(getattr(kernels, name).signatures) for name in names}
    meter.feed(volts)
    tracemalloc.start()
    try:
        for _ in range(3):
            meter.feed(volts)
            meter.feed(columns)
        _, peak_bytes = tracemalloc.get_traced_memory()
    finally:
        tracemalloc.stop()
    assert peak_bytes < 4096  # views and numbers: one chunk of one channel alone would be 4096
    assert {name: len(getattr(kernels, name).signatures) for name in names} == before


@EVERY
def test_every_reading_is_frozen_and_describes_each_field(kind: MeterKind) -> None:
    reading = build(kind).read()
    with pytest.raises(dataclasses.FrozenInstanceError):
        setattr(reading, dataclasses.fields(reading)[0].name, 0)


def test_names_are_unique_and_found() -> None:
    names = [kind.name for kind in METERS]
    assert len(set(names)) == len(names)
    assert meter_kind("ppm-iib").title == "PPM type IIb"


def test_an_unknown_name_is_refused_with_those_there_are() -> None:
    with pytest.raises(UsageError, match="'vumeter': no such meter") as found:
        meter_kind("vumeter")
    assert "true-peak" in found.value.hint


def test_looking_at_the_catalogue_loads_no_compiler() -> None:
    code = "import sys, preview.meters.catalogue; sys.exit('numba' in sys.modules or 'scipy' in sys.modules)"
    assert subprocess.run([sys.executable, "-c", code], check=False).returncode == 0
