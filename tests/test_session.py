"""A session: what it takes away from the op-amps reaches the circuit."""

from __future__ import annotations

import math
from dataclasses import replace

from preview.circuit.library import find_stage, with_overrides
from preview.session import Session
from preview.values.levels import parse_full_scale


def session_of(opamp: str, *without) -> Session:
    stage, _ = with_overrides(find_stage("inverting-low-pass"), {}, {None: opamp})
    plain = Session(None, stage, stage.supply, parse_full_scale("+18 dBu"))
    return replace(plain, without=without)


def test_without_slew_the_op_amp_is_the_same_but_for_its_slew():
    whole, freed = (session_of("TL072", *w).netlist().opamps[0] for w in ((), ("slew",)))
    assert math.isfinite(whole.model.slew_up_v_per_s)
    assert math.isinf(freed.model.slew_up_v_per_s)
    assert freed.model.gain_bandwidth_hz == whole.model.gain_bandwidth_hz
    assert (freed.high_v, freed.low_v) == (whole.high_v, whole.low_v)


def test_without_swing_the_output_reaches_the_rails():
    freed = session_of("TL072", "swing").netlist().opamps[0]
    assert (freed.high_v, freed.low_v) == (15.0, -15.0)


def test_a_perfect_op_amp_keeps_having_no_rails_when_limits_are_taken_away():
    freed = session_of("perfect", "noise", "swing").netlist().opamps[0]
    assert (freed.high_v, freed.low_v) == (math.inf, -math.inf)
