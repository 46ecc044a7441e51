"""A check on paper: one self-contained page, HTML or Markdown, with pictures, conditions and how to repeat it."""

from __future__ import annotations

import base64
import html
import platform
import re
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from functools import partial
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path
from typing import Literal

from preview import __version__
from preview.audio.logs import is_log, open_signal
from preview.circuit.drive import said
from preview.circuit.parts import SettablePart, TwoTerminal
from preview.circuit.settings import setting_text
from preview.engine.check.excerpt import excerpt, worst_moments
from preview.engine.check.report import CheckReport, limit_said, time_code
from preview.engine.check.results import FileCheck
from preview.engine.check.run import Stages
from preview.errors import PreviewError, UsageError, printable
from preview.plots_check import Kind, headroom_picture, level_picture, moment_picture
from preview.session import Session
from preview.values.levels import format_volts
from preview.values.notation import quoted

__all__ = ["check_page", "page_kind"]

PageKind = Literal["html", "md"]
PICTURED = 12
"""Recordings that have pictures, the worst first; all are in the tables."""
LISTED = 200
"""Visits to limits of one recording that are listed."""
AROUND_S, AROUND_TIMES = 0.004, 4.0
"""What is shown before and after a moment: at least this [s], or so many times its length."""

_PACKAGES = ("numpy", "scipy", "numba", "soundfile", "matplotlib")
_LOOK = """
body { font: 15px/1.5 system-ui, sans-serif; color: #1c2b33; background: #fcfcf9; max-width: 60em; margin: 2.5em auto;
  padding: 0 1.2em }
h1 { font-size: 1.7em }
h2 { font-size: 1.25em; margin-top: 2.2em; border-bottom: 1px solid #dcdfd8 }
h3 { font-size: 1em }
table { border-collapse: collapse; font-size: 0.88em; font-variant-numeric: tabular-nums; display: block;
  overflow-x: auto }
th { text-align: left; color: #66757d; font-weight: 600 } th, td { padding: 0.15em 1em 0.15em 0; white-space: nowrap }
pre { background: #f2f3ee; padding: 0.8em 1em; overflow-x: auto; line-height: 1.25 }
svg, img { max-width: 100%; height: auto }
.bad { color: #8c2f39; font-weight: 600 } .good { color: #0a5a63; font-weight: 600 }
"""


@dataclass(frozen=True, slots=True)
class _Heading:
    level: int
    text: str


@dataclass(frozen=True, slots=True)
class _Words:
    text: str
    tone: Literal["", "good", "bad"] = ""


@dataclass(frozen=True, slots=True)
class _Plain:
    """Text whose letters stand in columns."""

    text: str


@dataclass(frozen=True, slots=True)
class _Rows:
    heads: Sequence[str]
    rows: Sequence[Sequence[str]]


@dataclass(frozen=True, slots=True)
class _Picture:
    about: str
    make: Callable[[Kind], bytes]


_Block = _Heading | _Words | _Plain | _Rows | _Picture


def page_kind(path: Path) -> PageKind:
    """The kind of page that a file's name asks for; UsageError for one that is not made."""
    kinds: dict[str, PageKind] = {".html": "html", ".htm": "html", ".md": "md"}
    kind = kinds.get(path.suffix.lower())
    if kind is None:
        raise UsageError(
            f"--report {quoted(str(path))}: no such kind of page", "a name that ends in .html or .md"
        )
    return kind


def check_page(report: CheckReport, command: str, kind: PageKind) -> str:
    """The text of the page.

    Parameters
    ----------
    report : CheckReport
        What was found.
    command : str
        The command line that repeats it.
    kind : {"html", "md"}
        What it is written in.

    Raises
    ------
    PreviewError
        A recording cannot be read again for its pictures.
    """
    blocks = [*_summary(report), *_conditions(report, command)]
    worst = sorted(report.files, key=_badness)[:PICTURED]
    for found in report.files:
        if found in worst:
            blocks += _recording(report, found)
    return _html(blocks) if kind == "html" else _markdown(blocks)


def _badness(found: FileCheck) -> tuple[float, float]:
    headroom_db = min((o.headroom_db for o in found.opamps), default=0.0)
    return headroom_db, -sum(o.clipped_s for o in found.opamps)


