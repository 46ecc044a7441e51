"""Choosing the type of the op-amps: the rows of the list, and the session with the choice in it."""

from __future__ import annotations

import math
from collections.abc import Collection, Sequence
from dataclasses import replace

from preview.circuit.opamp import LIMITS, Limit, OpAmpModel
from preview.circuit.opamp_library import find_opamp, opamp_names
from preview.circuit.parts import Stage
from preview.errors import PreviewError
from preview.session import Session
from preview.ui.asking import Choice
from preview.ui.words import type_name
from preview.values.notation import format_value

__all__ = ["CHOICE_HEADS", "LIMIT_WORDS", "opamp_choices", "toggled", "type_in_force", "with_opamp_type"]

_SPEED, _SLEW = 8, 7
"""Columns of gain-bandwidth and slew rate [cells]."""
CHOICE_HEADS = f"{'GBW':>{_SPEED}}{'V/µs':>{_SLEW}}"
"""What stands above the figures of the rows."""


LIMIT_WORDS: dict[Limit, str] = {
    "speed": "gain-bandwidth, phase margin, input capacitance",
    "slew": "how fast the output can move",
    "swing": "what the output stays from the rails, crossover",
    "current": "how much the output can deliver",
    "input range": "which input voltages are followed",
    "offset": "offset voltage, input currents",
    "noise": "voltage and current noise",
}
"""Each limit that can be taken away, in words."""


def toggled(without: tuple[Limit, ...], answer: str) -> tuple[Limit, ...]:
    """The limits that are taken away once the one of that name is toggled; ``all`` gives every one back."""
    if answer == "all":
        return ()
    return tuple(limit for limit in LIMITS if (limit in without) != (limit == answer))


def type_in_force(stage: Stage, designators: Sequence[str]) -> str:
    """The type of the first of these op-amps, by which the list is opened."""
    return next(opamp.type for opamp in stage.opamps if opamp.designator in designators)


def opamp_choices(now: str) -> list[Choice]:
    """A row for every type that there is, and one for the type in force where that is a file."""
    names = opamp_names()
    return [_choice(name) for name in ((now, *names) if now not in names else names)]


def _choice(name: str) -> Choice:
    try:
        model = find_opamp(name)
    except PreviewError as error:
        return Choice(name, type_name(name), f"cannot be used: {error}")
    speed = format_value(model.gain_bandwidth_hz, "frequency") if model.real else "-"
    return Choice(name, type_name(name), f"{speed:>{_SPEED}}{_slews(model):>{_SLEW}}  {model.title}")


def _slews(model: OpAmpModel) -> str:
    """The slew rate in V/µs, the slower one first where up and down differ; ``-`` for no limit."""
    slews = sorted({model.slew_up_v_per_s, model.slew_down_v_per_s})
    return "/".join(f"{slew / 1e6:.3g}" for slew in slews) if math.isfinite(slews[0]) else "-"


def with_opamp_type(
    session: Session, kind: str, designators: Collection[str] | None = None
) -> tuple[Session, str]:
    """The session with these op-amps (every one if None) of that type, and a line about it.

    Raises
    ------
    PreviewError
        The type's file cannot be read, or the circuit cannot be computed with it: the supply is outside its
        range, or the circuit oscillates.
    """
    from preview.network.stability import check_stable  # at the first use: the desk is on the screen sooner

    stage = session.stage
    named = [o for o in stage.opamps if designators is None or o.designator in designators]
    for opamp in named:
        stage = stage.with_part(replace(opamp, type=kind))
    changed = replace(session, stage=stage)
    check_stable(changed.netlist())
    names = ", ".join(opamp.designator for opamp in named)
    return changed, f"{names}: {type_name(kind)}, {find_opamp(kind).title}"
