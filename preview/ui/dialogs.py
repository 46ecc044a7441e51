"""What actions answer with, as dialogs on the screen."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

from textual.app import App
from textual.screen import Screen

from preview.errors import PreviewError, debugging
from preview.session import Session
from preview.ui.asking import Menu, Outcome, Page, Question
from preview.ui.desk import Desk
from preview.ui.keymap import KEYS_FILE
from preview.ui.screens.chooser import ChooserScreen
from preview.ui.screens.entry import EntryScreen
from preview.ui.screens.pages import HelpScreen, PageScreen
from preview.ui.screens.palette import PaletteScreen
from preview.ui.theme import Look
from preview.ui.widgets.board import Board

__all__ = ["DialogApp"]


class DialogApp(App[Session]):
    """The part of the desk that opens dialogs.

    Parameters
    ----------
    desk : Desk
        What is asked about.
    look : Look
        Colours.
    config : Path
        Folder of the person's own keys.
    """

    def __init__(self, desk: Desk, look: Look, config: Path) -> None:
        super().__init__()
        self.desk = desk
        self.look = look
        self._config = config

    def say(self, text: str, severity: str = "information") -> None:
        """Show a line."""
        raise NotImplementedError

    def show(self) -> None:
        """Paint everything that an action can have changed."""
        raise NotImplementedError

    def action_do(self, name: str) -> None:
        """Carry out the action of that name: the desk's own, or one that needs the screen."""
        self.carry_out(self.desk.method(name) or getattr(self, f"do_{name}"))

    def on_board_acted(self, event: Board.Acted) -> None:
        """What the mouse asks for."""
        self.carry_out(event.action)

    def carry_out(self, action: Callable[[], Outcome]) -> None:
        """Do it, say what cannot be done, and paint what has changed."""
        try:
            outcome = action()
        except PreviewError as error:
            self.say(str(error), "error")
        except Exception as error:  # what one action cannot do must not take the sound down
            if debugging():
                raise
            self.say(f"an error inside the program ({type(error).__name__}: {error})", "error")
        else:
            self.present(outcome)
        self.show()

    def present(self, outcome: Outcome) -> None:
        """Show what an action answers with; what is answered to it is carried out."""
        keys = self.desk.keys
        if isinstance(outcome, str):
            self.say(outcome)
        elif isinstance(outcome, Page):
            self.push_screen(PageScreen(keys, outcome))
        elif isinstance(outcome, Question):
            self._ask(EntryScreen(keys, outcome), outcome)
        elif isinstance(outcome, Menu):
            self._ask(ChooserScreen(keys, outcome, self.look), outcome)

    def _ask(self, screen: Screen[str], asked: Question | Menu) -> None:
        def answered(text: str | None) -> None:
            if text is not None:
                self.carry_out(lambda: asked.take(text))

        self.push_screen(screen, answered)

    def do_help(self) -> None:
        """The help page."""
        self.push_screen(HelpScreen(self.desk.keys, str(self._config / KEYS_FILE)))

    def do_palette(self) -> None:
        """Every action by its name."""

        def chosen(name: str | None) -> None:
            if name is not None:
                self.action_do(name)

        self.push_screen(PaletteScreen(self.desk.keys, self.look), chosen)
