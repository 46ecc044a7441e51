"""Two palettes of the desk's own: dark and light.

State is never told by colour alone: what a colour says, a word, a glyph or reverse video says too. Both
palettes paint their own ground, so that the desk reads the same on a light terminal, in 16 colours and
without colours.
"""

from __future__ import annotations

import os
from dataclasses import dataclass
from functools import cached_property

from rich.style import Style
from textual.theme import Theme

__all__ = ["DARK", "LIGHT", "PALETTES", "Look", "Palette", "first_palette"]


@dataclass(frozen=True)  # no slots: each style is made once and kept
class Palette:
    """The colours of the desk by what they are for, as ``#rrggbb``."""

    name: str
    """Name of the palette and of its Textual theme."""
    dark: bool
    """Whether the ground is dark."""
    ground: str
    """Behind everything."""
    raised: str
    """Behind dialogs."""
    ink: str
    """Text and figures."""
    quiet: str
    """Labels, scales and rules."""
    arriving: str
    """The signal at the input."""
    leaving: str
    """The signal at the output, and the curve."""
    chosen: str
    """The selected part and the corner's mark."""
    stop: str
    """Ground of what must be seen: clipping, bypass, a stopped engine."""
    stop_ink: str
    """Text on ``stop``."""

    def _on(self, colour: str, *, bold: bool = False) -> Style:
        return Style(color=colour, bgcolor=self.ground, bold=bold)

    @cached_property
    def plain(self) -> Style:
        """Text and figures."""
        return self._on(self.ink)

    @cached_property
    def strong(self) -> Style:
        """Headings and what is open."""
        return self._on(self.ink, bold=True)

    @cached_property
    def faint(self) -> Style:
        """Labels, scales and rules."""
        return self._on(self.quiet)

    @cached_property
    def input(self) -> Style:
        """The signal at the input."""
        return self._on(self.arriving)

    @cached_property
    def output(self) -> Style:
        """The signal at the output, and the curve."""
        return self._on(self.leaving)

    @cached_property
    def mark(self) -> Style:
        """The corner's mark and keys."""
        return self._on(self.chosen, bold=True)

    @cached_property
    def selected(self) -> Style:
        """The selected part: reversed, whatever the colours."""
        return Style(color=self.ground, bgcolor=self.chosen, bold=True)

    @cached_property
    def alarm(self) -> Style:
        """Clipping, bypass, a stopped engine: reversed, whatever the colours."""
        return Style(color=self.stop_ink, bgcolor=self.stop, bold=True)

    def theme(self) -> Theme:
        """The same colours for Textual's own widgets (the dialogs' input line)."""
        return Theme(
            name=self.name,
            primary=self.chosen,
            secondary=self.arriving,
            accent=self.chosen,
            warning=self.leaving,
            error=self.stop,
            success=self.chosen,
            foreground=self.ink,
            background=self.ground,
            surface=self.ground,
            panel=self.raised,
            dark=self.dark,
        )


DARK = Palette(
    name="desk-dark",
    dark=True,
    ground="#111a1f",
    raised="#1c2930",
    ink="#dfe6e2",
    quiet="#93a4a6",
    arriving="#79b4c8",
    leaving="#e2b56f",
    chosen="#9ccf9c",
    stop="#f0e6d2",
    stop_ink="#8c1d12",
)
LIGHT = Palette(
    name="desk-light",
    dark=False,
    ground="#f5f2e9",
    raised="#e6e1d2",
    ink="#1d2a30",
    quiet="#56656b",
    arriving="#14607a",
    leaving="#8a4b08",
    chosen="#1f6b2d",
    stop="#8c1d12",
    stop_ink="#fff8ec",
)
PALETTES = (DARK, LIGHT)


@dataclass(slots=True)
class Look:
    """The palette in force; one object, shared by every panel."""

    palette: Palette = DARK
    """The palette in force."""

    def switch(self) -> None:
        """To the other palette."""
        self.palette = LIGHT if self.palette is DARK else DARK


def first_palette() -> Palette:
    """Light where the terminal says that its ground is light (the COLORFGBG variable), else dark."""
    ground = os.environ.get("COLORFGBG", "").rpartition(";")[2]
    return LIGHT if ground in ("7", "15") else DARK
