"""Reading a stage file. The file is data: nothing in it is executed.

Every mistake is a StageFileError (or, for what the circuit itself cannot have, a PartValueError or an
UnknownNameError) that names the file, the table and the key.
"""

from __future__ import annotations

import re
from collections.abc import Callable
from difflib import get_close_matches
from pathlib import Path

from preview.circuit.figures import parse_figure
from preview.circuit.limits import check_value, read_value
from preview.circuit.netlist import check_supply
from preview.circuit.nodes import GND, IN, LOAD_DESIGNATOR, OUT, SOURCE_DESIGNATOR, SOURCE_NODE
from preview.circuit.opamp_library import is_path, known_type
from preview.circuit.parts import Expect, OpAmp, Part, PartKind, Stage, Supply, TwoTerminal
from preview.circuit.tables import Table, decode, parse_toml, read_bytes
from preview.errors import NotationError, StageFileError, UnknownNameError, printable
from preview.values.eseries import series_name
from preview.values.notation import Kind, parse_value, quoted

__all__ = ["opamp_type", "parse_stage", "read_stage"]

MOST_PARTS = 200
"""A stage of more parts is refused: the matrices would not be solved while it plays."""
WIDEST_DRAWING, TALLEST_DRAWING = 100, 40
"""Columns and lines of the largest drawing."""

_PLANNED_KINDS = ("potentiometer", "switch", "diode", "voltage")
_DESIGNATOR = re.compile(r"[A-Za-z]{1,8}[0-9]{1,5}", re.ASCII)
_NODE = re.compile(r"[A-Za-z0-9_]{1,24}", re.ASCII)
_RESERVED_NODES = (IN, OUT, GND, SOURCE_NODE)
_WITHIN_KINDS: dict[str, Kind] = {"Hz": "frequency", "dB": "gain_db", "s": "time", "ohm": "resistance"}

_STAGE_EXAMPLE = (
    'begin with title = "...", supply = { positive = "15 V", negative = "-15 V" } and a table [parts]'
)
_SUPPLY_EXAMPLE = 'write supply = { positive = "15 V", negative = "-15 V" }'
_OPAMP_EXAMPLE = 'write U1 = { kind = "opamp", plus = "gnd", minus = "sum", out = "out", type = "ideal" }'
_PART_EXAMPLE = 'write R1 = { kind = "resistor", nodes = ["in", "out"], value = "10k" }'
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
    top.expect_keys(("title", "supply", "parts"), ("about", "expect", "drawing"), _STAGE_EXAMPLE)
    title, about, supply = _line(top, "title", required=True), _line(top, "about"), _supply(top)
    parts = _parts(top)
    return Stage(
        name=printable(name),
        title=title,
        about=about,
        supply=supply,
        parts=parts,
        expects=_expects(top, parts),
        drawing=_drawing(top),
        path=path,
    )


def _line(table: Table, key: str, *, required: bool = False) -> str:
    """Words on one line, cleaned."""
    words = printable(" ".join(table.text(key, "").split()))
    if required and not words:
        raise table.error(key, "empty", "say it in a few words")
    return words


def _read(table: Table, key: str, read: Callable[[str], float]) -> float:
    """A value from its text, its own complaint put behind file, table and key."""
    try:
        return read(table.text(key))
    except NotationError as error:
        raise StageFileError(f"{table.place} {key} = {error.message}", error.hint) from error


def _supply(top: Table) -> Supply:
    table = top.table("supply", "[supply]")
    table.expect_keys(("positive", "negative"), (), _SUPPLY_EXAMPLE)
    supply = Supply(
        positive_v=_read(table, "positive", lambda text: parse_value(text, "voltage")),
        negative_v=_read(table, "negative", lambda text: parse_value(text, "voltage")) + 0.0,
    )
    check_supply(supply, table.place)
    return supply


