"""What a check reports: one JSON object in SI base units, tables for a person, rows for a spreadsheet."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import asdict, dataclass

from preview.dsp.events import LimitEvent
from preview.engine.check.results import CheckPlan, FileCheck, FileFailure
from preview.engine.check.wants import Bound, Miss, Want, margin_of_any_db
from preview.engine.options import understood_values
from preview.errors import printable
from preview.values.levels import dbfs_from_vpk, format_db, format_volts
from preview.values.notation import format_value

__all__ = ["CheckReport", "columns", "limit_said", "time_code"]

NAME_WIDTH = 28
"""Characters of a file's name in a table on a terminal."""


@dataclass(frozen=True, slots=True)
class CheckReport:
    """All results of one check."""

    plan: CheckPlan
    """What the recordings were put through."""
    files: tuple[FileCheck, ...]
    """Those checked, in order."""
    failures: tuple[FileFailure, ...]
    """Those that could not be."""
    wants: tuple[Want, ...]
    """What was wanted."""
    misses: tuple[Miss, ...]
    """What was missed."""
    bounds: tuple[Bound, ...]
    """The worst that any signal can do to each op-amp; empty where there is no bound."""
    bound_gains: Mapping[str, float]
    """Largest output over the input's peak, by op-amp [V/V]."""
    response_error_db: Mapping[float, float]
    """Largest deviation of the computed from the exact gain, by sample rate [dB]."""
    complete: bool = True
    """False where it was interrupted."""

    @property
    def exit_code(self) -> int:
        """3 where a file could not be checked, 1 where a want was missed, else 0."""
        if self.failures:
            return max(f.exit_code for f in self.failures)
        return 1 if self.misses else 0

    def as_object(self) -> dict[str, object]:
        """The report, keys with their units; of a single file its figures stand at the top as well."""
        files = [self._file(found) for found in self.files]
        body: dict[str, object] = {
            "command": "check",
            "understood": understood_values(self.plan.session),
            "complete": self.complete,
            "files": files,
            "failed": [{"file": f.path, "message": f.message, "hint": f.hint} for f in self.failures],
            "limits": [
                {
                    "want": want.text,
                    "met": not any(m.want == want.text for m in self.misses),
                    "misses": [
                        {"file": m.path, "opamp": m.opamp, "found": m.found}
                        for m in self.misses
                        if m.want == want.text
                    ],
                }
                for want in self.wants
            ],
        }
        if len(files) == 1 and not self.failures:
            body |= files[0]
        return body

    def _file(self, found: FileCheck) -> dict[str, object]:
        levels = {
            name: {
                **asdict(read),
                "peak_dbfs": dbfs_from_vpk(read.peak_v, found.full_scale_v),
                "true_peak_dbfs": dbfs_from_vpk(read.true_peak_v, found.full_scale_v),
            }
            for name, read in (("input", found.input), ("output", found.output))
        }
        margin = found.margin
        return {
            "file": printable(found.path),
            "sample_rate_hz": found.sample_rate_hz,
            "frames": found.frames,
            "channels": found.channels,
            "full_scale_v": found.full_scale_v,
            "quality": found.quality,
            "realtime_ratio": found.realtime_ratio,
            "response_error_db": self.response_error_db.get(found.sample_rate_hz, math.nan),
            **levels,
            "clean_gain_db": math.nan if margin is None else margin.gain_db,
            "limited_by": "" if margin is None else margin.limited_by,
            "limit": "" if margin is None else margin.limit,
            "proof": "" if margin is None else margin.proof,
            "any_signal_gain_db": margin_of_any_db(found, self.bounds),
            "opamps": [
                {
                    **asdict(opamp),
                    "bound_v": abs(opamp.rest_v)
                    + self.bound_gains.get(opamp.name, math.nan) * found.input.true_peak_v,
                }
                for opamp in found.opamps
            ],
            "event_count": found.event_count,
            "events": [
                {**asdict(event), "time": time_code(event.start_s), "length_s": event.length_s}
                for event in found.events
            ],
            "warnings": list(found.warnings),
        }

    def rows(self) -> list[dict[str, object]]:
        """A row for each op-amp of each file, for a spreadsheet."""
        rows: list[dict[str, object]] = []
        for found in self.files:
            file = self._file(found)
            opamps, _ = file.pop("opamps"), file.pop("events")
            assert isinstance(opamps, list)
            rows += [file | {f"opamp_{k}": v for k, v in opamp.items()} for opamp in opamps] or [file]
        return rows + [{"file": f.path, "message": f.message} for f in self.failures]

    def event_rows(self) -> list[dict[str, object]]:
        """A row for each visit to a limit."""
        return [
            {"file": printable(found.path), "time": time_code(e.start_s), **asdict(e), "length_s": e.length_s}
            for found in self.files
            for e in found.events
        ]

    def lines(self) -> list[str]:
        """Tables of op-amps, of levels and of margins, and what is to be said besides."""
        lines: list[str] = []
        for heads, rows in self.tables():
            lines += [*columns(heads, rows), ""]
        return lines + self.said()

    def tables(self, name_width: int = NAME_WIDTH) -> list[tuple[Sequence[str], list[list[str]]]]:
        """Heads and rows of each table; names of files are shortened to so many characters."""
        names = _short([found.path for found in self.files], name_width)
        named = list(zip(self.files, names, strict=True))
        if not named:
            return []
        tables: list[tuple[Sequence[str], list[list[str]]]] = [
            (_OPAMP_HEADS, [row for found, name in named for row in _opamps(found, name)]),
            (_LEVEL_HEADS, [row for found, name in named for row in _levels(found, name)]),
            (_MARGIN_HEADS, [self._margins(found, name) for found, name in named]),
        ]
        return [(heads, rows) for heads, rows in tables if any(any(row[1:]) for row in rows)]

    def event_lines(self) -> list[str]:
        """A table of every visit to a limit, with its time code."""
        names = _short([found.path for found in self.files])
        rows = [
            [
                name if i == 0 else "",
                time_code(e.start_s),
                format_value(e.length_s, "time"),
                e.designator,
                str(e.channel),
                limit_said(e),
            ]
            for found, name in zip(self.files, names, strict=True)
            for i, e in enumerate(found.events)
        ]
        if not rows:
            return ["no visits to a limit"]
        lines = columns(("file", "at", "for", "op-amp", "channel", "limit"), rows)
        for found, name in zip(self.files, names, strict=True):
            left = found.event_count - len(found.events)
            if left > 0:
                lines.append(f"{name}: {left} more, counted without times")
        return lines

    def _margins(self, found: FileCheck, name: str) -> list[str]:
        margin, any_db = found.margin, margin_of_any_db(found, self.bounds)
        any_text = f"{any_db:+.2f} dB" if math.isfinite(any_db) else ""
        if margin is None:
            return [name, "", "", "", any_text]
        return [
            name,
            f"{margin.gain_db:+.2f} dB",
            f"{margin.limited_by} {margin.limit}",
            _RUN[margin.proof],
            any_text,
        ]

    def said(self) -> list[str]:
        """What is to be said of all together, a line each."""
        lines = [
            f"{sum(f.length_s for f in self.files):.1f} s of signal in {_count(len(self.files), 'file')}; "
            f"{_clipping(self.files)}"
        ]
        if not self.complete:
            lines.append("interrupted: these are the files that were finished")
        if any(f.margin is not None and f.margin.proof == "loudest passages" for f in self.files):
            lines.append("more/less of some files was found on their loudest passages only")
        unsolved = sum(o.unsolved_steps for f in self.files for o in f.opamps)
        if unsolved:
            lines.append(f"{unsolved} steps were not solved to tolerance")
        if self.response_error_db:
            worst_db = max(self.response_error_db.values())
            lines.append(
                f"heard response within {worst_db:.2g} dB of the circuit ({self.plan.session.quality.value})"
            )
        for miss in self.misses:
            who = f" {miss.opamp}" if miss.opamp else ""
            lines.append(f"missed: {miss.want}: {printable(miss.path)}{who}: {miss.found}")
        if self.wants and not self.misses and self.files:
            lines.append(f"{_count(len(self.wants), 'limit')} kept by all")
        return lines


