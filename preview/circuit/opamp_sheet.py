"""An op-amp file as it was written: its figures with their sources, its swings, and the model made of it."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

from preview.circuit.opamp import OpAmpModel
from preview.circuit.opamp_units import format_figure

__all__ = ["Found", "OpAmpSheet", "SheetFigure", "SheetSwing"]

Found = Literal["read", "memory"]

_FOUND: dict[Found, str] = {"read": "read", "memory": "from memory"}


@dataclass(frozen=True, slots=True)
class SheetFigure:
    """One figure of an op-amp file."""

    name: str
    """Its key, such as ``slew``."""
    text: str
    """Value and unit as the file writes them."""
    value: float
    """The value in SI units."""
    source: str
    """Where it comes from."""
    found: Found
    """Whether it was read there or recalled from memory."""
    condition: str = ""
    """The condition it holds under."""
    at_hz: float | None = None
    """Noise: the frequency at which the density was measured [Hz]; None for the white part itself."""

    @property
    def origin(self) -> str:
        """Source, condition and how it was found, in one line."""
        said = f"{self.source}; {self.condition}" if self.condition else self.source
        return f"{said} ({_FOUND[self.found]})"


@dataclass(frozen=True, slots=True)
class SheetSwing:
    """Output swing into one load, or at one output current."""

    load_ohm: float | None
    """The load, from the output to gnd [ohm]; None where the current is stated."""
    current_a: float | None
    """The output current that is stated, as a magnitude [A]; None where it follows from the load."""
    supply_v: tuple[float, float]
    """Positive and negative rail of the test [V]."""
    supply_assumed: bool
    """Whether the file does not state them and they are the usual ones of the class."""
    high_v: float | None
    """From the highest output up to the positive rail [V]; None where it is not stated."""
    low_v: float | None
    """From the negative rail up to the lowest output [V]; None where it is not stated."""
    source: str
    """Where it comes from."""
    found: Found
    """Whether it was read there or recalled from memory."""
    condition: str = ""
    """The condition it holds under."""

    @property
    def origin(self) -> str:
        """Load, supply, source, condition and how it was found, in one line."""
        said = f"{self.source}; {self.condition}" if self.condition else self.source
        if self.load_ohm is None:
            return f"at {format_figure(self.current_a or 0.0, 'current')}: {said} ({_FOUND[self.found]})"
        high_v, low_v = self.supply_v
        rails = f"{high_v:g} V and {low_v:g} V{' assumed' if self.supply_assumed else ''}"
        load = format_figure(self.load_ohm, "resistance")
        return f"into {load} on {rails}: {said} ({_FOUND[self.found]})"

    @property
    def source_a(self) -> float:
        """Current out of the output at its highest, into a load that goes to gnd [A]."""
        if self.load_ohm is None:
            return self.current_a or 0.0
        return max(0.0, (self.supply_v[0] - (self.high_v or 0.0)) / self.load_ohm)

    @property
    def sink_a(self) -> float:
        """Current into the output at its lowest, from a load that goes to gnd [A]."""
        if self.load_ohm is None:
            return self.current_a or 0.0
        return max(0.0, -(self.supply_v[1] + (self.low_v or 0.0)) / self.load_ohm)


@dataclass(frozen=True, slots=True)
class OpAmpSheet:
    """An op-amp file as it was written, and the model made of it."""

    class_name: str
    """A key of ``preview.circuit.opamp_classes.CLASSES``."""
    about: str
    """What it is for, a sentence or two."""
    data_sheet: str
    """The data sheets and their revisions."""
    figures: tuple[SheetFigure, ...]
    """The figures in the file's order."""
    swings: tuple[SheetSwing, ...]
    """The swings, lightest load first, stated currents last."""
    model: OpAmpModel
    """The figures as the computation takes them."""
