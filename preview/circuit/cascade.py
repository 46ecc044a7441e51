"""Stages in a row, output to input, as one stage that is solved as one circuit.

What belongs to the second stage is called ``2.R1``, ``2.U1``; its inner nodes ``2.sum``. The output of the first is
the node ``1.out``, which is also the input of the second; ``in`` is the first's and ``out`` the last's.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Sequence
from dataclasses import replace

from preview.circuit.nodes import GND, IN, NEGATIVE_RAIL, OUT, POSITIVE_RAIL
from preview.circuit.parts import (
    Diode,
    FixedVoltage,
    OpAmp,
    Part,
    Potentiometer,
    SettablePart,
    Stage,
    TwoTerminal,
)
from preview.circuit.reader import MOST_PARTS
from preview.errors import CircuitError

__all__ = [
    "cascade",
    "numbered_drawing",
    "stage_alone",
    "stage_outputs",
    "supplies_differ",
    "with_stage_behind",
    "without_last_stage",
]

_SHARED = (GND, POSITIVE_RAIL, NEGATIVE_RAIL)
_RIGHTWARD, _LEFTWARD = "─┌└├┬┴┼╭╰○▷", "─┐┘┤┬┴┼╮╯○"
"""Characters of a drawing from which a wire goes on to the right, and to the left."""


def cascade(stages: Sequence[Stage]) -> Stage:
    """The stages joined output to input; a single one stays as it is.

    They run on the supply of the first. Expected figures are dropped: each holds for its stage alone.

    Raises
    ------
    CircuitError
        More parts than can be computed.
    """
    if len(stages) == 1:
        return stages[0]
    count = sum(len(stage.parts) for stage in stages)
    if count > MOST_PARTS:
        raise CircuitError(f"a cascade of {count} parts", f"{MOST_PARTS} at most, of all stages together")
    last = len(stages)
    parts: list[Part] = []
    outputs: list[str] = []
    drawings = []
    for k, stage in enumerate(stages, 1):
        node = _renaming(k, last)
        parts += [_renamed(part, k, node, stage.temperature_degc) for part in stage.parts]
        outputs += [node(name) for name in (OUT, *stage.outputs) if node(name) != OUT]
        drawings.append(_captioned(stage, k))
    first = stages[0]
    return Stage(
        name=" + ".join(stage.name for stage in stages),
        title=" + ".join(stage.title for stage in stages),
        about=" ".join(f"{k}: {stage.about}" for k, stage in enumerate(stages, 1)),
        supply=first.supply,
        parts=tuple(parts),
        drawing="\n\n".join(drawings),
        outputs=tuple(outputs),
        temperature_degc=first.temperature_degc,
        joined=tuple(stages),
    )


def stage_outputs(stage: Stage) -> tuple[str, ...]:
    """The node of each stage's output in a cascade, the last of which is ``out``."""
    return (*(f"{k}.{OUT}" for k in range(1, len(stage.joined))), OUT)


def stage_alone(stage: Stage, k: int) -> Stage:
    """Stage k of a cascade, counted from 1, by itself, its parts as they are set in the cascade."""
    alone = stage.joined[k - 1]
    for part in alone.parts:
        now = stage.part(f"{k}.{part.designator}")
        if isinstance(part, TwoTerminal) and isinstance(now, TwoTerminal):
            alone = alone.with_part(replace(part, value=now.value, series=now.series))
        elif isinstance(part, SettablePart) and isinstance(now, SettablePart):
            alone = alone.with_part(part.with_setting(now.setting))
        elif isinstance(part, OpAmp) and isinstance(now, OpAmp):
            alone = alone.with_part(replace(part, type=now.type))
        elif isinstance(part, FixedVoltage) and isinstance(now, FixedVoltage):
            alone = alone.with_part(replace(part, value=now.value))
    return alone


def with_stage_behind(stage: Stage, behind: Stage) -> Stage:
    """The stage or cascade, its parts as they are set, with one more stage behind it; raises as ``cascade`` does."""
    return cascade([*_chain(stage), behind])


def without_last_stage(stage: Stage) -> Stage:
    """The cascade without its last stage, the parts of the others as they are set."""
    return cascade(_chain(stage)[:-1])


