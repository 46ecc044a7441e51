"""Logs of numbers as signals: text tables (CSV, TSV) with a time column, or a rate that is given.

One unit in a column is a sample of 1.0, so the volts of full scale are the volts per unit; a column called ``level
[mV]`` states it. Rows are read as they
come, in constant memory; a first pass counts them, finds the rate and looks whether any are missing.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from types import TracebackType
from typing import BinaryIO, Self

import numpy as np
from numpy.typing import NDArray

from preview.audio.files import CHANNELS_MAX, SAMPLE_RATE_MAX_HZ, FileInfo, reason
from preview.audio.logtable import CHUNK_ROWS, Table, read_table
from preview.audio.source import FileSource
from preview.errors import AudioFileError
from preview.values.levels import full_scale_comment, full_scale_in_comment, parse_full_scale

__all__ = ["LOG_ENDINGS", "LOG_RATE_MIN_HZ", "LogFormat", "LogSource", "is_log", "open_signal"]

Real = NDArray[np.float64]

LOG_ENDINGS = (".csv", ".tsv")
LOG_RATE_MIN_HZ = 1.0

GAP = 1.75
"""A step in time of so many intervals means that a row is missing between."""
UNEVEN = 0.1
"""A step that is so many intervals off is worth a warning."""


@dataclass(frozen=True, slots=True)
class LogFormat:
    """What the options say of a log; what they leave open is found in it."""

    rate_hz: float | None = None
    """Rows a second [Hz]; None where the time column says so."""
    time: str = ""
    """Time column, by name or number from 1; empty to look for one."""
    columns: tuple[str, ...] = ()
    """Signal columns, each a channel, by name or number from 1; empty for the only one there is."""


def is_log(path: Path) -> bool:
    """Whether the name's ending is that of a log."""
    return path.suffix.lower() in LOG_ENDINGS


def open_signal(path: Path, form: LogFormat | None = None) -> FileSource | LogSource:
    """A recording or a log, by the name's ending.

    Raises
    ------
    AudioFileError
        It cannot be read.
    """
    return LogSource(path, form or LogFormat()) if is_log(path) else FileSource(path)


class LogSource:
    """A log of numbers, read in order or from any row.

    Parameters
    ----------
    path : Path
        The file.
    form : LogFormat
        What is known of it.

    Raises
    ------
    AudioFileError
        It cannot be read as a table, a column is not there, or rows are missing.
    """

    def __init__(self, path: Path, form: LogFormat) -> None:
        self.position = 0
        """Row that the next ``read`` begins with."""
        self.non_finite_count = 0
        """Cells without a number; each holds the value before it."""
        self._chunks: Iterator[Real] = iter(())
        self._waiting: Real = np.zeros((0, 0))
        self._file = _opened(path)
        try:
            self._table: Table = read_table(self._file, path)
            time = self._table.time_column(form.time, wanted=form.rate_hz is None)
            self._columns = self._table.signal_columns(form.columns, time)
            if len(self._columns) > CHANNELS_MAX:
                found = f"{path}: {len(self._columns)} columns"
                raise AudioFileError(found, f"at most {CHANNELS_MAX} can be read")
            self._starts: list[int] = []
            self._holds: list[Real] = []
            clock = _Clock(path, self._table, time) if form.rate_hz is None and time is not None else None
            rows = self._look_through(clock)
        except BaseException:
            self._file.close()
            raise
        rate_hz = form.rate_hz if clock is None else clock.rate_hz(rows)
        self._warnings = () if clock is None else clock.warnings
        self.info = FileInfo(
            path=path,
            frames=rows,
            channels=len(self._columns),
            sample_rate_hz=_checked_rate(path, rate_hz or 0.0),
            format="text",
            subtype=", ".join(self._table.names[i] for i in self._columns),
            comment=self._comment(),
        )
        self.seek(0)

    @property
    def channels(self) -> int:
        """Number of channels."""
        return len(self._columns)

    @property
    def sample_rate_hz(self) -> float:
        """Sample rate [Hz]."""
        return self.info.sample_rate_hz

    @property
    def frames(self) -> int:
        """Rows."""
        return self.info.frames

    @property
    def warnings(self) -> tuple[str, ...]:
        """What is wrong but not fatal, one plain line each."""
        if not self.non_finite_count:
            return self._warnings
        count = self.non_finite_count
        found = f"{count} {'cell holds' if count == 1 else 'cells hold'} no number; taken as the value before"
        return (*self._warnings, found)

    def read(self, samples_out: Real) -> int:
        """Fill the array (n, channels) from its start with units of the columns; the rows filled, 0 at the end."""
        want = min(len(samples_out), self.frames - self.position)
        filled = 0
        while filled < want:
            if not len(self._waiting):
                self._waiting = next(self._chunks)
            count = min(want - filled, len(self._waiting))
            samples_out[filled : filled + count] = self._waiting[:count]
            self._waiting = self._waiting[count:]
            filled += count
        self.position += filled
        return filled

    def seek(self, frame: int) -> None:
        """Make that row the next to be read; it is held within the log."""
        self.position = min(max(0, frame), self.frames)
        block, rest = divmod(self.position, CHUNK_ROWS)
        self._chunks = self._from(block)
        self._waiting = next(self._chunks)[rest:] if rest else np.zeros((0, self.channels))

    def close(self) -> None:
        """Let go of the file."""
        self._file.close()

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    def _comment(self) -> str:
        """Its comment, with the full scale that its columns state where the comment states none."""
        comment, unit = self._table.comment, self._table.volt_unit(self._columns)
        if not unit or full_scale_in_comment(comment) is not None:
            return comment
        return "; ".join(
            part for part in (full_scale_comment(parse_full_scale(f"1 {unit}")), comment) if part
        )

    def _from(self, block: int) -> Iterator[Real]:
        """Chunks of numbers from one on, missing ones held."""
        if block >= len(self._starts):
            return
        held = self._holds[block]
        for chunk in self._table.chunks(self._file, self._starts[block]):
            rows = _held(self._table.numbers(chunk, self._columns), held)
            held = rows[-1]
            yield rows

    def _look_through(self, clock: _Clock | None) -> int:
        """Count the rows, and note where chunks of them begin and with what."""
        rows = 0
        held = np.zeros(len(self._columns))
        for chunk in self._table.chunks(self._file, self._table.start):
            numbers = self._table.numbers(chunk, self._columns)
            self.non_finite_count += int(np.isnan(numbers).sum())
            self._starts.append(chunk.offset)
            self._holds.append(held)
            held = _held(numbers, held)[-1]
            if clock is not None:
                clock.take(self._table.times_s(chunk, clock.column), rows)
            rows += len(numbers)
        return rows


