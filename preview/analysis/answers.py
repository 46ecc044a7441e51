"""What else ``preview response`` answers: passband, sections, step, and the circuit as drawn against as driven."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from functools import partial

import numpy as np
from numpy.typing import NDArray

from preview.analysis.modes import Mode, modes, modes_line
from preview.analysis.passband import Passband, passband
from preview.analysis.step import StepFigures, step_figures
from preview.circuit.cascade import stage_alone, stage_outputs
from preview.circuit.drive import IDEAL_SOURCE, NO_LOAD
from preview.circuit.netlist import Netlist, netlist
from preview.circuit.nodes import IN
from preview.errors import CircuitError
from preview.network import transfer
from preview.network.linear import linear
from preview.session import Session
from preview.values.notation import format_value

__all__ = ["Answers", "StageInPlace", "answers", "drawn_circuit"]

Real = NDArray[np.float64]

_MOST_ROWS = 12
"""With more frequencies than these a comparison for a screen has the figures only."""


@dataclass(frozen=True, slots=True)
class StageInPlace:
    """One stage of a cascade: what it does there against what it does alone."""

    name: str
    """The stage's name."""
    output: str
    """Node of its output."""
    gain_db: Real
    """Gain from its own input to its own output, loaded by the next [dB], shape (f,)."""
    alone_db: Real
    """Gain of the stage by itself, with nothing connected to its output [dB], shape (f,)."""
    passband: Passband
    """From the source to its output."""


@dataclass(frozen=True, slots=True)
class Answers:
    """Figures of a session's circuit."""

    frequency_hz: Real
    """Frequencies [Hz], shape (f,)."""
    driven: Passband
    """As driven and loaded."""
    poles: tuple[Mode, ...] | None
    """Sections; None where the circuit has no poles to name (a gain without end)."""
    zeros: tuple[Mode, ...] | None
    """Zeros; None likewise."""
    step: StepFigures | None
    """Step response; None where the output comes to no rest."""
    drawn: Passband | None
    """From an ideal source without a load; None where that is what is computed, or cannot be."""
    drawn_gain_db: Real
    """Gain as drawn [dB], shape (f,); empty likewise."""
    drawn_phase_deg: Real
    """Phase as drawn [degrees], shape (f,); empty likewise."""
    driven_gain_db: Real
    """Gain as driven and loaded [dB], shape (f,)."""
    stages: tuple[StageInPlace, ...]
    """The stages of a cascade; empty for a single stage."""

    @property
    def columns(self) -> dict[str, Real]:
        """What a table of the response has beside it: the circuit as drawn, where it is another one."""
        if self.drawn is None:
            return {}
        return {"drawn_gain_db": self.drawn_gain_db, "drawn_phase_deg": self.drawn_phase_deg}

    def as_object(self) -> dict[str, object]:
        """The answers with their units in the keys."""
        step = self.step
        return {
            "passband_gain": self.driven.gain,
            "passband_polarity": self.driven.polarity,
            "passband_phase_deg": self.driven.phase_deg,
            "passband_phase_hz": self.driven.phase_hz,
            "poles": None if self.poles is None else [mode.as_object() for mode in self.poles],
            "zeros": None if self.zeros is None else [mode.as_object() for mode in self.zeros],
            "step": None if step is None else {f: getattr(step, f) for f in StepFigures.__dataclass_fields__},
            "as_drawn": self._drawn_object(),
            "stages": [
                {
                    "name": stage.name,
                    "output": stage.output,
                    "gain_db": _listed(stage.gain_db),
                    "alone_gain_db": _listed(stage.alone_db),
                    "loading_db": _listed(stage.gain_db - stage.alone_db),
                    "passband_gain_db": stage.passband.gain_db,
                    "corners_hz": list(stage.passband.corners_hz),
                }
                for stage in self.stages
            ],
        }

    def _drawn_object(self) -> dict[str, object] | None:
        if self.drawn is None:
            return None
        return {
            "passband_gain_db": self.drawn.gain_db,
            "passband_gain": self.drawn.gain,
            "corners_hz": list(self.drawn.corners_hz),
            "gain_db": _listed(self.drawn_gain_db),
            "phase_deg": _listed(self.drawn_phase_deg),
            "gain_change_db": _listed(self.driven_gain_db - self.drawn_gain_db),
            "passband_gain_change_db": self.driven.gain_db - self.drawn.gain_db,
        }

    def figures(self) -> list[tuple[str, str]]:
        """What can be said in a line each: a word and the figures."""
        rows = [("passband", self.driven.said())]
        if self.poles is None or self.zeros is None:
            rows.append(("poles", "none to name: the gain rises without end"))
        else:
            rows += [("poles", modes_line(self.poles, _hertz)), ("zeros", modes_line(self.zeros, _hertz))]
        return [*rows, ("step", _step_line(self.step))]

    def as_lines(self) -> list[str]:
        """The answers for a screen."""
        lines = [f"{word:<10}{text}" for word, text in self.figures()]
        if self.drawn is not None:
            lines += ["", *self._comparison(self.drawn)]
        if self.stages:
            lines += ["", *self._stage_lines()]
        return lines

    def _comparison(self, drawn: Passband) -> list[str]:
        """As drawn against as driven and loaded, with the change."""
        rows = [("", "as drawn", "driven, loaded", "change")]
        rows.append(("passband", *_decibels(drawn.gain_db, self.driven.gain_db)))
        if len(drawn.corners_hz) == len(self.driven.corners_hz):
            for before, now in zip(drawn.corners_hz, self.driven.corners_hz, strict=True):
                rows.append(("corner", _hertz(before), _hertz(now), _percent(now / before - 1.0)))
        else:
            rows.append(("corners", drawn.corners_said(), self.driven.corners_said(), ""))
        if len(self.frequency_hz) <= _MOST_ROWS:
            values = zip(self.frequency_hz, self.drawn_gain_db, self.driven_gain_db, strict=True)
            rows += [(_hertz(f), *_decibels(float(before), float(now))) for f, before, now in values]
        return [f"{a:<10}{b:>16}{c:>18}{d:>14}".rstrip() for a, b, c, d in rows]

    def _stage_lines(self) -> list[str]:
        """What each stage does in the cascade, and what the next takes from it where that is most."""
        lines = []
        for k, stage in enumerate(self.stages, 1):
            loading_db = np.where(np.isfinite(stage.gain_db), stage.gain_db - stage.alone_db, 0.0)
            worst = int(np.argmax(np.abs(loading_db)))
            taken = f"{loading_db[worst]:+.2f} dB at {_hertz(float(self.frequency_hz[worst]))}"
            if abs(loading_db[worst]) < 0.005:
                taken = "nothing"
            lines.append(
                f"after {k}, {stage.name}: {stage.passband.gain_db:.2f} dB, corners "
                f"{stage.passband.corners_said()}"
                + (f"; the next changes {taken}" if k < len(self.stages) else "")
            )
        return lines


