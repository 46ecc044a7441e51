"""Text tables of numbers: how one is laid out, found from its first lines, and its rows as arrays."""

from __future__ import annotations

import re
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from datetime import datetime
from itertools import takewhile
from pathlib import Path
from typing import BinaryIO

import numpy as np
from numpy.typing import NDArray

from preview.errors import AudioFileError, printable

__all__ = ["CHUNK_ROWS", "Chunk", "Table", "read_table"]

Real = NDArray[np.float64]

CHUNK_ROWS = 8192
HEAD_BYTES = 1 << 16
LOOK_ROWS = 40
COMMENTS = ("#", "%", "//")
DELIMITERS = ("\t", ";", ",", None)
"""What may stand between cells, the likelier first; None is any run of blanks."""

_EMPTY = ("", "nan", "na", "n/a", "null", "none", "-", "inf", "-inf", "+inf")
_TIME_NAME = re.compile(
    r"(t|time|date|timestamp|elapsed|seconds?|sec)(?![a-z0-9])|date.?time|time.?stamp", re.IGNORECASE
)
_UNIT = re.compile(r"[\[(_ ,/](s|sec|seconds?|ms|us|µs|μs|ns|min|h)[\])]?\s*$")
_VOLTS = re.compile(r"[\[(_ ,/]([numkµμ]?)V[\])]?\s*$")
_BRACKET = re.compile(r"\s*[\[(][^\[(]*[\])]\s*$")
_SECONDS = {"s": 1.0, "ms": 1e-3, "us": 1e-6, "µs": 1e-6, "μs": 1e-6, "ns": 1e-9, "min": 60.0, "h": 3600.0}
_MICRO = str.maketrans("µμ", "uu")
_CLOCK = re.compile(r"(\d+):(\d{1,2}):(\d{1,2}(?:[.,]\d+)?)")
_EPOCH = datetime(1970, 1, 1)


@dataclass(frozen=True, slots=True)
class Chunk:
    """Some rows one after the other."""

    offset: int
    """Where the first of them begins in the file [bytes]."""
    lines: list[str]
    """Their text."""