_OPAMP_HEADS = (
    "file",
    "op-amp",
    "peak",
    "headroom",
    "clips",
    "for",
    "worst at",
    "slew",
    "current",
    "outside input range",
)
_MARGIN_HEADS = ("file", "clean with", "limited by", "run at that level", "any signal of its peak")
_RUN = {
    "whole file": "all of it",
    "linear": "loudest passages; all of it clean as it is",
    "loudest passages": "loudest passages only",
}
_LEVEL_HEADS = ("file", "", "peak", "true peak", "rms", "crest", "DC", "loudness", "range")


def _opamps(found: FileCheck, name: str) -> list[list[str]]:
    rows = [
        [
            name if i == 0 else "",
            o.name,
            format_volts(o.peak_v),
            "" if math.isinf(o.headroom_db) else f"{o.headroom_db:.1f} dB",
            str(o.clip_events),
            format_value(o.clipped_s, "time") if o.clip_events else "",
            "" if math.isnan(o.worst_s) else time_code(o.worst_s),
            _share(o.slew_peak_v_per_s, o.slew_limit_v_per_s),
            _share(o.current_peak_a, o.current_limit_a),
            f"{o.input_range_events} x, {format_value(o.input_range_s, 'time')}"
            if o.input_range_events
            else "",
        ]
        for i, o in enumerate(found.opamps)
    ]
    return rows or [[name, *[""] * (len(_OPAMP_HEADS) - 1)]]


