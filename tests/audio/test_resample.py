"""A device at another rate than the recording."""

from __future__ import annotations

import numpy as np
import pytest

from preview.audio.resample import ResampledFill


@pytest.mark.parametrize(("from_hz", "to_hz"), [(44100, 48000), (48000, 44100), (8000, 48000)])
def test_a_sine_is_the_same_sine_at_the_devices_rate(from_hz, to_hz):
    at = 0

    def fill(out):
        nonlocal at
        out[:] = 0.5 * np.sin(2 * np.pi * 997 * (at + np.arange(len(out))) / from_hz)[:, np.newaxis]
        at += len(out)

    converted = ResampledFill(fill, from_hz, to_hz, 2)
    heard = np.zeros((to_hz, 2), np.float32)
    for first in range(0, to_hz, 480):
        converted(heard[first : first + 480])
    assert np.array_equal(heard[:, 0], heard[:, 1])
    settled = heard[to_hz // 4 : 3 * to_hz // 4, 0].astype(np.float64)
    time_s = np.arange(to_hz // 4, 3 * to_hz // 4) / to_hz
    # least squares fit of the sine at 997 Hz: what it leaves is the error
    basis = np.stack([np.sin(2 * np.pi * 997 * time_s), np.cos(2 * np.pi * 997 * time_s)], axis=1)
    fit, *_ = np.linalg.lstsq(basis, settled, rcond=None)
    assert np.hypot(*fit) == pytest.approx(0.5, rel=1e-4)
    error = np.sqrt(np.mean((settled - basis @ fit) ** 2)) / (0.5 / np.sqrt(2))
    assert 20 * np.log10(error) < -110


def test_blocks_of_any_size_give_the_same_samples():
    def maker():
        at = 0

        def fill(out):
            nonlocal at
            out[:] = np.sin(0.1 * (at + np.arange(len(out))))[:, np.newaxis]
            at += len(out)

        return ResampledFill(fill, 44100, 48000, 1)

    whole = np.zeros((4000, 1), np.float32)
    maker()(whole)
    pieces = np.zeros((4000, 1), np.float32)
    converted = maker()
    for first in range(0, 4000, 37):
        converted(pieces[first : first + 37])
    assert np.array_equal(whole, pieces)