@dataclass(frozen=True, slots=True)
class Table:
    """How a table is laid out."""

    path: Path
    """The file."""
    delimiter: str | None
    """What stands between cells; None for blanks."""
    decimal_comma: bool
    """Whether numbers are written 1,5."""
    names: tuple[str, ...]
    """Name of each column; ``column 1`` and so on where it has no names."""
    start: int
    """Where the first row of numbers begins [bytes]."""
    comment: str
    """Lines before the table that are marked as comments."""
    sample: tuple[tuple[str, ...], ...]
    """Cells of the first rows."""
    titles: int
    """Cells of the line above them, if they are fewer and may be the names; otherwise 0."""

    def time_column(self, chosen: str, *, wanted: bool) -> int | None:
        """Index of the time column; None where there is none, which is an error where it is wanted."""
        if chosen:
            return self._index(chosen, "--time")
        for i, name in enumerate(self.names):
            if _TIME_NAME.match(name.strip()):
                return i
        if wanted:
            raise AudioFileError(
                f"{self.path}: no column is called time; it has {self._listed()}",
                self._torn() or "say which it is with --time, or give the rows a second with --rate",
            )
        return None

    def signal_columns(self, chosen: Sequence[str], time: int | None) -> tuple[int, ...]:
        """Indices of the columns that are the signal, each a channel."""
        if chosen:
            found = tuple(self._index(one, "--column") for one in chosen)
            if len(set(found)) != len(found):
                raise AudioFileError(f"{self.path}: --column names one column twice", self._listed())
            return found
        others = [i for i in range(len(self.names)) if i != time]
        if len(others) != 1:
            raise AudioFileError(
                f"{self.path}: it has {self._listed()}",
                self._torn() or "choose the signal with --column, by name or number",
            )
        return tuple(others)

    def seconds_per_unit(self, column: int) -> float:
        """Seconds in one unit of the time column, by the unit in its name; 1 without one."""
        found = _UNIT.search(self.names[column])
        return _SECONDS.get(found[1], 1.0) if found is not None else 1.0

    def volt_unit(self, columns: Sequence[int]) -> str:
        """The unit of voltage in the names of some columns, such as ``mV``; empty where none of them has one."""
        found = [_VOLTS.search(self.names[i]) for i in columns]
        units = {one[1].translate(_MICRO) + "V" if one is not None else "V" for one in found}
        if len(units) > 1:
            raise AudioFileError(
                f"{self.path}: its columns are not in one unit: {', '.join(self.names[i] for i in columns)}",
                "choose one of them with --column, or bring them to one unit",
            )
        return units.pop() if any(found) else ""

    def time_resolution_s(self, column: int) -> float:
        """Last digit of the times as they are written [s]."""
        digits = 0
        for row in self.sample:
            text = row[column].strip().strip('"').lower().replace(",", ".") if column < len(row) else ""
            if "e" in text and _number(text, False) is not None:
                digits = max(digits, 9)
            tail = text.rpartition(".")[2] if "." in text else ""
            digits = max(digits, len(list(takewhile(str.isdigit, tail))))
        scale = self.seconds_per_unit(column) if self._numeric(column) else 1.0
        return float(10.0**-digits) * scale

    def chunks(self, file: BinaryIO, offset: int) -> Iterator[Chunk]:
        """The rows from a place in the file on."""
        file.seek(offset)
        at, lines = offset, list[str]()
        for raw in file:
            text = raw.decode("utf-8", errors="replace").strip("\r\n")
            if text.strip() and not text.lstrip().startswith(COMMENTS):
                lines.append(text)
            offset += len(raw)
            if len(lines) == CHUNK_ROWS:
                yield Chunk(at, lines)
                at, lines = offset, []
        if lines:
            yield Chunk(at, lines)

    def numbers(self, chunk: Chunk, columns: Sequence[int]) -> Real:
        """Cells of some columns, shape (rows, columns); nan where there is no number."""
        lines = [line.replace(",", ".") for line in chunk.lines] if self.decimal_comma else chunk.lines
        try:
            read = np.loadtxt(
                lines, delimiter=self.delimiter, usecols=columns, ndmin=2, comments=None, quotechar='"'
            )
        except ValueError:
            return self._cell_by_cell(chunk, columns)
        if len(read) != len(lines):
            return self._cell_by_cell(chunk, columns)
        read[~np.isfinite(read)] = np.nan
        return np.asarray(read, dtype=np.float64)

    def times_s(self, chunk: Chunk, column: int) -> Real:
        """The time column [s]; nan where it cannot be read."""
        if self._numeric(column):
            return self.numbers(chunk, [column])[:, 0] * self.seconds_per_unit(column)
        cells = [self.cells(line) for line in chunk.lines]
        return np.array([_stamp_s(row[column]) if column < len(row) else np.nan for row in cells])

    def cells(self, line: str) -> list[str]:
        """The cells of one line."""
        return _split(line, self.delimiter)

    def _cell_by_cell(self, chunk: Chunk, columns: Sequence[int]) -> Real:
        out = np.full((len(chunk.lines), len(columns)), np.nan)
        for i, line in enumerate(chunk.lines):
            row = self.cells(line)
            for j, column in enumerate(columns):
                value = _number(row[column], self.decimal_comma) if column < len(row) else None
                if value is not None and np.isfinite(value):
                    out[i, j] = value
        return out

    def _numeric(self, column: int) -> bool:
        cells = [row[column] for row in self.sample if column < len(row)]
        return any(_number(cell, self.decimal_comma) is not None for cell in cells)

    def _index(self, chosen: str, option: str) -> int:
        wanted = chosen.strip().lower()
        for i, name in enumerate(self.names):
            if wanted in (name.strip().lower(), _BRACKET.sub("", name).strip().lower()):
                return i
        if wanted.isdigit() and 1 <= int(wanted) <= len(self.names):
            return int(wanted) - 1
        raise AudioFileError(f"{self.path}: {option} {chosen}: no such column", f"it has {self._listed()}")

    def _torn(self) -> str:
        """What to do about decimal commas that have been taken for what parts the cells; empty where there are none."""
        whole = all(cell.strip().strip('"').lstrip("+-").isdigit() for row in self.sample for cell in row)
        if self.delimiter != "," or not self.titles or not whole:
            return ""
        return (
            f"{len(self.names)} cells a row under {self.titles} name{'s' * (self.titles != 1)}: "
            "if 1,5 is one number, save it with semicolons or tabs between the columns"
        )

    def _listed(self) -> str:
        shown = ", ".join(self.names[:12]) + (" ..." if len(self.names) > 12 else "")
        return printable(f"column{'s' * (len(self.names) != 1)} {shown}")


