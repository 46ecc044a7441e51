"""A board: rows of styled text, of which only the changed ones are painted again."""

from __future__ import annotations

from collections.abc import Callable, Sequence

from rich.cells import cell_len, set_cell_size
from rich.segment import Segment
from rich.style import Style
from textual.geometry import Region
from textual.message import Message
from textual.strip import Strip
from textual.widget import Widget

from preview.errors import debugging, printable
from preview.ui.asking import Outcome
from preview.ui.theme import Look

__all__ = ["Board", "Row", "fit", "heading", "row", "row_cells", "spread"]

Row = tuple[Segment, ...]
"""One line of the screen."""


def row(*pieces: tuple[str, Style]) -> Row:
    """A row of pieces of text, each with its style."""
    return tuple(Segment(text, style) for text, style in pieces if text)


def row_cells(cells: Row) -> int:
    """Width of a row [cells]."""
    return sum(segment.cell_length for segment in cells)


def fit(text: str, width: int) -> str:
    """Text in exactly ``width`` cells: padded, or cut with an ellipsis."""
    if width <= 0:
        return ""
    if cell_len(text) > width:
        return set_cell_size(text, width - 1) + "…"
    return set_cell_size(text, width)


def spread(left: Row, right: Row, width: int, gap: Style) -> Row:
    """Two rows in one, the second at the right edge; the left one is cut where both do not fit."""
    room = width - row_cells(right)
    if row_cells(left) >= room:
        left = tuple(Strip(left).crop(0, max(0, room - 1)))
    return (*left, Segment(" " * max(0, room - row_cells(left)), gap), *right)


def heading(title: str, note: str, width: int, look: Look) -> Row:
    """A panel's heading: its title, a note, and a thin rule to the edge."""
    palette = look.palette
    rest = width - cell_len(title) - 3
    note = fit(note, min(cell_len(note), max(0, rest - 3)))
    rule = "╌" * max(0, rest - (cell_len(note) + 1 if note else 0))
    return row(
        ("╌ ", palette.faint),
        (title + " ", palette.strong),
        (note + " " if note else "", palette.faint),
        (rule, palette.faint),
    )


class Board(Widget):
    """A widget that holds finished rows; subclasses make them in ``rows``."""

    can_focus = False

    class Acted(Message):
        """The mouse asks for something."""

        def __init__(self, action: Callable[[], Outcome]) -> None:
            super().__init__()
            self.action = action
            """Carries it out; may raise PreviewError."""

    def __init__(self, look: Look, *, name: str | None = None) -> None:
        super().__init__(id=name)
        self.look = look
        self._rows: list[Row] = []

    def rows(self, width: int, height: int) -> Sequence[Row]:
        """The rows for this size [cells]."""
        raise NotImplementedError

    def act(self, action: Callable[[], Outcome]) -> None:
        """Have something carried out because of the mouse, as if a key had asked for it."""
        self.post_message(self.Acted(action))

    @property
    def painted(self) -> tuple[Row, ...]:
        """The rows as they stand on the screen."""
        return tuple(self._rows)

    def rebuild(self) -> None:
        """Make the rows again and paint those that changed."""
        width, height = self.size
        if width == 0 or height == 0:
            return
        try:
            new = list(self.rows(width, height))[:height]
        except Exception as error:  # a panel that cannot be drawn must not take the sound down
            if debugging():
                raise
            text = f" {self.id} cannot be drawn ({type(error).__name__}: {printable(str(error))})"
            new = [row((text, self.look.palette.alarm))]
        old, self._rows = self._rows, new
        if len(new) != len(old):
            self.refresh()
            return
        changed = [Region(0, y, width, 1) for y in range(len(new)) if new[y] != old[y]]
        if changed:
            self.refresh(*changed)

    def on_resize(self) -> None:
        """Another size needs other rows."""
        self.rebuild()
        self.refresh()

    def render_line(self, y: int) -> Strip:
        """One row, cut or padded to the width."""
        cells = self._rows[y] if y < len(self._rows) else ()
        return Strip(cells).adjust_cell_length(self.size.width, self.look.palette.plain)
