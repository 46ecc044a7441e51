"""Candidates side by side: each is itself to the bit, and a change is a crossfade of running stages."""

from __future__ import annotations

import math

import numpy as np
import pytest

from preview.dsp.stage import StageProcessor
from preview.engine.rack import BLOCK_FRAMES, FADE_S, HISTORY_S, Rack
from preview.values.quality import Quality
from tests.engine.conftest import DelayCircuit
from tests.nets import HIGH_PASS, LOW_PASS, SALLEN_KEY

RATE_HZ = 48_000
FADE = round(FADE_S * RATE_HZ)


class Gain(DelayCircuit):
    """A gain and a delay that remembers how much it has computed."""

    computed = 0
    cleared = 0

    def process(self, volts_in, volts_out):
        self.computed += len(volts_in)
        super().process(volts_in, volts_out)

    def clear_readings(self):
        self.cleared += 1


def rack_of(**gains: float) -> tuple[Rack, dict[str, Gain]]:
    stages = {letter: Gain(gain) for letter, gain in gains.items()}
    first = next(iter(stages))
    rack = Rack(first, stages[first], sample_rate_hz=RATE_HZ, channels=1)
    for letter, stage in stages.items():
        if letter != first:
            rack.put(letter, stage)
    return rack, stages


def run(rack: Rack, volts: np.ndarray, size: int = 256, *, matched: bool = False) -> np.ndarray:
    out = np.empty_like(volts)
    for start in range(0, len(volts), size):
        rack.process(volts[start : start + size], out[start : start + size])
        if matched and rack.heard is not None:
            out[start : start + size] = rack.heard
    return out


def stage_of(circuit=LOW_PASS) -> StageProcessor:
    return StageProcessor(circuit, sample_rate_hz=RATE_HZ, channels=1, quality=Quality.DRAFT)


def tone(seconds: float, frequency_hz: float = 200.0) -> np.ndarray:
    return np.sin(2 * np.pi * frequency_hz * np.arange(round(seconds * RATE_HZ)) / RATE_HZ)[:, None]


def above_db(out: np.ndarray, cut_hz: float) -> float:
    """Energy above a frequency against that of the 200 Hz tone [dB]."""
    spectrum = np.abs(np.fft.rfft(out[:, 0] * np.blackman(len(out)))) ** 2
    f = np.fft.rfftfreq(len(out), 1 / RATE_HZ)
    return float(10 * math.log10(spectrum[f > cut_hz].sum() / spectrum[(f > 150) & (f < 250)].sum()))


@pytest.mark.parametrize("size", [1, 17, 256, 509])
def test_one_candidate_is_its_stage_to_the_bit(size):
    volts = np.random.default_rng(1).normal(0, 5, (5000, 1))
    expected = np.empty_like(volts)
    stage_of().process(volts, expected)
    rack = Rack("A", stage_of(), sample_rate_hz=RATE_HZ, channels=1)
    np.testing.assert_array_equal(run(rack, volts, size), expected)


def test_after_a_change_the_other_candidate_is_heard_to_the_bit():
    volts = np.random.default_rng(2).normal(0, 1, (20_000, 1))
    rack, _ = rack_of(A=2.0, B=3.0)
    run(rack, volts[:10_000])
    rack.select("B")
    assert rack.swapping
    heard = run(rack, volts[10_000:])
    assert not rack.swapping
    expected = 3.0 * volts[10_000 - 37 : -37]
    np.testing.assert_array_equal(heard[FADE + 2000 :], expected[FADE + 2000 :])


def test_a_change_is_heard_at_once_and_whole_after_the_fade():
    rack, _ = rack_of(A=1.0, B=3.0)
    volts = np.ones((48_000, 1))
    run(rack, volts[:24_000], 256)
    rack.hurry = 8
    rack.select("B")
    heard = run(rack, volts[24_000:], 256)[:, 0]
    moves = int(np.flatnonzero(heard > 1.0)[0])
    # 50 ms of history at eight times the pace of a block of 256, then 20 ms of fade
    assert moves <= math.ceil(HISTORY_S * RATE_HZ / (7 * 256)) * 256 + 1
    assert heard[moves + FADE] == 3.0
    assert np.all(np.diff(heard) >= 0.0)


def test_going_back_to_the_candidate_heard_before_begins_with_the_next_frame():
    rack, stages = rack_of(A=1.0, B=3.0)
    volts = np.ones((4800, 1))
    for letter in ("A", "B"):
        rack.select(letter)
        run(rack, volts)
    computed = stages["A"].computed
    run(rack, volts)
    assert stages["A"].computed == computed + 4800, "it runs on unheard"
    rack.select("A")
    heard = run(rack, volts)[:, 0]
    assert heard[1] < 3.0
    assert heard[FADE] == 1.0


