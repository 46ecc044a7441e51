"""The command ``check``: from its options to what it reports."""

from __future__ import annotations

import argparse
import shlex
import sys
from collections.abc import Callable, Iterable
from contextlib import closing
from pathlib import Path
from typing import TYPE_CHECKING

from preview.engine.csvtext import csv_text
from preview.engine.jsontext import json_text
from preview.errors import AudioFileError, CircuitError, OutputFileError, PreviewError, UsageError, printable

if TYPE_CHECKING:
    from preview.engine.check.record import Record
    from preview.engine.check.report import CheckReport
    from preview.engine.check.results import CheckPlan, FileCheck, FileFailure

__all__ = ["add_check_options", "run_check"]

Say = Callable[[str], None]


def add_check_options(parser: argparse.ArgumentParser) -> None:
    """Add what is the check's own among its options."""
    parser.add_argument(
        "audio", nargs="+", metavar="AUDIO", help="recordings, logs (.csv, .tsv), folders, patterns"
    )
    parser.add_argument(
        "--limit",
        action="append",
        default=[],
        metavar="WANT",
        help='a wanted figure, such as "headroom 3 dB" or "no clips"; exit code 1 where it is missed',
    )
    parser.add_argument(
        "--events", action="store_true", help="list every visit to a limit with its time code"
    )
    parser.add_argument(
        "--cut", type=Path, metavar="FOLDER", help="write the worst moments there as short files"
    )
    parser.add_argument(
        "--resume",
        type=Path,
        metavar="FILE",
        help="keep results there as they come, and take up what it holds",
    )
    parser.add_argument(
        "--report",
        type=Path,
        metavar="FILE",
        help="write a page with pictures and conditions: FILE.html or FILE.md",
    )
    parser.add_argument("--workers", metavar="N", help="processes at once (default: one for each core)")
    parser.add_argument(
        "--settled", action="store_true", help="the first value was there long before (logs: always)"
    )
    parser.add_argument(
        "--no-margin",
        action="store_true",
        help="do not look for the largest clean input: half the time or less",
    )


def run_check(options: argparse.Namespace, say: Say, show: Say) -> int:
    """Check all recordings; the exit code.

    Parameters
    ----------
    say, show : callable
        Take a line for the person, and the result.

    Raises
    ------
    KeyboardInterrupt
        It was interrupted; what was finished has been shown.
    """
    from preview.audio.logs import is_log
    from preview.engine.check.files import signal_files
    from preview.engine.check.record import Record
    from preview.engine.check.wants import parse_want

    if options.report is not None:
        _check_page_place(options.report)
    wants = tuple(parse_want(text) for text in options.limit)
    workers = _workers(options.workers)
    paths = signal_files(options.audio)
    plan = _plan(options, any(is_log(path) for path in paths))
    if options.cut is not None and not options.cut.is_dir():
        raise UsageError(f"--cut {printable(str(options.cut))}: no such folder", "make it first")
    for note in plan.session.notes:
        say(f"  {printable(note)}")
    record = None if options.resume is None else Record(options.resume, plan)
    try:
        files, failures, complete = _checked(paths, plan, workers, record, say)
    finally:
        if record is not None:
            record.close()
    if len(paths) == 1 and failures:
        raise _as_error(failures[0])
    report = _report(plan, files, failures, complete, wants)
    if complete and options.cut is not None:
        _cut(report, options.cut, say)
    if options.report is not None:
        _write_page(report, options)
        say(f"  {printable(str(options.report))}")
    show(_text(report, options))
    if not complete:
        raise KeyboardInterrupt
    return report.exit_code


def _workers(text: str | None) -> int:
    from preview.engine.check.pool import cores

    if text is None:
        return cores()
    if not text.isdigit() or not 1 <= int(text) <= 256:
        raise UsageError(f"--workers {printable(text)}: not a number of processes", "1 to 256")
    return int(text)


def _plan(options: argparse.Namespace, logs: bool) -> CheckPlan:
    from preview.engine.check.results import CheckPlan
    from preview.engine.logoptions import log_format, per_unit, refuse_log_options
    from preview.engine.options import session_from
    from preview.network.stability import check_stable

    if not logs:
        refuse_log_options(options)
    session = session_from(options)
    check_stable(session.netlist())
    return CheckPlan(
        session=session,
        full_scale=session.full_scale if options.full_scale is not None else None,
        per_unit=per_unit(options),
        log=log_format(options),
        settled=options.settled,
        margin=not options.no_margin,
    )