def _levels(found: FileCheck, name: str) -> list[list[str]]:
    rows = []
    for i, (where, read) in enumerate((("in", found.input), ("out", found.output))):
        loudness = read.loudness_lufs
        rows.append(
            [
                name if i == 0 else "",
                where,
                format_volts(read.peak_v),
                f"{format_volts(read.true_peak_v)}"
                f" {format_db(dbfs_from_vpk(read.true_peak_v, found.full_scale_v), 'dBFS')}",
                format_volts(read.rms_v),
                "" if math.isnan(read.crest_db) else f"{read.crest_db:.1f} dB",
                format_volts(read.dc_v),
                "" if math.isnan(loudness) else f"{loudness:.1f} LUFS",
                "" if not math.isfinite(loudness) else f"{read.loudness_range_lu:.1f} LU",
            ]
        )
    return rows


def _clipping(files: Sequence[FileCheck]) -> str:
    opamps = [o for f in files for o in f.opamps]
    found = {
        "clip event": sum(o.clip_events for o in opamps),
        "visit to the slew rate": sum(o.slew_events for o in opamps),
        "visit to the largest current": sum(o.current_events for o in opamps),
        "visit outside the input range": sum(o.input_range_events for o in opamps),
    }
    said = [_count(number, what) for what, number in found.items() if number]
    if not said:
        return "nothing came to a limit"
    return f"{', '.join(said)} in {_count(sum(f.event_count > 0 for f in files), 'file')}"


def _count(number: int, what: str) -> str:
    head, *rest = what.split(" ", 1) if what.startswith("visit") else (what,)
    return " ".join([f"{number} {head}{'s' * (number != 1)}", *rest])


def _share(used: float, limit: float) -> str:
    return "" if math.isinf(limit) else f"{100.0 * used / limit:.2g} %"


_SAID = {"rail": "rail", "slew": "slew rate", "current": "largest current", "range": "input range"}


def limit_said(event: LimitEvent) -> str:
    """A visit's limit in words."""
    return f"{event.side} {_SAID[event.kind]}".strip()


def time_code(seconds: float) -> str:
    """Hours, minutes and seconds with a tenth of a millisecond: ``1:02:03.4567``."""
    ticks = round(seconds * 1e4)
    minutes, ticks = divmod(ticks, 600_000)
    hours, minutes = divmod(minutes, 60)
    return f"{hours}:{minutes:02d}:{ticks / 1e4:07.4f}"


def columns(heads: Sequence[str], rows: Sequence[Sequence[str]]) -> list[str]:
    """Lines of a table; columns that are empty throughout are left out, the first is set to the left."""
    kept = [i for i in range(len(heads)) if any(row[i] for row in rows)]
    table = [[heads[i] for i in kept], *([row[i] for i in kept] for row in rows)]
    widths = [max(len(row[i]) for row in table) for i in range(len(kept))]
    return [
        "  ".join(
            cell.ljust(w) if i == 0 else cell.rjust(w)
            for i, (cell, w) in enumerate(zip(row, widths, strict=True))
        ).rstrip()
        for row in table
    ]


def _short(paths: Sequence[str], width: int = NAME_WIDTH) -> list[str]:
    """Names for a table: as much of the end of each path as there is room for."""
    shown = [printable(path) for path in paths]
    return [path if len(path) <= width else "…" + path[-(width - 1) :] for path in shown]
