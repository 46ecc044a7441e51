"""What the desk asks and shows in dialogs; the screen below them is :mod:`preview.ui.app`."""

from __future__ import annotations

from collections.abc import Callable

from textual.app import App

from preview.circuit.library import open_stages
from preview.errors import PreviewError
from preview.session import Session
from preview.ui.changes import render_command
from preview.ui.desk import Desk
from preview.ui.opamps import CHOICE_HEADS, opamp_choices, type_in_force, with_opamp_type
from preview.ui.questions import (
    FILE_ANSWER,
    Question,
    ask_full_scale,
    ask_load,
    ask_part,
    ask_source,
    ask_stage_file,
    ask_supply,
    stage_choices,
)
from preview.ui.screens.chooser import ChooserScreen
from preview.ui.screens.entry import EntryScreen
from preview.ui.screens.pages import CommandScreen, HelpScreen
from preview.ui.theme import Look

__all__ = ["DialogApp"]


class DialogApp(App[Session]):
    """The actions that open a dialog.

    Parameters
    ----------
    desk : Desk
        What is asked about.
    look : Look
        Colours.
    """

    def __init__(self, desk: Desk, look: Look) -> None:
        super().__init__()
        self.desk = desk
        self.look = look

    def say(self, text: str, severity: str = "information") -> None:
        """Show a line."""
        raise NotImplementedError

    def show(self) -> None:
        """Paint everything that a key can have changed."""
        raise NotImplementedError

    def open_stage(self, name_or_path: str) -> None:
        """Open another stage, or say why not."""
        raise NotImplementedError

    def change(self, session: Session) -> None:
        """Make this the session, or say why not."""
        try:
            self.desk.change(session)
        except PreviewError as error:
            self.say(str(error), "error")
        self.show()

    def ask(self, question: Question, then: Callable[[Session], None] | None = None) -> None:
        """Put a question; its answer becomes the session."""

        def answered(text: str | None) -> None:
            if text is not None:
                (then or self.change)(question.answer(text))

        entry = EntryScreen(
            question.title, about=question.about, now=question.now, understand=question.understand
        )
        self.push_screen(entry, answered)

    def do_type_value(self) -> None:
        """Type the selected part's value."""
        if (part := self.desk.part) is not None:
            self.ask(ask_part(self.desk.session, part))

    def do_full_scale(self) -> None:
        """Type full scale."""
        self.ask(ask_full_scale(self.desk.session))

    def do_supply(self) -> None:
        """Type the rails."""
        self.ask(ask_supply(self.desk.session))

    def do_source(self) -> None:
        """Type what drives the stage."""
        self.ask(ask_source(self.desk.session))

    def do_load(self) -> None:
        """Type what follows the stage."""
        self.ask(ask_load(self.desk.session))

    def do_choose_stage(self) -> None:
        """Choose a stage from the list, or a file."""

        def chosen(name: str | None) -> None:
            if name == FILE_ANSWER:
                question = ask_stage_file(self.desk.session)
                self.ask(
                    question, lambda session: self.open_stage(str(session.stage.path or session.stage.name))
                )
            elif name is not None and name != self.desk.session.stage.name:
                self.open_stage(name)

        now = self.desk.session.stage.name
        self.push_screen(ChooserScreen("Stage", stage_choices(), now=now, look=self.look), chosen)

    def do_opamp_type(self) -> str | None:
        """Choose the type of the stage's op-amps from the list."""
        opamps = self.desk.session.stage.opamps
        if not opamps:
            return "this stage has no op-amp"
        now = type_in_force(self.desk.session.stage)

        def chosen(kind: str | None) -> None:
            if kind is None or all(opamp.type == kind for opamp in self.desk.session.stage.opamps):
                return
            try:
                session, said = with_opamp_type(self.desk.session, kind)
            except PreviewError as error:
                self.say(str(error), "error")
                return
            self.say(said)
            self.change(session)

        title = f"Op-amp type of {', '.join(opamp.designator for opamp in opamps)}"
        choices = opamp_choices(now)
        self.push_screen(ChooserScreen(title, choices, now=now, look=self.look, heads=CHOICE_HEADS), chosen)
        return None

    def do_help(self) -> None:
        """The help page."""
        self.push_screen(HelpScreen())

    def do_write_out(self) -> None:
        """Show the command that renders what is set."""
        session = self.desk.session
        opened = open_stages(session.stage.opened_as)
        self.push_screen(CommandScreen(render_command(session, opened)))
