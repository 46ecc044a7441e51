"""The command line: results on stdout, talk and progress on stderr, one exit code a kind of outcome.

0 done; 1 done, but a wanted figure was missed; 2 usage; 3 input or output file; 4 no audio device or library;
5 circuit invalid; 130 interrupted.
"""

from __future__ import annotations

import argparse
import contextlib
import io
import os
import signal
import sys
import threading
import traceback
from collections.abc import Callable, Iterable, Sequence
from dataclasses import replace
from pathlib import Path
from types import FrameType
from typing import TYPE_CHECKING, NoReturn

from preview import __version__
from preview.engine.csvtext import csv_text
from preview.engine.jsontext import json_text
from preview.errors import AudioFileError, OutputFileError, PreviewError, UsageError, debugging, printable

if TYPE_CHECKING:
    from preview.analysis.answers import Answers
    from preview.audio.sink import Depth
    from preview.engine.process import EngineProcess
    from preview.session import Session

__all__ = ["main"]

INTERRUPTED = 130
LOWEST_HEARD_HZ = 8_000.0
"""Lowest sample rate of a recording that can be listened to [Hz]."""
ENDINGS = tuple(getattr(signal, name) for name in ("SIGTERM", "SIGHUP") if hasattr(signal, name))
"""Signals that end the program in an orderly way: told to stop, the terminal closed."""


_DUMB = ("", "dumb", "unknown")
"""Values of TERM that promise nothing."""


class _Parser(argparse.ArgumentParser):
    """A parser that reports in the house's own way."""

    def error(self, message: str) -> NoReturn:
        raise UsageError(message, f"see {self.prog} --help")


def main(arguments: Sequence[str] | None = None) -> int:
    """Run one command; the exit code."""
    from preview.engine.options import join_signed_values

    given = list(sys.argv[1:] if arguments is None else arguments) or ["listen"]
    main_thread = threading.current_thread() is threading.main_thread()
    ours = [n for n in ENDINGS if main_thread and signal.getsignal(n) is signal.SIG_DFL]
    try:
        for number in ours:
            signal.signal(number, _terminated)
        _prepare_streams()
        options = _parser().parse_args(join_signed_values(given))
        options.words = given
        code = int(options.run(options))
        if sys.stdout is not None:
            sys.stdout.flush()
        return code
    except PreviewError as error:
        _debug()
        _say(f"preview: {error.message}")
        if error.hint:
            _say(f"  {error.hint}")
        return error.exit_code
    except KeyboardInterrupt:
        _say("preview: interrupted")
        return INTERRUPTED
    except BrokenPipeError:
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return 0
    except SystemExit as ended:
        return ended.code if isinstance(ended.code, int) else 0
    except OSError as error:
        from preview.audio.files import reason

        _debug()
        _say(f"preview: {printable(str(error.filename or 'standard output'))}: {printable(reason(error))}")
        return 3
    except Exception as error:
        _debug()
        _say(f"preview: an error inside the program ({type(error).__name__}: {printable(str(error))})")
        _say("  PREVIEW_DEBUG=1 shows where")
        return 1
    finally:
        for number in ours:
            signal.signal(number, signal.SIG_DFL)


def _terminated(_number: int, _frame: FrameType | None) -> None:
    raise KeyboardInterrupt


def _debug() -> None:
    if debugging():
        traceback.print_exc()


def _say(text: str) -> None:
    """A line for the person, on stderr; where that is closed or full, the work goes on."""
    with contextlib.suppress(OSError):
        if sys.stderr is not None:
            print(text, file=sys.stderr)


def _prepare_streams() -> None:
    """Files and pipes get UTF-8 whatever the locale; a terminal shows ? for what it cannot write."""
    for stream in (sys.stdout, sys.stderr):
        if isinstance(stream, io.TextIOWrapper):
            stream.reconfigure(encoding=None if stream.isatty() else "utf-8", errors="replace")


