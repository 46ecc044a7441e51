"""The desk as a terminal application. It never touches audio: the engine is another process."""

from __future__ import annotations

import asyncio
import contextlib
import sys
from collections.abc import Callable
from pathlib import Path
from typing import ClassVar

from textual.app import ComposeResult
from textual.binding import BindingType
from textual.containers import Horizontal, Vertical
from textual.events import AppBlur, AppFocus, Resize

from preview.circuit.library import find_stage
from preview.engine.messages import SetVolume
from preview.errors import PreviewError
from preview.session import Session
from preview.ui.actions import ACTIONS, Group, bindings
from preview.ui.desk import Desk
from preview.ui.dialogs import DialogApp
from preview.ui.figures import FigureKeeper, Figures, MakeFigures, compute_figures
from preview.ui.firstrun import caution_seen, config_folder, remember_caution
from preview.ui.link import AnswerWatch, EngineLink, Restart
from preview.ui.panels.curve import CurvePanel
from preview.ui.panels.figures import FiguresPanel
from preview.ui.panels.footer import FooterPanel
from preview.ui.panels.header import HeaderPanel
from preview.ui.panels.meters import MetersPanel
from preview.ui.panels.parts import PartsPanel
from preview.ui.panels.schematic import SchematicPanel
from preview.ui.panels.timeline import TimelinePanel
from preview.ui.screens.pages import CautionScreen
from preview.ui.theme import PALETTES, Look, first_palette
from preview.ui.widgets.board import Board

__all__ = ["DeskApp", "run_desk"]

FRAMES_PER_S = 25.0
_UNFOCUSED_EVERY = 3
"""A window that is not looked at is painted at a third of the pace."""
WIDE, TALL = 120, 42
"""From this size on all views fit side by side, or above each other [cells]."""


