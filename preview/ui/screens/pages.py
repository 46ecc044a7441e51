"""Pages to read: help, the hearing caution, the command that repeats the session."""

from __future__ import annotations

from collections.abc import Iterable, Sequence

from rich.text import Text
from textual.containers import VerticalScroll
from textual.widget import Widget
from textual.widgets import Static

from preview.errors import printable
from preview.ui.actions import ACTIONS, Group
from preview.ui.screens.dialog import Dialog

__all__ = ["CautionScreen", "CommandScreen", "HelpScreen", "help_lines"]

_MARKS = (
    ("▆ ▂ ╿", "RMS stands tall, the peak lies low, the upright stroke is the highest peak (hold)"),
    ("▐░  ┊", "a supply rail, hatched behind; full scale of the recording"),
    ("left dB", "from the highest peak to the wall: full scale at the input, the rail at the output"),
    (
        "byp",
        "in bypass: what is heard is the input, so no rail is drawn; the op-amp's row is still the stage's",
    ),
    ("in 2+", "the loudest of channel 2 and those after it, where not all have room"),
    ("clip ×3", "visits of the op-amp's output to a rail; 'clipped' is the time spent there"),
    ("device limiter", "blocks held at the device's full scale; the volts you read are not touched"),
    ("≠E24", "the value is not one of that series"),
    ("▾ ╎", "a corner: 3 dB below the passband gain; 'before → now' follows your changes"),
)
_CAUTIONS = (
    "Hearing: start low. A circuit with gain can jump by 20 dB and more when a part changes.",
    "A computed stage proves nothing about mains or phantom-powered equipment: have a built board checked by "
    "someone licensed for it; local codes come first.",
)
_HEARING = (
    "The listening volume starts at -20 dB. Put headphones on after the sound has started, and raise the "
    "volume with + in small steps.",
    "A stage with gain, or a part value that changes, can make the signal ten times larger at once.",
    "The volume does not touch the volts: meters and clipping stay as in the circuit.",
)


def help_lines() -> list[Text]:
    """The help page, made from the table of actions."""
    lines: list[Text] = []
    for group in Group:
        lines += [Text(""), Text(group.value, "bold")]
        for action in ACTIONS:
            if action.group is group:
                line = Text(f"  {action.shown:<13}", "bold")
                line.append(action.help, "not bold")
                lines.append(line)
    lines += [Text(""), Text("Marks", "bold")]
    for mark, words in _MARKS:
        line = Text(f"  {mark:<16}", "bold")
        line.append(words, "not bold")
        lines.append(line)
    lines += [Text(""), Text("Cautions", "bold"), *(Text(f"  {words}") for words in _CAUTIONS)]
    return lines[1:]


class HelpScreen(Dialog[None]):
    """Every key with what it does."""

    def __init__(self) -> None:
        super().__init__(
            "Keys", ("row_up", "and"), ("row_down", "scroll"), ("cancel", "back"), ("help", "back")
        )

    def body(self) -> Iterable[Widget]:
        """See :class:`Dialog`."""
        page = VerticalScroll(*(Static(line) for line in help_lines()), id="page", can_focus=False)
        yield page

    def do_row_down(self) -> None:
        """Scroll down."""
        self.query_one("#page").scroll_relative(y=3, animate=False, immediate=True)

    def do_row_up(self) -> None:
        """Scroll up."""
        self.query_one("#page").scroll_relative(y=-3, animate=False, immediate=True)

    def do_help(self) -> None:
        """Back to the desk."""
        self.dismiss(None)


class _Reading(Dialog[bool]):
    """Paragraphs, and Enter to go on."""

    def __init__(self, title: str, paragraphs: Sequence[str], *keys: tuple[str, str]) -> None:
        super().__init__(title, *keys)
        self.paragraphs = tuple(printable(text) for text in paragraphs)

    def body(self) -> Iterable[Widget]:
        """See :class:`Dialog`."""
        for text in self.paragraphs:
            yield Static(Text(text), classes="about")

    def do_accept(self) -> None:
        """Go on."""
        self.dismiss(True)

    def do_cancel(self) -> None:
        """Go back."""
        self.dismiss(False)


class CautionScreen(_Reading):
    """The hearing caution of the first run."""

    def __init__(self) -> None:
        super().__init__(
            "Mind your hearing", _HEARING, ("accept", "understood: start"), ("cancel", "stay paused")
        )


class CommandScreen(_Reading):
    """The command that renders what is set on the desk."""

    def __init__(self, command: str) -> None:
        super().__init__(
            "The command that renders this",
            (
                command,
                "OUT.wav stands for the file to write; what is rendered is what is heard here.",
            ),
            ("accept", "back"),
            ("cancel", "back"),
        )