class _Clock:
    """Finds the rate of a time column, and whether its rows are evenly spaced."""

    def __init__(self, path: Path, table: Table, column: int) -> None:
        self.column = column
        self.warnings: tuple[str, ...] = ()
        self._path = path
        self._resolution_s = table.time_resolution_s(column)
        self._first_s = self._interval_s = self._slack_s = self._worst = 0.0
        self._last_s: float | Real = 0.0

    def take(self, times_s: Real, row: int) -> None:
        """The times of the next rows, the first of which has that number."""
        if np.isnan(times_s).any():
            at = row + int(np.argmax(np.isnan(times_s))) + 1
            raise AudioFileError(
                f"{self._path}: row {at} of the numbers has no time in it",
                "mend it, or give --rate in its place",
            )
        if row == 0:
            self._begin(times_s)
        steps = np.diff(times_s, prepend=self._last_s)
        self._last_s = float(times_s[-1])
        if not steps.size:
            return
        odd = (steps > max(GAP * self._interval_s, self._interval_s + self._slack_s)) | (steps < 0.0)
        if odd.any():
            at = int(np.argmax(odd))
            raise AudioFileError(
                f"{self._path}: row {row + at + (row == 0) + 1} of the numbers comes {steps[at]:.6g} s after the one "
                f"before, where {self._interval_s:.6g} s is usual",
                "mend it, or give --rate to leave the times aside",
            )
        off = np.maximum(np.abs(steps - self._interval_s) - self._slack_s, 0.0)
        self._worst = max(self._worst, float(off.max()) / self._interval_s)

    def _begin(self, times_s: Real) -> None:
        """What is usual, from the first rows: a step, and how much of it is rounding."""
        self._first_s = float(times_s[0])
        self._last_s = np.empty(0)
        steps = np.diff(times_s)
        if not steps.size:
            return
        mean_s = float(steps.mean())
        even = times_s - times_s[0] - mean_s * np.arange(len(times_s))
        if np.abs(even).max() <= 1.01 * self._resolution_s:  # an even grid, rounded
            self._interval_s = mean_s
            self._slack_s = 1.05 * float(np.abs(steps - mean_s).max()) + 1e-6 * abs(mean_s)
        else:
            self._interval_s, self._slack_s = float(np.median(steps)), self._resolution_s
        if self._interval_s <= 0.0:
            raise AudioFileError(f"{self._path}: its times do not rise", "give --rate to leave them aside")

    def rate_hz(self, rows: int) -> float:
        """Rows a second over all, in as few digits as the times allow [Hz]."""
        if rows < 2:
            raise AudioFileError(f"{self._path}: one row has no rate", "give --rate")
        span_s = float(self._last_s) - self._first_s
        rate_hz = (rows - 1) / span_s
        if self._worst > UNEVEN:
            self.warnings = (f"times are up to {100 * self._worst:.0f} % of a step uneven; taken as even",)
        unsure = 2.0 * self._resolution_s / span_s + 1e-12
        for digits in range(1, 15):
            near = float(f"{rate_hz:.{digits}g}")
            if abs(near / rate_hz - 1.0) <= unsure:
                return near
        return rate_hz


def _checked_rate(path: Path, rate_hz: float) -> float:
    if not LOG_RATE_MIN_HZ <= rate_hz <= SAMPLE_RATE_MAX_HZ:
        raise AudioFileError(
            f"{path}: {rate_hz:.6g} rows a second",
            f"{LOG_RATE_MIN_HZ:g} to {SAMPLE_RATE_MAX_HZ} can be used; --rate says so where the times do not",
        )
    return rate_hz


def _held(numbers: Real, before: Real) -> Real:
    """The same with each missing number as the one above it, ``before`` above the first."""
    missing = np.isnan(numbers)
    if not missing.any():
        return numbers
    with_before = np.concatenate([before[None], numbers])
    row = np.where(np.isnan(with_before), 0, np.arange(len(with_before))[:, None])
    row = np.maximum.accumulate(row, axis=0)
    return np.asarray(np.take_along_axis(with_before, row, axis=0)[1:])


def _opened(path: Path) -> BinaryIO:
    try:
        if path.is_dir():
            raise AudioFileError(f"{path}: is a folder, not a log")
        return open(path, "rb")
    except AudioFileError:
        raise
    except OSError as error:
        raise AudioFileError(f"{path}: {reason(error)}") from error
    except ValueError as error:  # a NUL in the name
        raise AudioFileError(f"{path}: no file can have this name") from error