class DeskApp(DialogApp):
    """The desk.

    Parameters
    ----------
    session : Session
        What is open.
    link : EngineLink
        The engine, already running this session; whoever started it need not close it after ``run_desk``.
    restart : callable, optional
        Starts another engine when this one has stopped.
    autoplay : bool
        Whether sound starts by itself.
    show_caution : bool
        Whether the hearing caution comes first on an account that has not seen it.
    make_figures : callable
        Computes the response; runs in a thread.
    config : Path, optional
        Folder that remembers that the hearing caution was seen; the person's own if None.
    """

    CSS_PATH = "desk.tcss"
    TITLE = "Preview"
    ENABLE_COMMAND_PALETTE = False
    BINDINGS: ClassVar[list[BindingType]] = [*bindings(a for a in ACTIONS if a.group is not Group.DIALOG)]

    def __init__(
        self,
        session: Session,
        link: EngineLink,
        *,
        restart: Restart | None = None,
        autoplay: bool = True,
        show_caution: bool = True,
        make_figures: MakeFigures = compute_figures,
        config: Path | None = None,
    ) -> None:
        super().__init__(Desk(session, link), Look(first_palette()))
        self._restart = restart
        self._restarting = False
        self._autoplay = autoplay
        self._show_caution = show_caution
        self._keeper = FigureKeeper(make_figures)
        self._config = config or config_folder()
        self._focused = True
        self._polls = 0
        self._watch = AnswerWatch()
        self.head = HeaderPanel(self.desk, self.look)
        self.meters = MetersPanel(self.desk, self.look)
        self.timeline = TimelinePanel(self.desk, self.look)
        self.parts = PartsPanel(self.desk, self.look)
        self.curve = CurvePanel(self.desk, self.look)
        self.schematic = SchematicPanel(self.desk, self.look)
        self.figures = FiguresPanel(self.desk, self.look)
        self.foot = FooterPanel(self.look)
        self.boards: tuple[Board, ...] = (
            *(self.head, self.meters, self.timeline, self.parts),
            *(self.curve, self.schematic, self.figures, self.foot),
        )

    # ---- life ----

    def compose(self) -> ComposeResult:
        """The panels from top to bottom."""
        yield self.head
        yield self.meters
        yield self.timeline
        with Horizontal(id="work"):
            yield self.parts
            with Vertical(id="views"):
                yield self.curve
                yield self.schematic
        yield self.figures
        yield self.foot

    def on_mount(self) -> None:
        """Colours, the caution of the first run, and the pulse."""
        for palette in PALETTES:
            self.register_theme(palette.theme())
        self.theme = self.look.palette.name
        self.app_resume_signal.subscribe(self, lambda _: self.refresh(layout=True))  # the shell wrote over it
        self.arrange(self.size.width, self.size.height)
        self.desk.link.send(SetVolume(self.desk.volume_db))
        for note in self.desk.session.notes[:1]:
            self.foot.say(note)
        self.poll()
        self.set_interval(1.0 / FRAMES_PER_S, self.poll)
        self.run_worker(
            self._keeper.run(lambda: (self.desk.session, self.desk.before), self._figured), group="figures"
        )
        self.show()
        if not self._show_caution or caution_seen(self._config):
            self._begin()
        else:
            self.push_screen(CautionScreen(), self._caution_read)

    def _caution_read(self, accepted: bool | None) -> None:
        if accepted:
            remember_caution(self._config)
            self._begin()

    def _begin(self) -> None:
        if self._autoplay and not self.desk.stopped:
            self.desk.play(True)
            self.show()

    def on_resize(self, event: Resize) -> None:
        """Another size, another arrangement."""
        self.arrange(event.size.width, event.size.height)

    def arrange(self, width: int, height: int) -> None:
        """Set the classes that the style sheet arranges by, and the rows of meters and foot."""
        screen = self.screen_stack[0]
        for holds, name in ((width < WIDE, "narrow"), (width >= WIDE, "wide"), (height >= TALL, "tall")):
            screen.set_class(holds, name)
        self.meters.styles.height = self.meters.wanted_height(height)
        self.foot.stand(1 if height < 30 or width >= 160 else 2)

    def on_app_focus(self, _event: AppFocus) -> None:
        """Full pace."""
        self._focused = True

    def on_app_blur(self, _event: AppBlur) -> None:
        """Slower while nobody looks."""
        self._focused = False

    def on_parts_panel_chosen(self, event: PartsPanel.Chosen) -> None:
        """A click on a part selects it."""
        self.desk.choose(event.index)
        self.show()

    def on_timeline_panel_sought(self, event: TimelinePanel.Sought) -> None:
        """A click on the line seeks."""
        self.desk.seek(event.frame)
        self.show()

    # ---- what is shown ----

    def poll(self) -> None:
        """Take what the engine has said since the last time, and paint what changed."""
        self._polls += 1
        link = self.desk.link
        if not self.desk.stopped and not link.alive:
            self.desk.stopped = True
            self.desk.playing = False
            self.head.rebuild()
        for notice in link.notices():
            self.foot.say(notice.text, notice.severity)
        snapshot = link.latest()
        self.desk.unanswered = self._watch.late(snapshot is not None)
        if snapshot is not None:
            first = self.desk.snapshot is None
            self.desk.take(snapshot)
            if snapshot.sample_rate_hz != self._keeper.sample_rate_hz:
                self._keeper.sample_rate_hz = snapshot.sample_rate_hz
                self._keeper.want()
            if first:
                self.arrange(self.size.width, self.size.height)
        if self._focused or self._polls % _UNFOCUSED_EVERY == 0:
            for board in (self.head, self.meters, self.timeline):
                board.rebuild()
            self.foot.tick()

    def say(self, text: str, severity: str = "information") -> None:
        """See :class:`DialogApp`."""
        self.foot.say(text, severity)

    def show(self) -> None:
        """Paint everything that a key can have changed."""
        for board in self.boards:
            board.rebuild()
        self._keeper.want()

    def _figured(self, now: Figures, before: Figures) -> None:
        self.desk.figures.now, self.desk.figures.before = now, before
        self.curve.rebuild()
        self.figures.rebuild()

    # ---- actions ----

    def action_do(self, name: str) -> None:
        """Carry out the action of that name: the desk's own, or one with a dialog."""
        method: Callable[[], str | None] = getattr(self.desk, f"do_{name}", None) or getattr(
            self, f"do_{name}"
        )
        try:
            said = method()
        except PreviewError as error:
            self.foot.say(str(error), "error")
        else:
            if said:
                self.foot.say(said)
        self.show()

    def open_stage(self, name_or_path: str) -> None:
        """See :class:`DialogApp`."""
        try:
            self.desk.open_stage(find_stage(name_or_path))
        except PreviewError as error:
            self.foot.say(str(error), "error")
        else:
            self.foot.say(self.desk.session.stage.about)
        self.arrange(self.size.width, self.size.height)
        self.show()

    def do_switch_view(self) -> str | None:
        """Curve or schematic."""
        screen = self.screen_stack[0]
        screen.toggle_class("drawing")
        both = screen.has_class("wide") or screen.has_class("tall")
        return "curve and schematic are both shown at this size" if both else None

    def do_phase(self) -> None:
        """Phase in the curve, or not."""
        self.desk.phase_shown = not self.desk.phase_shown

    def do_colours(self) -> None:
        """The other palette."""
        self.look.switch()
        self.theme = self.look.palette.name

    def do_restart(self) -> str | None:
        """Start another engine when this one has stopped."""
        if not (self.desk.stopped or self.desk.unanswered):
            return "the engine is running"
        if self._restart is None:
            return "leave the desk with q and open it again: this engine cannot be restarted from here"
        if not self._restarting:
            self._restarting = True
            self.run_worker(self._start_again(self._restart), group="restart")
        return "starting the engine again"

    async def _start_again(self, restart: Restart) -> None:
        await asyncio.to_thread(self.desk.link.close)  # one that hangs is ended by force, which takes seconds
        try:
            # A new process inherits standard error; while the desk runs, sys.stderr is not a real file.
            with contextlib.redirect_stderr(sys.__stderr__):
                link = await asyncio.to_thread(restart)
        except PreviewError as error:
            self.foot.say(str(error), "error")
        else:
            self.desk.resume(link)
            self._watch = AnswerWatch()
            self.foot.say("the engine runs again; space plays")
        finally:
            self._restarting = False
            self.show()

    def do_quit(self) -> None:
        """Leave the desk."""
        self.exit(self.desk.session)


def run_desk(
    session: Session,
    link: EngineLink,
    *,
    restart: Restart | None = None,
    autoplay: bool = True,
    config: Path | None = None,
) -> Session:
    """Run the desk until the person leaves; the session as it was left.

    The engine behind ``link`` must be running before this is called, and is closed when it returns.

    Raises
    ------
    PreviewError
        The desk stopped on a fault of its own; the terminal is restored and the fault is on standard error.
    """
    app = DeskApp(session, link, restart=restart, autoplay=autoplay, config=config)
    try:
        left = app.run()
    finally:
        app.desk.link.close()
    if left is None and app.return_code:
        raise PreviewError("the desk stopped on a fault of its own", "the report stands above")
    return left or app.desk.session