def _checked(
    paths: list[Path], plan: CheckPlan, workers: int, record: Record | None, say: Say
) -> tuple[list[FileCheck], list[FileFailure], bool]:
    """Results and failures in the order of the files, and whether all was done."""
    from preview.engine.check.pool import check_all
    from preview.engine.check.ready import compile_first, is_compiled
    from preview.engine.check.record import stamp
    from preview.engine.check.results import FileCheck, FileFailure
    from preview.engine.progress import Progress

    done: dict[int, FileCheck | FileFailure] = {}
    if record is not None:
        kept = ((i, record.result(path)) for i, path in enumerate(paths))
        done = {i: found for i, found in kept if found is not None}
        if done:
            say(f"  {len(done)} of {len(paths)} files taken from {printable(str(record.path))}")
    left = [i for i in range(len(paths)) if i not in done]
    stamps = {i: stamp(paths[i]) for i in left}
    sizes = [(stamps[i] or [1])[0] for i in left]
    progress = Progress(sum(sizes), sys.stderr)
    finished_bytes = 0

    def tell(shares: dict[int, float]) -> None:
        under_way = sum(sizes[i] * share for i, share in shares.items())
        progress(round(finished_bytes + under_way), f"{len(done)} of {len(paths)} files")

    complete = True
    try:
        if left and not is_compiled(plan):
            say("  compiling the computation for this machine, once: a minute or two")
            compile_first(plan)
        with closing(check_all([paths[i] for i in left], plan, workers, tell)) as results:
            for at, result in results:
                place = left[at]
                done[place] = result
                finished_bytes += sizes[at]
                if isinstance(result, FileFailure):
                    progress.clear()
                    if len(paths) > 1:
                        say(f"preview: {result.message}" + (f" ({result.hint})" if result.hint else ""))
                    continue
                if record is not None:
                    record.keep(stamps[place], result)
                for warning in result.warnings:
                    progress.clear()
                    say(f"preview: warning: {printable(result.path)}: {printable(warning)}")
                tell({})
    except KeyboardInterrupt:
        complete = False
    finally:
        progress.clear()
    in_order = [done[i] for i in sorted(done)]
    files = [one for one in in_order if isinstance(one, FileCheck)]
    return files, [one for one in in_order if isinstance(one, FileFailure)], complete


def _report(
    plan: CheckPlan,
    files: Iterable[FileCheck],
    failures: Iterable[FileFailure],
    complete: bool,
    wants: tuple[object, ...],
) -> CheckReport:
    from preview.analysis.headroom import worst_cases
    from preview.analysis.response import response_error_db
    from preview.engine.check.report import CheckReport
    from preview.engine.check.wants import Want, misses

    files = tuple(files)
    circuit, quality = plan.session.netlist(), plan.session.quality
    try:
        bounds = worst_cases(circuit)
    except CircuitError:  # it never comes to rest, such as a bare integrator
        bounds = ()
    meant = tuple(want for want in wants if isinstance(want, Want))
    return CheckReport(
        plan=plan,
        files=files,
        failures=tuple(failures),
        wants=meant,
        misses=tuple(miss for found in files for miss in misses(meant, found, bounds)),
        bounds=bounds,
        bound_gains={b.designator: b.gain for b in bounds},
        response_error_db={
            rate_hz: response_error_db(circuit, rate_hz, quality)
            for rate_hz in dict.fromkeys(f.sample_rate_hz for f in files)
        },
        complete=complete,
    )


def _check_page_place(path: Path) -> None:
    """Refuse, before anything is computed, a page that cannot be written."""
    from preview.report import page_kind

    page_kind(path)
    if not path.parent.is_dir():
        raise OutputFileError(f"{printable(str(path.parent))}: no such folder", "make it first")
    if path.is_dir():
        raise OutputFileError(f"{printable(str(path))}: is a folder")


def _write_page(report: CheckReport, options: argparse.Namespace) -> None:
    from preview.report import check_page, page_kind

    command = shlex.join(["preview", *options.words])
    options.report.write_text(check_page(report, command, page_kind(options.report)), encoding="utf-8")


def _cut(report: CheckReport, folder: Path, say: Say) -> None:
    from preview.engine.check.excerpt import cut_out
    from preview.engine.check.run import Stages

    stages = Stages(report.plan.session)
    for found in report.files:
        for path in cut_out(found, report.plan, stages, folder):
            say(f"  {printable(str(path))}")


def _text(report: CheckReport, options: argparse.Namespace) -> str:
    if options.json:
        return json_text(report.as_object())
    if options.csv:
        rows = report.event_rows() if options.events else report.rows()
        return csv_text({"rows": rows}, "rows")
    lines = report.lines()
    return "\n".join([*report.event_lines(), "", *lines] if options.events else lines)


def _as_error(failure: FileFailure) -> PreviewError:
    """The failure of the only file, as the error that it was."""
    kind = {3: AudioFileError, 5: CircuitError}.get(failure.exit_code, PreviewError)
    return kind(failure.message, failure.hint)