def _summary(report: CheckReport) -> list[_Block]:
    blocks: list[_Block] = [_Heading(1, f"Headroom of {printable(report.plan.session.stage.title)}")]
    for line in report.said():
        blocks.append(_Words(line, "bad" if line.startswith(("missed", "interrupted")) else ""))
    if report.wants and not report.misses:
        blocks.append(_Words("Every limit is kept.", "good"))
    for failure in report.failures:
        blocks.append(_Words(f"not checked: {failure.message}", "bad"))
    for heads, rows in report.tables(name_width=4096):
        blocks.append(_Rows(heads, rows))
    blocks.append(
        _Words(
            "Clean with: how much more (+) or less (-) of this recording stays off every limit, by running it. Any "
            "signal: the same for whatever signal has this one's true peak, by the integral of the impulse response."
        )
    )
    return blocks


def _conditions(report: CheckReport, command: str) -> list[_Block]:
    session = report.plan.session
    blocks: list[_Block] = [_Heading(2, "Circuit and conditions"), _Words(printable(session.stage.about))]
    if session.stage.drawing.strip():
        drawing = "\n".join(printable(line) for line in session.stage.drawing.strip("\n").splitlines())
        blocks.append(_Plain(drawing))
    parts = [
        [p.designator, setting_text(p), _tolerance(p), printable(p.role)] for p in session.stage.settable
    ]
    parts += [[o.designator, o.type, "", printable(o.role)] for o in session.stage.opamps]
    blocks.append(_Rows(("part", "value", "tolerance", "role"), parts))
    blocks.append(_Rows(("condition", ""), _set(session, report)))
    blocks.append(_Heading(3, "To repeat it"))
    blocks.append(_Plain(f"cd {printable(str(Path.cwd()))}\n{printable(command)}"))
    found = [f"Preview {__version__}", f"Python {platform.python_version()}"]
    for package in _PACKAGES:
        try:
            found.append(f"{package} {version(package)}")
        except PackageNotFoundError:
            continue
    blocks.append(_Words(", ".join([*found, platform.platform()])))
    return blocks


def _tolerance(part: SettablePart) -> str:
    ratio = part.tolerance_ratio if isinstance(part, TwoTerminal) else None
    return "" if ratio is None else f"{100.0 * ratio:g} %"


def _set(session: Session, report: CheckReport) -> list[list[str]]:
    supply = session.supply
    scales = dict.fromkeys(format_volts(f.full_scale_v) for f in report.files)
    error_db = max(report.response_error_db.values(), default=0.0)
    return [
        ["supply", f"{format_volts(supply.positive_v)} and {format_volts(supply.negative_v)}"],
        ["source", said(session.source)],
        ["load", said(session.load)],
        ["full scale", ", ".join(f"{scale} peak" for scale in scales)],
        ["output", session.output],
        ["quality", f"{session.quality.value}: heard response within {error_db:.2g} dB of the circuit"],
        [
            "before the recording",
            "its first value, for long" if report.plan.settled else "silence (logs: first value)",
        ],
        *([f"limit {i}", want.text] for i, want in enumerate(report.wants, 1)),
    ]


def _recording(report: CheckReport, found: FileCheck) -> list[_Block]:
    blocks: list[_Block] = [_Heading(2, printable(found.path))]
    blocks += [_Words(f"warning: {printable(warning)}", "bad") for warning in found.warnings]
    if len(found.trace.input_peak_v) > 1:
        blocks.append(_Picture("levels over time", partial(level_picture, found)))
        blocks.append(_Picture("headroom over the time", partial(headroom_picture, found)))
    try:
        blocks += _moments(report, found)
    except PreviewError as error:
        blocks.append(_Words(f"its worst moments cannot be shown: {error}", "bad"))
    rows = [
        [
            time_code(e.start_s),
            f"{1e3 * e.length_s:.4g} ms",
            e.designator,
            str(e.channel),
            limit_said(e),
        ]
        for e in found.events[:LISTED]
    ]
    if rows:
        left = found.event_count - len(rows)
        blocks.append(
            _Heading(3, f"Visits to limits{f', the first {LISTED} of {found.event_count}' if left else ''}")
        )
        blocks.append(_Rows(("at", "for", "op-amp", "channel", "limit"), rows))
    return blocks


