"""The views in sentences, for the line mode: no drawing, no columns, each line readable by itself."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

from preview.circuit.settings import setting_text
from preview.ui.actions import Group
from preview.ui.clips import clips_of
from preview.ui.keymap import KeyMap
from preview.ui.partwork import kind_words
from preview.ui.signalpath import PathRow, State, path_rows, worst_of
from preview.ui.texts import corner_text, gain_text, heard_text, node_lines, part_line
from preview.ui.verdicts import Grade, verdicts
from preview.ui.view import Shown
from preview.ui.words import clock, code, db, duration, full_scale, hertz, percent, rails, type_name

if TYPE_CHECKING:
    from preview.circuit.parts import SettablePart
    from preview.ui.desk import Desk

__all__ = ["effect", "help_lines", "part_lines", "path_lines", "place_line", "spoken", "state_line"]

_TABLE_HZ = (20.0, 50.0, 100.0, 200.0, 500.0, 1e3, 2e3, 5e3, 10e3, 20e3, 50e3, 100e3)
_MOST_CLIPS = 20
_GRADES = {Grade.OPEN: "open", Grade.FINE: "fine", Grade.TIGHT: "tight", Grade.LIMITS: "LIMITS"}


def spoken(desk: Desk, shown: Shown) -> list[str]:
    """A view in lines."""
    return {
        Shown.RESPONSE: _response,
        Shown.CIRCUIT: _circuit,
        Shown.OPAMPS: _opamps,
        Shown.CANDIDATES: _candidates,
        Shown.TIMELINE: _timeline,
    }[shown](desk)


def help_lines(keys: KeyMap) -> list[str]:
    """What can be typed."""
    lines = [
        "Type an action by its name or its key; a part and its value, such as R1=4k7; a count behind a step",
        "'path', 'parts' and 'state' are read out, and so are the views; an empty line reads the state",
    ]
    for group in Group:
        if group is not Group.DIALOG:
            lines.append(f"{group.value}:")
            actions = [action for action in keys.desk if action.group is group]
            lines += [f"{action.words}, key {action.shown or 'none'}: {action.help}" for action in actions]
    return lines


def state_line(desk: Desk) -> str:
    """What plays, where, how loud, which candidate."""
    listening, snapshot = desk.listening, desk.snapshot
    words = ["playing" if listening.playing else "paused"]
    if place := place_line(desk):
        words.append(place)
    if listening.bypass:
        words.append("BYPASS: the input is heard")
    if desk.candidates.null is not None:
        words.append(f"NULL: {desk.candidates.null[0]} minus {desk.candidates.null[1]}")
    if len(desk.candidates.letters) > 1:
        words.append(f"candidate {desk.candidates.title(desk.candidates.letter)}")
    volume_db = listening.volume_db
    words.append("volume off" if volume_db == -math.inf else f"volume {volume_db:.0f} dB")
    words.append(f"at the end: {desk.session.at_end}")
    words.append(f"quality {desk.session.quality}")
    if snapshot is not None and snapshot.dropouts:
        words.append(f"dropouts {snapshot.dropouts}")
    return ", ".join(words)


def place_line(desk: Desk) -> str:
    """Where the playhead is; empty as long as that is not known."""
    snapshot = desk.snapshot
    if snapshot is None or not snapshot.sample_rate_hz > 0.0:
        return ""
    place = clock(desk.listening.position_frame / snapshot.sample_rate_hz)
    return f"at {place}" + (
        f" of {clock(snapshot.frames / snapshot.sample_rate_hz)}" if snapshot.frames else ""
    )


def effect(desk: Desk) -> str:
    """Corner and gain, before and now where they differ."""
    now, before = desk.figures.now, desk.figures.before
    if now is None or now.problem:
        return now.problem if now is not None else ""
    texts = []
    for name, text in (("corner", corner_text), ("gain", gain_text)):
        was = text(before) if before is not None and not before.problem else text(now)
        texts.append(f"{name} {text(now)}" if was == text(now) else f"{name} {was}, now {text(now)}")
    return "; ".join(texts)


def path_lines(desk: Desk) -> list[str]:
    """The signal path, a line each, the worst first named."""
    rows = path_rows(desk, channel_rows=6)
    worst = worst_of(rows)
    lines = [f"{full_scale(desk.session.full_scale)}; supply {rails(desk.session.supply)}"]
    if worst is not None:
        lines.append(
            f"{'tightest' if worst.state is State.FINE else 'worst'}: {worst.label}, {worst.state.word}"
        )
    return [*lines, *(_path_line(desk, row) for row in rows)]


def _path_line(desk: Desk, row: PathRow) -> str:
    unit, full_scale_v = desk.view.unit, desk.session.full_scale.volts
    suffix = "" if unit == "V" else f" {unit}"
    words = [f"peak {unit.peak(row.hold_v, full_scale_v)}{suffix}"]
    if row.rms_v is not None:
        words.append(f"rms {unit.rms(row.rms_v, full_scale_v)}{suffix}")
    if math.isfinite(row.headroom_db):
        words.append(f"{db(row.headroom_db)} dB left")
    if row.slew_ratio is not None:
        words.append(f"slew {percent(row.slew_ratio)}")
    if row.current_ratio is not None:
        words.append(f"current {percent(row.current_ratio)}")
    if row.events is not None:
        words.append(f"clips {row.events}" + (f" for {duration(row.clipped_s)}" if row.clipped_s else ""))
    if row.kind in ("in", "opamp"):
        words.append(row.state.word)
    return f"{row.label}{f' {row.type}' if row.type else ''}: {', '.join(words)}"


def part_lines(desk: Desk) -> list[str]:
    """The parts that can be set, a line each."""
    return [_setting_line(desk, part, part is desk.parts.part) for part in desk.parts.parts]


def _setting_line(desk: Desk, part: SettablePart, selected: bool) -> str:
    words = [f"{part.designator} {setting_text(part)}", *(word for word in kind_words(part) if word)]
    was = desk.parts.before(part.designator)
    if was is not None and was.setting != part.setting:
        words.append(f"was {code(was)}")
    tied = desk.parts.tied_to(part.designator)
    if tied:
        words.append(f"tied to {' and '.join(tied)}")
    if part.role:
        words.append(part.role)
    return ("selected: " if selected else "") + ", ".join(words)


def _response(desk: Desk) -> list[str]:
    now = desk.figures.now
    if now is None:
        return ["the response is not computed yet"]
    if now.problem:
        return [now.problem]
    lines = [effect(desk), heard_text(now)]
    wanted = sorted({*_TABLE_HZ, *([desk.view.cursor_hz] if desk.view.cursor_hz else [])})
    for place_hz in wanted:
        words = [f"gain {now.at(now.gain_db, place_hz):+.2f} dB"]
        words.append(f"phase {now.at(now.phase_deg, place_hz):+.0f} degrees")
        if now.drawn_db is not None:
            words.append(f"as drawn {now.at(now.drawn_db, place_hz):+.2f} dB")
        heard_db = now.at(now.heard_db, place_hz)
        if math.isfinite(heard_db):
            words.append(f"heard {heard_db:+.3f} dB")
        if desk.view.noise and now.noise_v_rthz is not None:
            words.append(f"noise {now.at(now.noise_v_rthz, place_hz) * 1e9:.3g} nV per root Hz")
        mark = "cursor " if place_hz == desk.view.cursor_hz else ""
        lines.append(f"{mark}{hertz(place_hz)}: {', '.join(words)}")
    return lines


def _circuit(desk: Desk) -> list[str]:
    stage = desk.session.stage
    lines = [f"{stage.title}. {stage.about}", *(part_line(part) for part in stage.parts)]
    if desk.view.node_volts:
        lines += [" ".join(line.split()) for line in node_lines(desk)]
    return lines


def _opamps(desk: Desk) -> list[str]:
    lines = []
    for site in desk.sites():
        if desk.view.opamp in (None, site.designator):
            lines.append(f"{site.designator} {type_name(site.type)}")
            lines += [f"{_GRADES[v.grade]}: {v.line}" for v in verdicts(desk, site.designator)]
    return lines or ["this stage has no op-amp"]


def _candidates(desk: Desk) -> list[str]:
    room = desk.candidates
    lines = ["matched loudness" if room.matched else "each as loud as it is"]
    for letter in room.letters:
        reading = room.reading(letter)
        loudness = ""
        if reading is not None and reading.loudness_lufs is not None:
            loudness = f", {reading.loudness_lufs:.1f} LUFS, match {db(reading.match_db)} dB"
        lines.append(f"{room.title(letter)}{loudness}: {room.summary(letter)}")
    return lines


def _timeline(desk: Desk) -> list[str]:
    snapshot = desk.snapshot
    lines = [state_line(desk)]
    if desk.listening.region is not None and snapshot is not None:
        start, end = (clock(frame / snapshot.sample_rate_hz) for frame in desk.listening.region)
        lines.append(f"region {start} to {end}")
    if progress := desk.clips.progress():
        lines.append(progress)
    clips = clips_of(desk.marks)
    if desk.marks is not None:
        lines.append("1 clip" if len(clips) == 1 else f"{len(clips)} clips")
    lines += [f"clip {n + 1}: {desk.clips.words(clip)}" for n, clip in enumerate(clips[:_MOST_CLIPS])]
    return [*lines, f"and {len(clips) - _MOST_CLIPS} more"] if len(clips) > _MOST_CLIPS else lines