def _parts(top: Table) -> tuple[Part, ...]:
    group = top.table("parts", "[parts]")
    if not group.data:
        raise StageFileError(f"{group.place}: no parts", _PART_EXAMPLE)
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
        parts.append(_part(group.table(designator, f"[parts.{designator}]"), designator))
    _check_nodes(group, parts)
    return tuple(parts)


def _check_designator(group: Table, designator: str) -> None:
    if designator in (SOURCE_DESIGNATOR, LOAD_DESIGNATOR):
        raise StageFileError(
            f"{group.place} {designator}: the name is kept for what drives and follows the stage",
            "leave it out and state the source or load when the stage is used, or name it R and a number",
        )
    if not _DESIGNATOR.fullmatch(designator):
        raise StageFileError(
            f"{group.place} {quoted(designator)}: not a designator", "letters and then a number, such as R1"
        )


def _part(table: Table, designator: str) -> Part:
    if "kind" not in table.data:
        raise table.missing(["kind"], _PART_EXAMPLE)
    name = table.text("kind")
    kinds = ", ".join(PartKind)
    if name in _PLANNED_KINDS:
        raise StageFileError(f'{table.place} kind "{name}" is not supported yet; supported are {kinds}')
    if name not in list(PartKind):
        nearest = get_close_matches(name[:40], list(PartKind), n=1)
        start = f"did you mean {nearest[0]}? " if nearest else ""
        raise table.error("kind", "no such kind of part", f"{start}kinds are {kinds}")
    kind = PartKind(name)
    return _opamp(table, designator) if kind is PartKind.OPAMP else _two_terminal(table, designator, kind)


def _opamp(table: Table, designator: str) -> OpAmp:
    table.expect_keys(("kind", "plus", "minus", "out", "type"), ("role",), _OPAMP_EXAMPLE)
    plus, minus, out = (_node(table, key, table.text(key)) for key in ("plus", "minus", "out"))
    if plus == minus:
        raise table.error("minus", "plus and minus are the same node", "give them two different nodes")
    type_name = table.text("type")
    if is_path(type_name):
        raise table.error(
            "type",
            "a file, where a type's name is wanted",
            f"give the file when the stage is used: --opamp {designator}=FILE",
        )
    return OpAmp(
        designator=designator,
        plus=plus,
        minus=minus,
        out=out,
        type=opamp_type(type_name, f"{table.place} type = "),
        role=_line(table, "role"),
    )


def opamp_type(name: str, where: str) -> str:
    """The op-amp type as the library spells it; UnknownNameError, beginning with ``where``, for none."""
    try:
        return known_type(name)
    except UnknownNameError as error:
        place = f"{where}{quoted(name)}: " if where else ""
        raise UnknownNameError(f"{place}{error.message}", error.hint) from error


def _two_terminal(table: Table, designator: str, kind: PartKind) -> TwoTerminal:
    extra = ("dielectric",) if kind is PartKind.CAPACITOR else ()
    optional = ("tolerance", "series", "role", *extra)
    table.expect_keys(("kind", "nodes", "value"), optional, _PART_EXAMPLE)
    return TwoTerminal(
        designator=designator,
        kind=kind,
        nodes=_nodes(table),
        value=_value(table, "value", kind),
        tolerance_ratio=_tolerance(table) if "tolerance" in table.data else None,
        series=_series(table) if "series" in table.data else None,
        role=_line(table, "role"),
        dielectric=_line(table, "dielectric"),
    )


def _nodes(table: Table) -> tuple[str, str]:
    names = table.data["nodes"]
    cure = 'write nodes = ["in", "sum"]'
    if not isinstance(names, list) or len(names) != 2 or not all(isinstance(n, str) for n in names):
        raise table.error("nodes", "two node names are wanted", cure)
    a, b = (_node(table, "nodes", name) for name in names)
    if a == b:
        raise table.error("nodes", "both ends are on the same node", "give it two different nodes")
    return a, b