def _parser() -> argparse.ArgumentParser:
    from preview.cli_check import add_check_options
    from preview.cli_distortion import add_distortion_options
    from preview.engine.logoptions import add_log_options
    from preview.engine.options import add_running_options, add_stage_options

    parser = _Parser(
        prog="preview",
        description="Hear an op-amp stage on your own signal before you build it. Alone: the demo.",
        allow_abbrev=False,
    )
    parser.add_argument("--version", action="version", version=f"preview {__version__}")
    commands = parser.add_subparsers(metavar="COMMAND", parser_class=_Parser, required=True)

    def command(name: str, run: Callable[[argparse.Namespace], int], about: str) -> argparse.ArgumentParser:
        added = commands.add_parser(name, help=about, description=about, allow_abbrev=False)
        added.set_defaults(run=run)
        return added

    listen = command("listen", _listen, "the desk: hear a recording through the stage while its parts change")
    listen.add_argument(
        "audio", nargs="?", type=_name, metavar="AUDIO", help="the recording (default: the demo's)"
    )
    listen.add_argument("--silent", action="store_true", help="run without a sound device")
    listen.add_argument(
        "--end", metavar="loop|stop", default="loop", help="at the end: loop (default) or stop"
    )
    listen.add_argument("--device", metavar="NAME", help="sound device, by name")
    listen.add_argument(
        "--signal", metavar="TEXT", help='a test signal in place of a recording, such as "sine 1k 1V"'
    )
    listen.add_argument(
        "--plain",
        action="store_true",
        help="lines of text in place of a screen, for screen readers and pipes",
    )
    listen.add_argument("--live", action="store_true", help="the device's input in place of a recording")
    listen.add_argument("--input", metavar="NAME", help="input device of --live, by name")
    add_stage_options(listen)
    add_running_options(listen)

    render = command("render", _render, "the recording through the stage, as a file")
    render.add_argument("audio", type=_name, metavar="AUDIO", help="the recording; - is stdin")
    render.add_argument(
        "out", type=_name, metavar="OUT", help="the file to write (replaced if it exists); - is stdout"
    )
    render.add_argument(
        "--depth",
        metavar="16|24|float",
        default="float",
        help="sample format; float (default) is 32-bit floating point",
    )
    _add_shapes(render)
    add_log_options(render)
    add_stage_options(render)
    add_running_options(render)

    check = command("check", _check, "will it clip? headroom at every op-amp over whole recordings")
    add_check_options(check)
    _add_shapes(check)
    add_log_options(check)
    add_stage_options(check)

    response = command("response", _response, "gain, phase, group delay, corners and impedances of the stage")
    response.add_argument("--at", metavar="20,1k,20k", help="frequencies (default: third-octave steps)")
    which = response.add_mutually_exclusive_group()
    which.add_argument("--analog", action="store_true", help="the exact circuit (default)")
    which.add_argument("--as-heard", action="store_true", help="the running computation")
    response.add_argument(
        "--rate", metavar="HZ", help="sample rate of --as-heard and --sections (default 48k)"
    )
    response.add_argument(
        "--sections",
        action="store_true",
        help="IIR second-order sections of the stage by the bilinear transform",
    )
    response.add_argument(
        "--noise",
        action="store_true",
        help="noise at the output, 20 Hz to 20 kHz and at each frequency, and what makes it",
    )
    response.add_argument("--draw", action="store_true", help="the gain curve too, in plain characters")
    response.add_argument("--plot", metavar="FILE", help="a picture too: FILE.png or FILE.svg")
    response.add_argument("--prewarp", metavar="HZ", help="frequency at which the sections are exact")
    add_distortion_options(response)
    _add_shapes(response)
    add_stage_options(response)

    stages = command(
        "stages", _stages, "the stages there are, or the text of one, or a new one to start from"
    )
    one = stages.add_mutually_exclusive_group()
    one.add_argument("name", nargs="?", metavar="NAME", help="a stage")
    one.add_argument(
        "--new", metavar="FILE", help="write a commented example to FILE.toml, which must not exist"
    )
    _add_shapes(stages)
    opamps = command("opamps", _opamps, "the op-amp types side by side, or one and its sources")
    opamps.add_argument("name", nargs="*", metavar="NAME|FILE", help="an op-amp type; several are compared")
    _add_shapes(opamps)
    devices = command("devices", _devices, "the sound devices")
    _add_shapes(devices)
    return parser


