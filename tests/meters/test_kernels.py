"""Each compiled loop of the meters against its own Python source."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import pytest

from preview.meters import kernels
from preview.meters.intake import interpolator
from preview.meters.weighting import Weighting, sections

PAST, COUNT = 40, 60


def rows() -> np.ndarray:
    return np.random.default_rng(8).standard_normal((2, PAST + COUNT)) * 2.0


def dirty() -> np.ndarray:
    volts = rows()
    volts[0, 50], volts[1, 60], volts[1, 99] = np.nan, -np.inf, 1e120
    return volts


def zeros(*shape: int) -> np.ndarray:
    return np.zeros(shape)


def counts(*shape: int) -> np.ndarray:
    return np.zeros(shape, dtype=np.int64)


TAPS = interpolator(48_000)
CASES: dict[str, Callable[[], list[Any]]] = {
    "clean_rows": lambda: [dirty(), PAST, COUNT],
    "weight_rows": lambda: [rows(), PAST, COUNT, sections(Weighting.A, 48_000), zeros(2, 5, 2)],
    "shift_rows": lambda: [rows(), PAST, COUNT],
    "interpolate": lambda: [rows()[0], PAST, COUNT, TAPS, zeros(8, COUNT)],
    "note_peaks": lambda: [rows(), PAST, COUNT, 0.99, zeros(2), zeros(2), zeros(2)],
    "note_true_peaks": lambda: [rows(), PAST, COUNT, TAPS, zeros(8, COUNT), 0.99, zeros(2), zeros(2)],
    "note_plain": lambda: [np.ascontiguousarray(rows().T), zeros(2), zeros(2), zeros(2)],
    "note_squares": lambda: [rows(), PAST, COUNT, 0.1, zeros(2), zeros(2), zeros(2)],
    "note_means": lambda: [rows(), PAST, COUNT, 0.1, zeros(2, 2), zeros(2)],
    "end_block": lambda: [
        np.array([480 * 50, 49]), 480.0, np.random.default_rng(1).random(301), zeros(2), zeros(2),
        counts(2, 12_000), zeros(2, 12_000),
    ],
    # blocks of 1.5 frames, so that 60 frames fill the momentary window and reach the gate
    "note_loudness": lambda: [
        rows(), PAST, COUNT, np.ones(2), 1.5, counts(2), zeros(301), zeros(2), zeros(2),
        counts(2, 12_000), zeros(2, 12_000),
    ],
    "move_needle": lambda: [
        rows(), PAST, COUNT, TAPS, zeros(8, COUNT), np.array([[0.9, 0.1, 0.1], [-0.2, 0.8, 0.2]]),
        zeros(2, 2), zeros(2),
    ],
    "charge_pair": lambda: [
        rows(), PAST, COUNT, TAPS, zeros(8, COUNT), np.array([0.1, 0.02]), 1e-3, 0.5, zeros(2, 2), zeros(2),
    ],
    "charge_chain": lambda: [
        rows(), PAST, COUNT, TAPS, zeros(8, COUNT), np.array([0.1, 0.02]), np.array([1e-3, 1e-2]),
        zeros(2, 2), zeros(2),
    ],
    "end_visit": lambda: [
        np.array([[1, 4, 3, 0, 0], [0, 0, 0, 0, 0]]), np.array([2.0]), 0, 1, counts(5, 4), zeros(5),
    ],
    "note_visits": lambda: [
        rows(), PAST, COUNT, 2.0, -1.5, 1, counts(3, kernels.STATE_COLUMNS), zeros(2), counts(100, 4), zeros(100),
    ],
}  # fmt: skip


@pytest.mark.parametrize("name", list(CASES))
def test_a_kernel_equals_its_source(name: str) -> None:
    kernel = getattr(kernels, name)
    compiled, plain = CASES[name](), CASES[name]()
    kernel(*compiled)
    with np.errstate(invalid="ignore"):
        kernel.py_func(*plain)
    changed = False
    for got, wanted, before in zip(compiled, plain, CASES[name](), strict=True):
        if isinstance(got, np.ndarray):
            np.testing.assert_allclose(got, wanted, rtol=1e-12, atol=1e-14)
            changed = changed or not np.array_equal(got, before)
    assert changed


@pytest.mark.parametrize(
    ("name", "arguments"),
    [
        ("block_end", (0, 480.0)),
        ("block_end", (-41, 110.25)),
        ("block_end", (7, 110.25)),
        ("loudness_bin", (0.0, 12_000)),
        ("loudness_bin", (1e-8, 12_000)),
        ("loudness_bin", (0.01, 12_000)),
        ("loudness_bin", (1e9, 12_000)),
        ("largest_of", (np.array([9.0, 1.0, -4.0, 2.0, 3.0, 3.5, -5.0, 9.0]), 1, 7)),
        ("largest_of", (np.array([9.0, 1.0, -4.0, 2.0, 3.0, 3.5, -5.0, 9.0]), 1, 4)),
    ],
)
def test_a_kernel_of_numbers_equals_its_source(name: str, arguments: tuple[Any, ...]) -> None:
    kernel = getattr(kernels, name)
    assert kernel(*arguments) == kernel.py_func(*arguments)


def test_no_kernel_is_left_out() -> None:
    every = {name for name, value in vars(kernels).items() if hasattr(value, "py_func")}
    assert every == set(CASES) | {"block_end", "largest_of", "loudness_bin"}
