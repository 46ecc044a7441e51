"""Ramps and the frame that is heard."""

from __future__ import annotations

import numpy as np
import pytest

from preview.engine.transport import Ramp, heard_frame


def test_a_ramp_at_rest_at_unity_leaves_the_samples_as_they_are():
    samples = np.random.default_rng(1).standard_normal((50, 2))
    before = samples.copy()
    Ramp(10, 1.0).apply(samples)
    assert np.array_equal(samples, before)


@pytest.mark.parametrize("block", [1, 7, 64])
def test_a_ramp_is_the_same_raised_cosine_for_any_block_size(block):
    ramp = Ramp(40, 0.0)
    ramp.to(1.0)
    samples = np.ones((64, 1))
    for first in range(0, 64, block):
        ramp.apply(samples[first : first + block])
    expected = 0.5 - 0.5 * np.cos(np.pi * np.minimum(np.arange(1, 65), 40) / 40)
    np.testing.assert_allclose(samples[:, 0], expected, atol=1e-15)
    assert samples[40:].min() == 1.0
    assert not ramp.moving


def test_a_ramp_turned_round_goes_on_from_the_gain_it_has_reached():
    ramp = Ramp(40, 0.0)
    ramp.to(1.0)
    samples = np.ones((20, 1))
    ramp.apply(samples)
    ramp.to(0.0)
    more = np.ones((60, 1))
    ramp.apply(more)
    steps = np.abs(np.diff(np.concatenate([samples, more])[:, 0]))
    # a full move's steepest step is pi / 2 / 40
    assert steps.max() <= np.pi / 2 / 40
    assert more[-1, 0] == 0.0


def test_to_pass_over_frames_is_to_apply_it_to_them():
    one, other = Ramp(80, 0.0), Ramp(80, 0.0)
    for ramp in (one, other):
        ramp.to(1.0)
    for frames in (1, 17, 30, 100):
        one.apply(np.ones((frames, 1)))
        other.pass_over(frames)
        assert (one.value, one.moving) == (pytest.approx(other.value, abs=1e-15), other.moving)


@pytest.mark.parametrize(
    ("next_frame", "wrapped", "heard"),
    [(500, False, 463), (120, False, 83), (120, True, 183), (100, True, 163), (10, False, 0)],
)
def test_the_heard_frame_is_the_delay_behind_also_across_the_loop(next_frame, wrapped, heard):
    end = 200 if wrapped else 1000
    assert heard_frame(next_frame, 37, start=100 if wrapped else 0, end=end, wrapped=wrapped) == heard