def _add_shapes(command: argparse.ArgumentParser) -> None:
    shape = command.add_mutually_exclusive_group()
    shape.add_argument("--json", action="store_true", help="one JSON object")
    shape.add_argument("--csv", action="store_true", help="comma-separated values")


def _reported(
    options: argparse.Namespace,
    body: dict[str, object],
    rows: str,
    lines: Iterable[str],
    *,
    common: bool = False,
) -> str:
    """A report in the shape asked for; ``rows`` names the list that makes a table's lines."""
    if options.json:
        return json_text(body)
    return csv_text(body, rows, common=common) if options.csv else "\n".join(lines)


def _name(text: str) -> str:
    if not text:
        raise argparse.ArgumentTypeError("the name is empty")
    return text


# -- the desk


def _listen(options: argparse.Namespace) -> int:
    from preview.engine.door import start_child

    terminal = all(stream is not None and stream.isatty() for stream in (sys.stdin, sys.stdout, sys.stderr))
    if terminal and not options.plain and os.environ.get("TERM") in _DUMB:
        _say("this terminal has no screen to draw on: line mode, as with --plain")
        options.plain = True
    if not (terminal or options.plain):
        return _desk(options, None)
    process, connection = start_child()  # it loads while the desk does
    try:
        from preview.engine.process import EngineProcess

        engine = EngineProcess(process, connection)
    except BaseException:
        process.kill()
        raise
    try:
        return _desk(options, engine)
    finally:
        engine.close()


def _desk(options: argparse.Namespace, engine: EngineProcess | None) -> int:
    from preview.audio.files import probe
    from preview.engine.demo import demo_recording
    from preview.engine.options import DEFAULT_STAGE, intake_from, session_from, with_running
    from preview.engine.process import EngineConfig
    from preview.engine.spare import Spare
    from preview.network.stability import check_stable
    from preview.session import AtEnd

    if options.end not in (end.value for end in AtEnd):
        raise UsageError(f"--end {options.end}: no such end", "loop or stop")
    stage = DEFAULT_STAGE
    audio: Path | None = Path(options.audio) if options.audio is not None else None
    intake = intake_from(options)
    if audio is None and not intake:
        demo = demo_recording()
        audio = demo.path
        options.full_scale = options.full_scale or demo.full_scale or None
        stage = demo.stage or stage
    if options.audio == "-":
        raise UsageError(
            "listen needs a file, it cannot go back in a pipe", "write the audio to a file first"
        )
    info = probe(audio) if audio is not None else None
    if info is not None and info.sample_rate_hz < LOWEST_HEARD_HZ:
        raise AudioFileError(
            f"{audio}: {info.sample_rate_hz:g} Hz is too low to listen to", "preview check and render take it"
        )
    comment = info.comment if info is not None else ""
    session = session_from(options, audio=audio, comment=comment, at_end=AtEnd(options.end), stage=stage)
    session = replace(session, notes=(*session.notes, *intake.pop("notes", ())), **intake)
    session = with_running(session, options)
    _echo(session, info.warnings if info is not None else ())
    check_stable(session.netlist())
    if engine is None:
        raise UsageError(
            "the desk needs a terminal", "preview listen --plain reads lines and works without one"
        )
    config = EngineConfig(session=session, device=options.device, silent=options.silent)
    engine.begin(config)

    def restart(left: EngineConfig) -> EngineProcess:
        return spare.begin(replace(left, device=config.device, silent=config.silent))

    spare = Spare()
    spare.keep_beside(engine)
    try:
        if options.plain:
            from preview.ui.plain import run_plain

            run_plain(session, engine, lines=sys.stdin, out=sys.stdout, restart=restart)
        else:
            from preview.ui.running import run_desk

            run_desk(session, engine, restart=restart)
    finally:
        spare.close()
    return 0