def test_where_there_is_no_time_only_what_is_heard_is_computed():
    rack, stages = rack_of(A=1.0, B=3.0)
    rack.hurry = 1
    volts = np.ones((9600, 1))
    run(rack, volts)
    rack.select("B")
    heard = run(rack, volts)
    assert heard[-1, 0] == 3.0
    computed = stages["A"].computed
    run(rack, volts)
    assert stages["A"].computed == computed


def test_a_candidate_that_is_not_heard_costs_nothing():
    rack, stages = rack_of(A=1.0, B=3.0, C=4.0)
    run(rack, np.ones((4800, 1)))
    assert stages["B"].computed == stages["C"].computed == 0


@pytest.mark.parametrize("circuit", [HIGH_PASS, SALLEN_KEY])
def test_changes_between_real_circuits_do_not_click(circuit):
    rack = Rack("A", stage_of(), sample_rate_hz=RATE_HZ, channels=1)
    rack.put("B", stage_of(circuit))
    volts = tone(1.5)
    out = [run(rack, volts[:16_000])]
    for number, letter in enumerate("BABA"):
        rack.select(letter)
        first = 16_000 + 14_000 * number
        out.append(run(rack, volts[first : first + 14_000]))
    heard = np.concatenate(out)[2000:]
    assert above_db(heard, 4000.0) < -90.0
    assert above_db(heard, 15_000.0) < -110.0


def test_changing_one_s_mind_within_a_fade_does_not_click():
    rack, _ = rack_of(A=1.0, B=-1.0, C=0.3)
    volts = tone(1.0)
    out = [run(rack, volts[:10_000])]
    at = 10_000
    for letter in "BCABCBA":
        rack.select(letter)
        out.append(run(rack, volts[at : at + 768]))
        at += 768
    out.append(run(rack, volts[at:]))
    heard = np.concatenate(out)
    assert above_db(heard[2000:], 4000.0) < -90.0
    assert heard[-1, 0] == pytest.approx(volts[-38, 0])


def test_a_new_stage_under_the_letter_that_is_heard_is_faded_to():
    rack, _ = rack_of(A=1.0)
    volts = np.ones((9600, 1))
    run(rack, volts)
    rack.put("A", Gain(5.0))
    heard = run(rack, volts)[:, 0]
    assert np.all(np.diff(heard) >= 0.0)
    assert heard[-1] == 5.0


def test_the_null_of_a_candidate_with_itself_is_silence_and_of_two_their_difference():
    rack, _ = rack_of(A=2.0, B=2.0, C=0.5)
    volts = np.random.default_rng(3).normal(0, 1, (20_000, 1))
    run(rack, volts)
    rack.listen_null("A", "B")
    assert not run(rack, volts)[5000:].any()
    rack.listen_null("A", "C")
    heard = run(rack, volts)
    np.testing.assert_allclose(heard[5000:], 1.5 * volts[5000 - 37 : -37], rtol=1e-12)
    rack.listen_null("C", "C")
    assert not run(rack, volts)[5000:].any()
    rack.select("A")
    np.testing.assert_array_equal(run(rack, volts)[5000:], 2.0 * volts[5000 - 37 : -37])


def test_the_null_of_two_levels_of_the_same_is_silence_while_they_are_matched():
    rack, _ = rack_of(A=2.0, B=0.5)
    rack.set_gains({"A": 0.25})
    rack.listen_null("A", "B")
    volts = np.random.default_rng(4).normal(0, 1, (20_000, 1))
    assert np.abs(run(rack, volts)[5000:]).max() < 1e-15
    rack.set_gains({})
    np.testing.assert_allclose(run(rack, volts)[5000:], 1.5 * volts[5000 - 37 : -37], rtol=1e-12)


def test_the_match_is_heard_but_not_metered_and_moves_with_the_fade():
    rack, _ = rack_of(A=1.0, B=4.0)
    rack.set_gains({"B": 0.25})
    volts = np.ones((9600, 1))
    assert run(rack, volts, matched=True)[-1, 0] == 1.0
    rack.select("B")
    heard = run(rack, volts, 512, matched=True)[:, 0]
    np.testing.assert_allclose(heard, 1.0, atol=1e-12)
    assert rack.match_gain == 0.25
    assert run(rack, volts)[-1, 0] == 4.0, "the volts are what they are"


def test_nothing_is_heard_louder_on_the_way_than_at_both_ends():
    # B is a thousand times softer than A, so that matched, A minus B is heard as A / 1000 - B
    rack, _ = rack_of(A=1.0, B=-0.001)
    volts = np.ones((9600, 1))
    rack.set_gains({"A": 0.001})
    run(rack, volts)
    steps = (
        lambda: rack.listen_null("A", "B"),
        lambda: rack.select("B"),
        lambda: rack.listen_null("B", "A"),
        lambda: rack.select("A"),
        lambda: rack.set_bypass(True),
        lambda: rack.set_bypass(False),
    )
    level = abs(run(rack, volts, matched=True)[-1, 0])
    for step in steps:
        step()
        heard = np.abs(run(rack, volts, matched=True)[:, 0])
        assert heard.max() <= max(level, heard[-1]) + 1e-12
        level = heard[-1]


