"""Reading a stage file. The file is data: nothing in it is executed.

Every mistake is a StageFileError (or, for what the circuit itself cannot have, a PartValueError or an
UnknownNameError) that names the file, the table and the key.
"""

from __future__ import annotations

import re
from pathlib import Path

from preview.circuit.diodes import ROOM_DEGC
from preview.circuit.figures import parse_figure
from preview.circuit.nodes import (
    GND,
    IN,
    LOAD_PARTS,
    NEGATIVE_RAIL,
    OUT,
    POSITIVE_RAIL,
    SOURCE_NODE,
    SOURCE_PARTS,
)
from preview.circuit.part_reader import PART_EXAMPLE, opamp_type, read_part, setting, temperature_degc
from preview.circuit.parts import Expect, Part, SettablePart, Stage, Supply
from preview.circuit.sites import check_supply
from preview.circuit.tables import Table, decode, parse_toml, read_bytes
from preview.errors import StageFileError, printable
from preview.values.notation import Kind, parse_value, quoted

__all__ = ["parse_stage", "read_stage"]

MOST_PARTS = 200
"""A stage of more parts is refused: the matrices would not be solved while it plays."""
WIDEST_DRAWING, TALLEST_DRAWING = 100, 40
"""Columns and lines of the largest drawing."""

_DESIGNATOR = re.compile(r"[A-Za-z]{1,8}[0-9]{1,5}", re.ASCII)
_WITHIN_KINDS: dict[str, Kind] = {
    "Hz": "frequency",
    "dB": "gain_db",
    "s": "time",
    "ohm": "resistance",
    "deg": "angle",
}

_STAGE_EXAMPLE = (
    'begin with title = "...", supply = { positive = "15 V", negative = "-15 V" } and a table [parts]'
)
_SUPPLY_EXAMPLE = 'write supply = { positive = "15 V", negative = "-15 V" }'
_EXPECT_EXAMPLE = 'write what = "corner_hz", value = 1591.5, within = "0.1 %", source = "..."'


def read_stage(path: Path) -> Stage:
    """The stage in a file.

    Raises
    ------
    StageFileError
        No such file, not TOML, or not a stage.
    PartValueError
        A part value that no such part can have.
    UnknownNameError
        An op-amp type that is not in the library.
    """
    file = str(path)
    return parse_stage(decode(read_bytes(path), file), name=path.stem, file=file, path=path)


def parse_stage(text: str, *, name: str, file: str, path: Path | None = None) -> Stage:
    """The stage in the text of a stage file; raises as ``read_stage`` does.

    Parameters
    ----------
    text : str
        The TOML text.
    name : str
        Short name of the stage.
    file : str
        The file's name for messages.
    path : Path, optional
        Where it was read from.
    """
    top = parse_toml(text, file)
    optional = ("about", "temperature", "outputs", "expect", "drawing")
    top.expect_keys(("title", "supply", "parts"), optional, _STAGE_EXAMPLE)
    title, about, supply = top.line("title", required=True), top.line("about"), _supply(top)
    parts = _parts(top)
    outputs = _outputs(top, parts)
    warmth_degc = temperature_degc(top)
    return Stage(
        name=printable(name),
        title=title,
        about=about,
        supply=supply,
        parts=parts,
        expects=_expects(top, parts, outputs),
        drawing=_drawing(top),
        path=path,
        outputs=outputs,
        temperature_degc=ROOM_DEGC if warmth_degc is None else warmth_degc,
    )


def _supply(top: Table) -> Supply:
    table = top.table("supply", "[supply]")
    table.expect_keys(("positive", "negative"), (), _SUPPLY_EXAMPLE)
    supply = Supply(
        positive_v=table.read("positive", lambda text: parse_value(text, "voltage")),
        negative_v=table.read("negative", lambda text: parse_value(text, "voltage")) + 0.0,
    )
    check_supply(supply, table.place)
    return supply


def _parts(top: Table) -> tuple[Part, ...]:
    group = top.table("parts", "[parts]")
    if not group.data:
        raise StageFileError(f"{group.place}: no parts", PART_EXAMPLE)
    if len(group.data) > MOST_PARTS:
        raise StageFileError(f"{group.place}: {len(group.data)} parts", f"{MOST_PARTS} at most")
    parts = []
    spelled: dict[str, str] = {}
    for designator in group.data:
        _check_designator(group, designator)
        other = spelled.setdefault(designator.lower(), designator)
        if other != designator:
            raise StageFileError(
                f"{group.place} {designator}: differs from {other} only by case", "rename one"
            )
        parts.append(read_part(group.table(designator, f"[parts.{designator}]"), designator))
    _check_nodes(group, parts)
    return tuple(parts)


def _check_designator(group: Table, designator: str) -> None:
    if designator in (*SOURCE_PARTS, *LOAD_PARTS):
        raise StageFileError(
            f"{group.place} {designator}: the name is kept for what drives and follows the stage",
            "leave it out and state the source or load when the stage is used, or name it R and a number",
        )
    if not _DESIGNATOR.fullmatch(designator):
        raise StageFileError(
            f"{group.place} {quoted(designator)}: not a designator", "letters and then a number, such as R1"
        )