def answers(session: Session, frequency_hz: Sequence[float]) -> Answers:
    """Answers for the circuit of a session; raises CircuitError as ``session.netlist()`` does."""
    circuit = session.netlist()
    f = np.asarray(frequency_hz, dtype=np.float64)
    gain = transfer.response(circuit, f)
    drawn = drawn_circuit(session)
    drawn_gain = np.empty(0, dtype=np.complex128) if drawn is None else transfer.response(drawn, f)
    poles = zeros = None
    step = None
    try:
        system = linear(circuit)
    except CircuitError:
        pass  # a gain that rises without end, such as a bare differentiator's
    else:
        at_poles, at_zeros = system.poles_and_zeros()
        poles, zeros = modes(at_poles), modes(at_zeros, at_poles)
        step = step_figures(system)
    return Answers(
        frequency_hz=f,
        driven=passband(circuit),
        poles=poles,
        zeros=zeros,
        step=step,
        drawn=None if drawn is None else passband(drawn),
        drawn_gain_db=_db(drawn_gain),
        drawn_phase_deg=np.angle(drawn_gain, deg=True),
        driven_gain_db=_db(gain),
        stages=_stages(session, circuit, f),
    )


def drawn_circuit(session: Session) -> Netlist | None:
    """The circuit without source and load; None where it has none, or cannot be computed without."""
    if session.source == IDEAL_SOURCE and session.load == NO_LOAD:
        return None
    return _computable(replace(session, source=IDEAL_SOURCE, load=NO_LOAD).netlist)


def _stages(session: Session, circuit: Netlist, f: Real) -> tuple[StageInPlace, ...]:
    """Each stage of a cascade in its place."""
    found = []
    into = transfer.response(replace(circuit, output_node=IN), f)
    for k, opened in enumerate(session.stage.joined, 1):
        node = stage_outputs(session.stage)[k - 1]
        here = replace(circuit, output_node=node)
        out = transfer.response(here, f)
        alone = _computable(partial(netlist, stage_alone(session.stage, k), supply=session.supply))
        alone_gain = np.full(len(f), np.nan) if alone is None else transfer.response(alone, f)
        found.append(StageInPlace(opened.name, node, _db(out / into), _db(alone_gain), passband(here)))
        into = out
    return tuple(found)


def _computable(make: Callable[[], Netlist]) -> Netlist | None:
    """A circuit that may need what it is connected to, such as a load behind its last capacitor; None if so."""
    try:
        return make()
    except CircuitError:
        return None


def _db(gain: NDArray[np.complex128]) -> Real:
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.asarray(20.0 * np.log10(np.abs(gain)), dtype=np.float64)


def _listed(values: Real) -> list[float]:
    return [float(v) for v in values]


def _hertz(frequency_hz: float) -> str:
    return format_value(frequency_hz, "frequency", digits=4)


def _percent(change_ratio: float) -> str:
    return f"{round(100.0 * change_ratio, 2) + 0.0:+g} %"


def _decibels(before_db: float, now_db: float) -> tuple[str, str, str]:
    before, now, change = (round(db, 2) + 0.0 for db in (before_db, now_db, now_db - before_db))
    return f"{before:.2f} dB", f"{now:.2f} dB", f"{change:+.2f} dB"


def _step_line(step: StepFigures | None) -> str:
    if step is None:
        return "the output does not come to rest"
    rise = f"10 to 90 % in {_seconds(step.rise_s)}"
    if step.of == "end":
        over = step.overshoot_percent
        beyond = f"overshoot {over:.3g} %" if over >= 0.005 else "no overshoot"
        words = [f"of 1 V: to {_volts(step.end_gain)}, {rise}", beyond, "within 1 %"]
    else:
        rest = step.end_gain if abs(step.end_gain) > 1e-6 * abs(step.peak_gain) else 0.0
        words = [f"of 1 V: peak {_volts(step.peak_gain)}, {rise}", f"rests at {_volts(rest)}"]
        words.append("within 1 % of the peak")
    words[-1] += f" after {_seconds(step.settling_1_percent_s)}"
    return ", ".join([*words, f"0.1 % after {_seconds(step.settling_0_1_percent_s)}"])


def _volts(gain: float) -> str:
    return format_value(gain, "voltage")


def _seconds(time_s: float) -> str:
    return format_value(time_s, "time") if math.isfinite(time_s) else "-"