def test_the_match_that_is_set_within_a_fade_does_not_click():
    rack, _ = rack_of(A=1.0, B=2.0)
    volts = tone(1.0)
    out = [run(rack, volts[:10_000], matched=True)]
    rack.select("B")
    at = 10_000
    for frames, gains in ((1536, {"B": 0.5}), (256, {})):
        out.append(run(rack, volts[at : at + frames], matched=True))
        at += frames
        assert rack.swapping
        rack.set_gains(gains)
    out.append(run(rack, volts[at:], matched=True))
    heard = np.concatenate(out)
    assert above_db(heard[2000:], 4000.0) < -90.0
    assert heard[-1, 0] == pytest.approx(2.0 * volts[-38, 0])
    assert rack.heard is None


def test_the_match_that_ends_while_a_candidate_is_still_on_its_way_does_not_click():
    rack, _ = rack_of(A=1.0, B=2.0)
    volts = tone(1.0)
    rack.set_gains({"A": 0.2})
    out = [run(rack, volts[:10_057], matched=True)]  # to a crest of what comes out
    rack.hurry = 2  # B needs a while to come to the present
    rack.select("B")
    rack.set_gains({})
    out.append(run(rack, volts[10_057:], matched=True))
    heard = np.concatenate(out)
    assert above_db(heard[2000:], 4000.0) < -90.0
    assert heard[-1, 0] == pytest.approx(2.0 * volts[-38, 0])
    assert rack.heard is None


def test_bypass_is_the_input_at_the_same_delay_to_the_bit_and_unmatched():
    rack, _ = rack_of(A=3.0)
    rack.set_gains({"A": 0.5})
    volts = np.random.default_rng(5).normal(0, 1, (20_000, 1))
    run(rack, volts)
    rack.set_bypass(True)
    heard = run(rack, volts, matched=True)
    np.testing.assert_array_equal(heard[FADE + BLOCK_FRAMES :], volts[FADE + BLOCK_FRAMES - 37 : -37])
    rack.set_bypass(False)
    heard = run(rack, volts, matched=True)
    np.testing.assert_array_equal(heard[FADE + BLOCK_FRAMES :], 1.5 * volts[FADE + BLOCK_FRAMES - 37 : -37])


def test_bypass_and_back_do_not_click():
    rack = Rack("A", stage_of(), sample_rate_hz=RATE_HZ, channels=1)
    volts = tone(1.0)
    out = [run(rack, volts[:16_000])]
    rack.set_bypass(True)
    out.append(run(rack, volts[16_000:32_000]))
    rack.set_bypass(False)
    out.append(run(rack, volts[32_000:]))
    assert above_db(np.concatenate(out)[2000:], 4000.0) < -90.0


def test_after_reset_what_was_on_its_way_is_heard_at_once():
    rack, stages = rack_of(A=1.0, B=3.0)
    run(rack, np.ones((1000, 1)))
    rack.select("B")
    rack.set_bypass(False)
    rack.reset()
    assert not rack.swapping
    assert stages["B"].resets == 2, "once to catch up, once now"
    assert run(rack, np.ones((1000, 1)))[-1, 0] == 3.0


def test_readings_are_those_of_what_is_heard_and_begin_with_it():
    rack, stages = rack_of(A=1.0, B=3.0)
    run(rack, np.ones((1000, 1)))
    rack.select("B")
    assert stages["B"].cleared == 0
    run(rack, np.ones((2 * BLOCK_FRAMES, 1)))
    stages["A"].readings = lambda: ("of A",)
    stages["B"].readings = lambda: ("of B",)
    while rack._due:
        assert rack.readings() == ("of A",)
        run(rack, np.ones((BLOCK_FRAMES, 1)))
    assert rack.readings() == ("of B",)
    assert stages["B"].cleared == 1


def test_a_dropped_candidate_is_gone_and_the_one_that_is_heard_stays():
    rack, stages = rack_of(A=1.0, B=3.0)
    rack.select("B")
    run(rack, np.ones((9600, 1)))
    rack.drop("B")
    rack.drop("A")
    computed = stages["A"].computed
    assert run(rack, np.ones((9600, 1)))[-1, 0] == 3.0
    assert stages["A"].computed == computed
    rack.select("A")
    rack.listen_null("A", "B")
    assert (rack.letter, rack.null) == ("B", None)