def _echo(session: Session, warnings: Sequence[str]) -> None:
    """Say how the options were understood, and what of the circuit is hardly meant."""
    from preview.circuit.cautions import warnings as cautions

    for note in session.notes:
        _say(f"  {printable(note)}")
    _warn(f"{what} ({cure})" for what, cure in cautions(session.netlist()))
    _warn((*session.warnings, *warnings))


def _warn(warnings: Iterable[str]) -> None:
    for warning in warnings:
        _say(f"preview: warning: {printable(warning)}")


# -- render


def _render(options: argparse.Namespace) -> int:
    from preview.audio.sink import check_output
    from preview.engine.logoptions import assumed_full_scale, log_format, state_per_unit
    from preview.engine.options import session_from, with_running
    from preview.engine.progress import Progress
    from preview.engine.render import open_source, render
    from preview.engine.report import render_lines, render_object

    depth = _depth(options.depth)
    audio, out = Path(options.audio), Path(options.out)
    check_output(out, [audio], depth=depth)
    state_per_unit(options, audio)
    source = open_source(audio, log_format(options))
    try:
        info = source.info
        session = session_from(
            options, audio=audio, comment=info.comment, assumed_full_scale=assumed_full_scale(audio)
        )
        session = with_running(session, options)
        said = source.warnings
        _echo(session, said)
        progress = Progress(info.frames, sys.stderr)
        try:
            result = render(session, source, out, depth=depth, progress=progress)
        finally:
            progress.clear()
        _warn(warning for warning in source.warnings if warning not in said)
    finally:
        source.close()
    from preview.analysis.response import response_error_db

    deviation_db = response_error_db(session.netlist(), result.sample_rate_hz, session.quality)
    body = render_object(session, result, deviation_db, out)
    if options.csv:
        del body["understood"]
    text = _reported(options, body, "opamps", render_lines(result, deviation_db, out), common=True)
    (_say if options.out == "-" else print)(text)
    return 0


def _depth(text: str) -> Depth:
    from preview.audio.wavefile import DEPTHS

    for depth in DEPTHS:
        if depth == text:
            return depth
    raise UsageError(f"--depth {text}: no such sample format", f"one of {', '.join(DEPTHS)}")


def _check(options: argparse.Namespace) -> int:
    from preview.cli_check import run_check

    return run_check(options, _say, print)


# -- response and lists


def _response(options: argparse.Namespace) -> int:
    if options.distortion:
        from preview.cli_distortion import run_distortion

        return run_distortion(options, _say, print)
    from preview.analysis import table as tables
    from preview.analysis.answers import answers
    from preview.engine.options import check_together, frequency_of, session_from, understood_values

    check_together(options)
    session = session_from(options)
    circuit = session.netlist()
    rate_hz = frequency_of("48k" if options.rate is None else options.rate, "--rate", 8_000.0, 192_000.0)
    body: dict[str, object] = {"command": "response", "understood": understood_values(session)}
    if options.sections:
        prewarp_hz = None
        if options.prewarp is not None:
            prewarp_hz = frequency_of(options.prewarp, "--prewarp", 0.0, 0.4999 * rate_hz)
        rows = tables.second_order_sections(circuit, rate_hz, prewarp_hz=prewarp_hz)
        names = ("b0", "b1", "b2", "a0", "a1", "a2")
        body |= {"sample_rate_hz": rate_hz, "prewarp_hz": prewarp_hz, "sections": rows}
        lines = [",".join(names), *(",".join(f"{v:.17g}" for v in row) for row in rows)]
        if not options.csv:
            lines = ["".join(f"{n:>25}" for n in names)]
            lines += ["".join(f"{v:>25.17g}" for v in row) for row in rows]
    else:
        highest_hz = 0.45 * rate_hz if options.as_heard else 1e9
        wanted = [f for f in tables.PREFERRED_HZ if f <= highest_hz]
        if options.at is not None:
            wanted = [frequency_of(text, "--at", 0.0, highest_hz) for text in options.at.split(",")]
        table = tables.tabulate(
            circuit,
            wanted,
            sample_rate_hz=rate_hz if options.as_heard else None,
            quality=session.quality,
        )
        noise_lines: list[str] = []
        if options.noise:
            from preview.analysis.noise import noise_budget

            budget = noise_budget(circuit, wanted)
            table = table.with_columns(budget.columns)
            body |= budget.as_object()
            noise_lines = budget.as_lines()
        found = answers(session, wanted)
        body |= {"as_heard": options.as_heard, **table.as_object(), **found.as_object()}
        if options.as_heard:
            body |= {"sample_rate_hz": rate_hz, "quality": session.quality.value}
        lines = [table.with_columns(found.columns).as_csv()] if options.csv else table.as_lines()
        if not options.csv:
            lines += noise_lines
        if not (options.csv or options.as_heard):
            lines += ["", *found.as_lines()]
        lines += _drawn(options, session, found)
    if not options.json:
        _echo(session, ())
    print(json_text(body) if options.json else "\n".join(lines))
    return 0


