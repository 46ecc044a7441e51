"""What a render reports: a JSON object in SI base units, and lines for a person."""

from __future__ import annotations

import math
from pathlib import Path

from preview.audio.sink import keeps_comment
from preview.circuit.opamp import OpAmpReading
from preview.engine.options import understood_values
from preview.engine.render import RenderResult
from preview.errors import printable
from preview.session import Session
from preview.values.levels import dbu_from_vpk, format_db, format_volts, ratio_db
from preview.values.notation import format_value

__all__ = ["render_lines", "render_object"]


def render_object(
    session: Session, result: RenderResult, response_error_db: float, out: Path
) -> dict[str, object]:
    """The result of a render, keys with their units."""
    return {
        "command": "render",
        "understood": understood_values(session),
        "file": printable(str(out)),
        "sample_rate_hz": result.sample_rate_hz,
        "frames": result.frames,
        "channels": result.channels,
        "full_scale_v": result.full_scale_v,
        "quality": result.quality.value,
        "realtime_ratio": result.realtime_ratio,
        "response_error_db": response_error_db,
        "input": {"peak_v": result.input_peak_v, "non_finite_count": result.non_finite_count},
        "output": {
            "peak_v": result.output_peak_v,
            "full_scale_v": result.out_full_scale_v,
            "over_count": result.over_count,
        },
        "opamps": [_opamp_object(reading) for reading in result.opamps],
    }


def _opamp_object(reading: OpAmpReading) -> dict[str, object]:
    return {
        "name": reading.designator,
        "peak_v": reading.peak_v,
        "headroom_db": reading.headroom_db,
        "clip_events": reading.clip_events,
        "clipped_s": reading.clipped_s,
        "slew_peak_v_per_s": reading.slew_peak_v_per_s,
        "slew_limit_v_per_s": reading.slew_limit_v_per_s,
        "current_peak_a": reading.current_peak_a,
        "unsolved_steps": reading.unsolved_steps,
    }


def render_lines(result: RenderResult, response_error_db: float, out: Path) -> list[str]:
    """The result of a render, a line for each thing worth knowing."""
    length_s = result.frames / result.sample_rate_hz
    name = "stdout" if str(out) == "-" else printable(str(out))
    lines = [
        f"{name}: {length_s:.2f} s, {result.channels} channel{'s' * (result.channels != 1)}, "
        f"{result.sample_rate_hz:g} Hz, full scale {format_volts(result.out_full_scale_v)}",
        f"in   peak {_level(result.input_peak_v, result.full_scale_v)}",
        f"out  peak {_level(result.output_peak_v, result.out_full_scale_v)}",
    ]
    lines.extend(_opamp_line(reading) for reading in result.opamps)
    if any(reading.unsolved_steps for reading in result.opamps):
        steps = sum(reading.unsolved_steps for reading in result.opamps)
        lines.append(f"{steps} steps were not solved to tolerance")
    if result.non_finite_count:
        lines.append(f"{result.non_finite_count} input samples were not numbers")
    if result.over_count:
        lines.append(
            f"{result.over_count} output samples were above the file's full scale and are clipped there"
        )
    if not keeps_comment(out):
        lines.append(
            f'{out.suffix} keeps no comment: read the file with --full-scale "{result.out_full_scale_v:.9g} V"'
        )
    lines.append(
        f"heard response within {response_error_db:.2g} dB of the circuit ({result.quality.value}); "
        f"{result.realtime_ratio:.1f} x real time"
    )
    return lines


def _level(peak_v: float, full_scale_v: float) -> str:
    if peak_v == 0.0:
        return "0 V"
    return (
        f"{format_volts(peak_v)}  {format_db(dbu_from_vpk(peak_v), 'dBu')}  "
        f"{format_db(ratio_db(peak_v / full_scale_v), 'dBFS', decimals=2)}"
    )


def _opamp_line(reading: OpAmpReading) -> str:
    line = f"{reading.designator:<4} peak {format_volts(reading.peak_v)}"
    if reading.clip_events:
        events = f"{reading.clip_events} clip event{'s' * (reading.clip_events != 1)}"
        line = f"{line}  at the rail: {events}, {format_value(reading.clipped_s, 'time')} in all"
    elif reading.headroom_db == float("inf"):
        line = f"{line}  no rail" if reading.peak_v else line
    else:
        line = f"{line}  headroom {format_db(reading.headroom_db)}"
    if math.isfinite(reading.slew_limit_v_per_s):
        at_limit = reading.slew_peak_v_per_s >= 0.999 * reading.slew_limit_v_per_s
        fastest, limit = reading.slew_peak_v_per_s / 1e6, reading.slew_limit_v_per_s / 1e6
        line = f"{line}  slew {fastest:.3g} of {limit:.3g} V/µs{', at its limit' if at_limit else ''}"
    return line