def read_table(file: BinaryIO, path: Path) -> Table:
    """The layout of a table, from its first lines.

    Raises
    ------
    AudioFileError
        There is no row of numbers.
    """
    file.seek(0)
    head = file.read(HEAD_BYTES)
    if head[:2] in (b"\xff\xfe", b"\xfe\xff"):
        raise AudioFileError(f"{path}: is text of 16 bits a letter", "save it as UTF-8")
    if b"\0" in head:
        raise AudioFileError(f"{path}: is not a text table")
    lines = list[tuple[int, str]]()
    comments, at = list[str](), 0
    raws = head.split(b"\n")
    if len(head) == HEAD_BYTES:
        raws.pop()  # it may be cut
    for raw in raws:
        text = raw.decode("utf-8-sig" if at == 0 else "utf-8", errors="replace").strip("\r")
        if text.lstrip().startswith(COMMENTS):
            comments.append(text.lstrip("#%/ \t"))
        elif text.strip():
            lines.append((at, text))
        at += len(raw) + 1
    for delimiter in DELIMITERS:
        found = _laid_out(path, lines, delimiter, printable("; ".join(comments)))
        if found is not None:
            return found
    raise AudioFileError(
        f"{path}: no rows of numbers in it", "a log has one row a sample, such as 0.01, 1.234"
    )


def _laid_out(path: Path, lines: list[tuple[int, str]], delimiter: str | None, comment: str) -> Table | None:
    """The table if its cells are parted by this delimiter."""
    rows = [_split(text, delimiter) for _, text in lines]
    last = rows[-LOOK_ROWS:]
    if not last:
        return None
    width = max(set(map(len, last)), key=list(map(len, last)).count)
    if width == 1 and delimiter is not None:
        return None  # what parts nothing parts by blanks, or is the only column
    whole = [row for row in last if len(row) == width]
    comma = delimiter != "," and any("," in cell for row in whole for cell in row)
    comma = comma and not any(
        "." in cell and _number(cell, False) is not None for row in whole for cell in row
    )
    shares = [sum(_number(row[i], comma) is not None for row in whole) / len(whole) for i in range(width)]
    numeric = [i for i, share in enumerate(shares) if share >= 0.5]
    if not numeric or len(whole) < 0.5 * len(last):
        return None

    def fits(row: list[str]) -> bool:
        return len(row) == width and all(
            _number(row[i], comma) is not None or row[i].strip().lower() in _EMPTY for i in numeric
        )

    first = next(
        (
            i
            for i, row in enumerate(rows)
            if fits(row)
            and any(_number(row[j], comma) is not None for j in numeric)
            and (i + 2 >= len(rows) or fits(rows[i + 1]) or fits(rows[i + 2]))
        ),
        None,
    )
    if first is None:
        return None

    def named(row: list[str]) -> bool:
        return len(row) == width and not any(_number(cell, comma) is not None for cell in row)

    above = list(takewhile(named, reversed(rows[:first])))[::-1]
    narrow = rows[first - 1] if first and not above else []
    names = [f"column {i + 1}" for i in range(width)]
    if above:
        below = [cell.strip() for cell in above[1]] if len(above) > 1 else [""] * width
        for i, (name, unit) in enumerate(zip(above[0], below, strict=True)):
            unit = unit.strip("[]() ")
            names[i] = printable(f"{name.strip()} [{unit}]" if unit else name.strip()) or names[i]
    sample = tuple(tuple(row) for row in rows[first : first + LOOK_ROWS])
    few = len(narrow) < width and not any(_number(cell, comma) is not None for cell in narrow)
    return Table(
        path, delimiter, comma, tuple(names), lines[first][0], comment, sample, len(narrow) if few else 0
    )


def _split(line: str, delimiter: str | None) -> list[str]:
    """Cells of a line; a delimiter between quotes parts nothing."""
    if delimiter is None:
        return line.split()
    if '"' not in line:
        return line.split(delimiter)
    cells, quoted = [""], False
    for ch in line:
        if ch == '"':
            quoted = not quoted
        elif ch == delimiter and not quoted:
            cells.append("")
        else:
            cells[-1] += ch
    return cells


def _number(cell: str, decimal_comma: bool) -> float | None:
    text = cell.strip().strip('"')
    if decimal_comma:
        text = text.replace(",", ".")
    if "_" in text or text.lower() in _EMPTY:
        return None
    try:
        return float(text)
    except ValueError:
        return None


def _stamp_s(cell: str) -> float:
    """Seconds of a date and time, or of a clock."""
    text = cell.strip().strip('"')
    clock = _CLOCK.fullmatch(text)
    if clock is not None:
        return 3600.0 * int(clock[1]) + 60.0 * int(clock[2]) + float(clock[3].replace(",", "."))
    try:
        when = datetime.fromisoformat(text)
    except ValueError:
        return float("nan")
    offset = when.utcoffset()
    seconds = (when.replace(tzinfo=None) - _EPOCH).total_seconds()
    return seconds - (offset.total_seconds() if offset is not None else 0.0)