def _drawn(options: argparse.Namespace, session: Session, found: Answers) -> list[str]:
    """Lines of the curve in plain characters, if asked for; a picture, if asked for, is written."""
    if options.plot is not None:
        from preview.engine.options import picture_kind
        from preview.plots import response_picture

        place = Path(options.plot)
        if not place.parent.is_dir():
            raise OutputFileError(f"{place.parent}: no such folder", "make it first")
        place.write_bytes(response_picture(session, found, picture_kind(options.plot)))
    if not options.draw:
        return []
    from preview.analysis.curves import curves
    from preview.analysis.textplot import gain_drawing

    return ["", *gain_drawing(curves(session, 68), rows=19)]


def _stages(options: argparse.Namespace) -> int:
    from preview.circuit.library import (
        find_stage,
        new_stage_file,
        stage_names,
        stage_source,
        user_stage_folder,
    )

    if options.new is not None:
        new_stage_file(Path(options.new))
        body = {"command": "stages", "file": printable(options.new)}
        heard = options.new if os.sep in options.new else f"./{options.new}"
        lines = [
            f"{printable(options.new)} is written; change it, then: preview listen --stage {printable(heard)}",
            f"in {printable(str(user_stage_folder()))} it is found by its name",
        ]
        print(_reported(options, {**body, "stages": [{"file": body["file"]}]}, "stages", lines))
        return 0
    if options.name is not None:
        stage = find_stage(options.name)
        source = stage_source(options.name)
        if options.json:
            print(json_text({"command": "stages", "name": stage.name, "title": stage.title, "toml": source}))
        else:
            if sys.stdout is not None and sys.stdout.isatty():
                source = "\n".join(printable(line.expandtabs(4)) for line in source.splitlines())
            print(source.removesuffix("\n"))
        return 0
    stages = []
    for name in stage_names():
        try:
            stages.append(find_stage(name))
        except PreviewError as error:  # one of the person's own; the others are still there
            _warn([str(error)])
    listed = [
        {"name": s.name, "title": s.title, "about": s.about, "file": s.path and printable(str(s.path))}
        for s in stages
    ]
    width = max(len(s.name) for s in stages)
    lines = [f"{s.name:<{width}}  {printable(s.title)}{' (your own)' if s.path else ''}" for s in stages]
    print(_reported(options, {"command": "stages", "stages": listed}, "stages", lines))
    return 0


def _opamps(options: argparse.Namespace) -> int:
    from preview.analysis.opamps import opamp_report

    body, lines, problems = opamp_report(options.name)
    _warn(problems)
    if "opamps" not in body and options.csv:
        body = {"opamps": [body]}
    print(_reported(options, {"command": "opamps", **body}, "opamps", lines))
    return 0


def _devices(options: argparse.Namespace) -> int:
    from dataclasses import asdict

    from preview.audio.devices import output_devices

    devices = output_devices()
    if not devices:
        _say("preview: there is no sound device")
    lines = [
        f"{'*' if d.is_default else ' '} {printable(d.name)}  ({printable(d.host_api)}, "
        f"{d.default_sample_rate_hz:g} Hz, up to {d.max_output_channels} channels)"
        for d in devices
    ]
    body: dict[str, object] = {"command": "devices", "devices": [asdict(d) for d in devices]}
    print(_reported(options, body, "devices", lines))
    return 0
