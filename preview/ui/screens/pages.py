"""Pages to read: help, the hearing caution, and what actions have to say at length."""

from __future__ import annotations

from collections.abc import Iterable, Sequence

from rich.text import Text
from textual.containers import VerticalScroll
from textual.widget import Widget
from textual.widgets import Static

from preview.errors import printable
from preview.ui.actions import Group
from preview.ui.asking import Page
from preview.ui.firstrun import HEARING
from preview.ui.keymap import KeyMap
from preview.ui.screens.dialog import Dialog

__all__ = ["CautionScreen", "HelpScreen", "PageScreen", "help_lines"]

_MARKS = (
    ("▆ ▂ ╿", "RMS stands tall, the live peak lies low, the upright stroke is the highest peak (hold)"),
    ("▐░  ┊", "the limit of an op-amp's output, hatched behind; full scale of the recording"),
    (
        "left dB",
        "from the highest peak to the wall: full scale at the source, the limit at op-amps and output",
    ),
    ("slew, amps", "slew rate and output current in percent of the op-amp's limits"),
    ("◂", "the row that limits first; 'tightest' where none does"),
    ("near", "less than 3 dB to a limit; FULL: the recording itself reaches full scale"),
    (
        "byp",
        "in bypass: what is heard is the input, so no rail is drawn; the op-amps' rows are still the stage's",
    ),
    ("in 2+", "the loudest of channel 2 and those after it, where not all have room"),
    ("clips ×3", "visits of the op-amp's output to a limit; 'clipped' is the time spent there"),
    ("limiter", "blocks held at the device's full scale; the volts you read are not touched"),
    ("≠E24", "the value is not one of that series"),
    ("▾ ╎ ┃", "a corner: 3 dB below the passband gain; 'before → now' follows your changes; the cursor"),
    ("░ ╴", "live spectrum in 1/6 octaves, rms on the scale of volts: output as columns, input as dashes"),
)
_MOUSE = (
    "A part, an op-amp, a candidate or a hint of the foot: click. The wheel over the parts steps the value.",
    "The waveform: click seeks, a drag sets the region. The response: click puts the cursor.",
    "What has no place of its own: click the hint 'all' and then the action.",
)
_CAUTIONS = (
    "Hearing: start low. A circuit with gain can jump by 20 dB and more when a part changes.",
    "A computed stage proves nothing about mains or phantom-powered equipment: have a built board checked by "
    "someone licensed for it; local codes come first.",
)


def help_lines(keys: KeyMap, keys_file: str = "") -> list[Text]:
    """The help page, made from the actions with the keys in force."""
    lines: list[Text] = []
    for group in Group:
        lines += [Text(""), Text(group.value, "bold")]
        for action in keys.actions:
            if action.group is group:
                line = Text(f"  {action.shown or '(no key)':<13}", "bold")
                line.append(f" {action.help}", "not bold")
                lines.append(line)
    lines += [Text(""), Text("Marks", "bold")]
    for mark, words in _MARKS:
        line = Text(f"  {mark:<13}", "bold")
        line.append(f" {words}", "not bold")
        lines.append(line)
    lines += [Text(""), Text("Mouse", "bold"), *(Text(f"  {words}") for words in _MOUSE)]
    if keys_file:
        lines += [Text(""), Text("Your own keys", "bold")]
        lines.append(
            Text(f'  {printable(keys_file)}: a table [keys] with lines such as  play_pause = ["f5"]')
        )
    lines += [Text(""), Text("Cautions", "bold"), *(Text(f"  {words}") for words in _CAUTIONS)]
    return lines[1:]


class HelpScreen(Dialog[None]):
    """Every key with what it does.

    Parameters
    ----------
    keys : KeyMap
        The keys in force.
    keys_file : str
        Where a person's own keys stand.
    """

    def __init__(self, keys: KeyMap, keys_file: str = "") -> None:
        super().__init__(
            keys, "Keys", ("row_up", "and"), ("row_down", "scroll"), ("cancel", "back"), ("help", "back")
        )
        self._keys_file = keys_file

    def body(self) -> Iterable[Widget]:
        """See :class:`Dialog`."""
        lines = help_lines(self.keys, self._keys_file)
        yield VerticalScroll(*(Static(line) for line in lines), id="page", can_focus=False)

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

    def __init__(self, keys: KeyMap, title: str, paragraphs: Sequence[str], *pairs: tuple[str, str]) -> None:
        super().__init__(keys, printable(title), *pairs)
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

    def __init__(self, keys: KeyMap) -> None:
        pairs = (("accept", "understood: start"), ("cancel", "stay paused"))
        super().__init__(keys, "Mind your hearing", HEARING, *pairs)


class PageScreen(_Reading):
    """A page to read."""

    def __init__(self, keys: KeyMap, page: Page) -> None:
        super().__init__(keys, page.title, page.paragraphs, ("accept", "back"), ("cancel", "back"))