def _check_nodes(group: Table, parts: list[Part]) -> None:
    """What only the parts together show: names alike but for case, no in, no out."""
    spelled: dict[str, str] = {}
    for part in parts:
        for node in part.nodes:
            other = spelled.setdefault(node.lower(), node)
            if other != node:
                raise StageFileError(
                    f"{group.place}: nodes {other} and {node} differ only by case",
                    "spell them alike or rename one",
                )
    for node, words in ((IN, "signal input"), (OUT, "signal output")):
        if node not in spelled.values():
            raise StageFileError(
                f"{group.place}: no part is connected to node {node}, the {words}",
                f"nodes are {', '.join(spelled.values())}",
            )


def _outputs(top: Table, parts: tuple[Part, ...]) -> tuple[str, ...]:
    """Further nodes to listen to, each a node of some part."""
    names = top.data.get("outputs", [])
    if not isinstance(names, list) or not all(isinstance(name, str) for name in names):
        raise top.error("outputs", "node names are wanted", 'write outputs = ["hp", "bp"]')
    held = {GND, IN, OUT, SOURCE_NODE, POSITIVE_RAIL, NEGATIVE_RAIL}
    nodes = {node: None for part in parts for node in part.nodes if node not in held}
    for name in names:
        if name in held:
            raise top.error("outputs", f"{name} is not a further output", "out is one without being listed")
        if name not in nodes:
            known = ", ".join(nodes) or "none but in, out and gnd"
            raise top.error("outputs", f"no part is connected to {quoted(name)}", f"nodes are {known}")
        if names.count(name) > 1:
            raise top.error("outputs", f"{name} is listed twice", "list each output once")
    return tuple(names)


def _expects(top: Table, parts: tuple[Part, ...], outputs: tuple[str, ...]) -> tuple[Expect, ...]:
    rows = top.data.get("expect", [])
    if not isinstance(rows, list) or not all(isinstance(row, dict) for row in rows):
        raise top.error("expect", "not an array of tables", "head each figure with [[expect]]")
    settable = {part.designator: part for part in parts if isinstance(part, SettablePart)}
    tables = [Table(top.file, f"[[expect]] {n}", row) for n, row in enumerate(rows, 1)]
    return tuple(_expect(table, settable, (OUT, *outputs)) for table in tables)


def _expect(table: Table, settable: dict[str, SettablePart], outputs: tuple[str, ...]) -> Expect:
    table.expect_keys(("what", "value", "within", "source"), ("parts", "output", "opamp"), _EXPECT_EXAMPLE)
    output = table.text("output", OUT)
    if output not in outputs:
        raise table.error("output", "not an output of this stage", f"outputs are {', '.join(outputs)}")
    what = table.text("what")
    try:
        unit = parse_figure(what).unit
    except ValueError as error:
        raise table.error("what", "no such figure", str(error)) from error
    within, absolute = _within(table, unit)
    value = table.number("value")
    if value == 0.0 and not absolute:
        raise table.error("within", "a percentage of 0 leaves no room", f"state it in {unit}")
    return Expect(
        what=what,
        value=value,
        within=within,
        absolute=absolute,
        source=table.line("source", required=True),
        parts=_overrides(table, settable) if "parts" in table.data else (),
        output=output,
        opamp=opamp_type(table.text("opamp"), f"{table.place} opamp = ") if "opamp" in table.data else "",
    )


def _within(table: Table, unit: str) -> tuple[float, bool]:
    """The allowed deviation as a ratio or in the figure's unit, and whether it is the latter."""
    text = table.text("within").strip()
    if text.endswith("%"):
        if unit in ("dB", "deg"):
            raise table.error(
                "within", f"a percentage of a figure in {unit}", f'state it in {unit}: "0.1 {unit}"'
            )
        within, absolute = table.read("within", lambda body: parse_value(body, "percent")) / 100.0, False
    elif not unit:
        raise table.error("within", "not a percentage, which a ratio needs", 'write "0.1 %"')
    else:
        kind = _WITHIN_KINDS[unit]
        within, absolute = table.read("within", lambda body: parse_value(body, kind)), True
    if not 0.0 < within < float("inf"):
        raise table.error("within", "the allowed deviation must be above zero")
    return within, absolute


def _overrides(table: Table, settable: dict[str, SettablePart]) -> tuple[tuple[str, float], ...]:
    group = table.table("parts", f"{table.place.removeprefix(table.file).strip()} parts")
    for designator in group.data:
        if designator not in settable:
            raise StageFileError(
                f"{group.place} {quoted(designator)}: no such part with a value",
                f"there are {', '.join(settable)}",
            )
    return tuple((name, setting(group, name, settable[name])) for name in group.data)


def _drawing(top: Table) -> str:
    lines = [printable(line.expandtabs(4)).rstrip() for line in top.text("drawing", "").splitlines()]
    while lines and not lines[0]:
        del lines[0]
    while lines and not lines[-1]:
        del lines[-1]
    if len(lines) > TALLEST_DRAWING:
        raise StageFileError(f"{top.file} drawing: {len(lines)} lines", f"{TALLEST_DRAWING} lines at most")
    widest = max(map(len, lines), default=0)
    if widest > WIDEST_DRAWING:
        raise StageFileError(f"{top.file} drawing: {widest} columns", f"{WIDEST_DRAWING} columns at most")
    return "\n".join(lines)