def _moments(report: CheckReport, found: FileCheck) -> list[_Block]:
    """Pictures of the worst moments, each run again at the op-amp that had it."""
    blocks: list[_Block] = []
    path = Path(found.path)
    circuit = report.plan.session.netlist()
    with open_signal(path, report.plan.log) as signal:
        rate_hz = signal.sample_rate_hz
        for moment in worst_moments(found):
            site = next(o for o in circuit.opamps if o.designator == moment.opamp)
            around_s = max(AROUND_S * max(1.0, 8_000.0 / rate_hz), AROUND_TIMES * moment.length_s)
            first = max(0, round((moment.at_s - around_s) * rate_hz))
            frames = round((moment.at_s + moment.length_s + around_s) * rate_hz) - first
            stages = Stages(report.plan.session, output_node=site.out)
            settled = report.plan.settled or is_log(path)
            volts_in, volts_out = excerpt(signal, found.full_scale_v, stages, first, frames, settled=settled)
            if not len(volts_in):
                continue
            limits_v = (site.low_v, site.high_v)
            about = f"{moment.opamp} {moment.what} at {time_code(moment.at_s)}"
            make = partial(moment_picture, moment, first / rate_hz, rate_hz, volts_in, volts_out, limits_v)
            blocks += [_Heading(3, about), _Picture(about, make)]
    return blocks


def _html(blocks: Sequence[_Block]) -> str:
    body = "\n".join(_as_html(block) for block in blocks)
    title = next((b.text for b in blocks if isinstance(b, _Heading)), "")
    return (
        '<!DOCTYPE html>\n<html lang="en">\n<head>\n<meta charset="utf-8">\n'
        f"<title>{html.escape(title)}</title>\n<style>{_LOOK}</style>\n</head>\n<body>\n{body}\n</body>\n</html>\n"
    )


def _as_html(block: _Block) -> str:
    if isinstance(block, _Heading):
        return f"<h{block.level}>{html.escape(block.text)}</h{block.level}>"
    if isinstance(block, _Words):
        tone = f' class="{block.tone}"' if block.tone else ""
        return f"<p{tone}>{html.escape(block.text)}</p>"
    if isinstance(block, _Plain):
        return f"<pre>{html.escape(block.text)}</pre>"
    if isinstance(block, _Rows):
        lines = ["".join(f"<th>{html.escape(cell)}</th>" for cell in block.heads)]
        lines += ["".join(f"<td>{html.escape(cell)}</td>" for cell in row) for row in block.rows]
        return "<table>\n" + "\n".join(f"<tr>{line}</tr>" for line in lines) + "\n</table>"
    picture = block.make("svg").decode("utf-8")
    inside = picture[picture.index("<svg") :]
    return f'<figure role="img" aria-label="{html.escape(block.about)}">{inside}</figure>'


def _markdown(blocks: Sequence[_Block]) -> str:
    return "\n\n".join(_as_markdown(block) for block in blocks) + "\n"


def _as_markdown(block: _Block) -> str:
    if isinstance(block, _Heading):
        return f"{'#' * block.level} {_marked(block.text)}"
    if isinstance(block, _Words):
        return f"**{_marked(block.text)}**" if block.tone else _marked(block.text)
    if isinstance(block, _Plain):
        return f"~~~\n{block.text}\n~~~"
    if isinstance(block, _Rows):
        lines = [block.heads, ["---"] * len(block.heads), *block.rows]
        return "\n".join(
            "| " + " | ".join(_cell(c, i == 1) for c in row) + " |" for i, row in enumerate(lines)
        )
    picture = base64.b64encode(block.make("png")).decode("ascii")
    return f"![{_marked(block.about)}](data:image/png;base64,{picture})"


def _cell(text: str, rule: bool) -> str:
    return text if rule else _marked(text).replace("|", "\\|")


def _marked(text: str) -> str:
    """Text in which nothing is taken for a mark."""
    return re.sub(r"([\\`*_{}\[\]<>#])", r"\\\1", text)