def supplies_differ(stage: Stage) -> str:
    """What to say where the stages of a cascade are drawn with different rails; empty where they are not."""
    if len({one.supply for one in stage.joined}) < 2:
        return ""
    rails = ", ".join(
        f"{k} with {one.supply.positive_v:g} V and {one.supply.negative_v:g} V"
        for k, one in enumerate(stage.joined, 1)
    )
    return f"the stages are drawn with different supplies ({rails}): all run on the first's"


def _chain(stage: Stage) -> list[Stage]:
    """Every stage of a cascade as it is set; a single stage as it is."""
    return [stage_alone(stage, k) for k in range(1, len(stage.joined) + 1)] or [stage]


def _renaming(k: int, last: int) -> Callable[[str], str]:
    """What stage k of a cascade calls a node."""

    def renamed(node: str) -> str:
        if node in _SHARED or (node == IN and k == 1) or (node == OUT and k == last):
            return node
        return f"{k - 1}.{OUT}" if node == IN else f"{k}.{node}"

    return renamed


def _renamed(part: Part, k: int, node: Callable[[str], str], temperature_degc: float) -> Part:
    """The part with its number before its designator, on the nodes of the cascade."""
    name = f"{k}.{part.designator}"
    match part:
        case Potentiometer():
            a, b = part.ends
            return replace(part, designator=name, ends=(node(a), node(b)), wiper=node(part.wiper))
        case Diode():
            own = temperature_degc if part.temperature_degc is None else part.temperature_degc
            anode, cathode = node(part.anode), node(part.cathode)
            return replace(part, designator=name, anode=anode, cathode=cathode, temperature_degc=own)
        case OpAmp():
            plus, minus, out = (node(n) for n in part.nodes)
            return replace(part, designator=name, plus=plus, minus=minus, out=out)
        case _:
            a, b = part.nodes
            return replace(part, designator=name, nodes=(node(a), node(b)))


def _captioned(stage: Stage, k: int) -> str:
    """The stage's drawing under a line that tells its place."""
    head = f"{k}  {stage.title}" + (f", from {k - 1}.{OUT}" if k > 1 else "")
    names = [part.designator for part in stage.parts]
    if not stage.drawing.strip():
        return f"{head}\n   no drawing: {', '.join(f'{k}.{name}' for name in names)}"
    return f"{head}\n{numbered_drawing(stage.drawing, names, f'{k}.')}"


def numbered_drawing(drawing: str, designators: Sequence[str], prefix: str) -> str:
    """The drawing with the prefix before every designator, wires still in line.

    The prefix is written over blanks behind or before the designator; where there are too few of them the whole
    drawing becomes wider there.
    """
    names = "|".join(re.escape(name) for name in sorted(designators, key=len, reverse=True))
    pattern = re.compile(rf"(?<![\w.])(?:{names})(?!\w)")
    lines = drawing.splitlines()
    wide = len(prefix)
    for row in range(len(lines)):
        at = 0
        while found := pattern.search(lines[row], at):
            line, start, end = lines[row], *found.span()
            behind = line[end:].rstrip()
            before = line[:start]
            blanks_behind = len(behind) - len(behind.lstrip(" "))
            if not behind or blanks_behind > wide:
                line = before + prefix + found[0] + line[end:][wide:]
            elif len(before) - len(before.rstrip(" ")) > wide:
                line = before[:-wide] + prefix + found[0] + line[end:]
            else:
                lines = [_stretched(other, start, wide) for other in lines]
                line = before + prefix + line[start:]
            lines[row] = line.rstrip()
            at = line.index(prefix + found[0], max(0, start - wide)) + wide + len(found[0])
    return "\n".join(lines)


def _stretched(line: str, column: int, wide: int) -> str:
    """The line with more columns before one of its own; a wire that runs across them goes on."""
    if column >= len(line):
        return line
    left, right = line[column - 1 : column], line[column]
    through = left and left in _RIGHTWARD and right in _LEFTWARD
    filler = "─" if through else left if left == right == "▒" else " "
    return line[:column] + filler * wide + line[column:]