def _node(table: Table, key: str, name: str) -> str:
    if not _NODE.fullmatch(name):
        raise table.error(key, f"{quoted(name)} is not a node name", "use letters, digits and _, at most 24")
    if name == SOURCE_NODE:
        raise table.error(
            key, f"the node name {SOURCE_NODE} is kept for the source behind its resistance", "choose another"
        )
    for reserved in _RESERVED_NODES:
        if name.lower() == reserved and name != reserved:
            raise table.error(key, f"{name} could be mistaken for {reserved}", f"write {reserved}")
    return name


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


def _value(table: Table, key: str, kind: PartKind) -> float:
    """A part's value from text (``"4k7"``) or from a plain number in ohm, farad or henry."""
    if not isinstance(table.data[key], str):
        value = table.number(key)
        check_value(kind, value, f"{table.place} {key} = {value:g}")
        return value
    try:
        return read_value(kind, table.text(key), f"{table.place} {key} = ")
    except NotationError as error:
        raise StageFileError(error.message, error.hint) from error


def _tolerance(table: Table) -> float:
    percent = _read(table, "tolerance", lambda text: parse_value(text, "percent"))
    if not 0.0 < percent < 100.0:
        raise table.error("tolerance", "out of range", "above 0 % and below 100 %")
    return percent / 100.0


def _series(table: Table) -> str:
    try:
        return series_name(table.text("series"))
    except NotationError as error:
        raise StageFileError(f"{table.place} series = {error.message}", error.hint) from error


def _expects(top: Table, parts: tuple[Part, ...]) -> tuple[Expect, ...]:
    rows = top.data.get("expect", [])
    if not isinstance(rows, list) or not all(isinstance(row, dict) for row in rows):
        raise top.error("expect", "not an array of tables", "head each figure with [[expect]]")
    valued = {part.designator: part.kind for part in parts if isinstance(part, TwoTerminal)}
    return tuple(_expect(Table(top.file, f"[[expect]] {n}", row), valued) for n, row in enumerate(rows, 1))


def _expect(table: Table, valued: dict[str, PartKind]) -> Expect:
    table.expect_keys(("what", "value", "within", "source"), ("parts",), _EXPECT_EXAMPLE)
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
        source=_line(table, "source", required=True),
        parts=_overrides(table, valued) if "parts" in table.data else (),
    )


def _within(table: Table, unit: str) -> tuple[float, bool]:
    """The allowed deviation as a ratio or in the figure's unit, and whether it is the latter."""
    text = table.text("within").strip()
    if text.endswith("%"):
        if unit in ("dB", "deg"):
            raise table.error(
                "within", f"a percentage of a figure in {unit}", f'state it in {unit}: "0.1 {unit}"'
            )
        within, absolute = _read(table, "within", lambda body: parse_value(body, "percent")) / 100.0, False
    elif unit == "deg":
        degrees = re.fullmatch(r"([0-9]+(?:\.[0-9]+)?)\s*(?:deg|°)", text, re.ASCII)
        if degrees is None:
            raise table.error("within", "not an angle in degrees", 'write "0.1 deg"')
        within, absolute = float(degrees[1]), True
    else:
        kind = _WITHIN_KINDS[unit]
        within, absolute = _read(table, "within", lambda body: parse_value(body, kind)), True
    if not 0.0 < within < float("inf"):
        raise table.error("within", "the allowed deviation must be above zero")
    return within, absolute


def _overrides(table: Table, valued: dict[str, PartKind]) -> tuple[tuple[str, float], ...]:
    group = table.table("parts", f"{table.place.removeprefix(table.file).strip()} parts")
    for designator in group.data:
        if designator not in valued:
            raise StageFileError(
                f"{group.place} {quoted(designator)}: no such part with a value",
                f"there are {', '.join(valued)}",
            )
    return tuple((designator, _value(group, designator, valued[designator])) for designator in group.data)


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
