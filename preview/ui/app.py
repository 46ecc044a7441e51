"""The desk as a terminal application. It never touches audio: the engine is another process."""

from __future__ import annotations

import asyncio
import contextlib
import gc
import signal
import sys
from collections.abc import Callable
from pathlib import Path

from textual.app import ComposeResult
from textual.containers import Horizontal, Vertical
from textual.events import AppBlur, AppFocus, Resize

from preview.engine.messages import Recover, SetVolume
from preview.errors import PreviewError
from preview.session import Session
from preview.ui.bindings import bindings
from preview.ui.desk import Desk
from preview.ui.dialogs import DialogApp
from preview.ui.figures import FigureKeeper, FigureSet, MakeFigures, compute_figures
from preview.ui.firstrun import caution_seen, config_folder, remember_caution
from preview.ui.keymap import KeyMap, read_keys
from preview.ui.link import AnswerWatch, EngineLink, Restart, Reviver
from preview.ui.panels.candidates import CandidatesPanel
from preview.ui.panels.circuit import CircuitPanel
from preview.ui.panels.figures import FiguresPanel
from preview.ui.panels.footer import FooterPanel
from preview.ui.panels.header import HeaderPanel
from preview.ui.panels.opamps import OpAmpsPanel
from preview.ui.panels.parts import PartsPanel
from preview.ui.panels.path import PathPanel
from preview.ui.panels.response import ResponsePanel
from preview.ui.panels.timeline import TimelinePanel, WaveformPanel
from preview.ui.screens.pages import CautionScreen
from preview.ui.theme import PALETTES, Look, first_palette
from preview.ui.view import Shown
from preview.ui.widgets.board import Board

__all__ = ["DeskApp"]

FRAMES_PER_S = 25.0
_VIEWS_EVERY = 3
"""What is read rather than watched is painted at a third of the pace."""
_UNFOCUSED_EVERY = 3
"""A window that is not looked at is painted at a third of the pace."""
WIDE, TALL = 120, 42
"""From this size on two views fit side by side, or above each other [cells]."""
ENDINGS = tuple(getattr(signal, name) for name in ("SIGINT", "SIGTERM", "SIGHUP") if hasattr(signal, name))
"""Signals that end the desk in an orderly way."""


class DeskApp(DialogApp):
    """The desk.

    Parameters
    ----------
    session : Session
        What is open.
    link : EngineLink
        The engine, already running this session; ``run_desk`` closes it.
    restart : callable, optional
        Starts another engine when this one has stopped.
    autoplay : bool
        Whether sound starts by itself.
    show_caution : bool
        Whether the hearing caution comes first on an account that has not seen it.
    make_figures : callable
        Computes the response; runs in a thread.
    config : Path, optional
        Folder of the person's own keys, which also remembers that the hearing caution was seen; their own if None.
    """

    CSS_PATH = "desk.tcss"
    TITLE = "Preview"
    ENABLE_COMMAND_PALETTE = False

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
        config = config or config_folder()
        self._greeting: list[tuple[str, str]] = [(note, "information") for note in session.notes[:1]]
        try:
            keys = read_keys(config)
        except PreviewError as error:
            keys = KeyMap()
            self._greeting.append((str(error), "error"))
        super().__init__(Desk(session, link, keys=keys), Look(first_palette()), config)
        for binding in bindings(keys.desk):
            self._bindings.key_to_bindings[binding.key] = [binding]
        self.ended_by: int | None = None
        self.keep = False
        """Whether what is on the desk is kept against a crash."""
        self.on_signal: Callable[[], None] | None = None
        """Called when a signal ends the desk; None leaves signals alone."""
        self._restart = restart
        self._restarting = False
        self._reviver = Reviver()
        self._autoplay = autoplay
        self._show_caution = show_caution
        self._keeper = FigureKeeper(make_figures)
        self._focused = True
        self._polls = 0
        self._laid_out_late = False
        self._watch = AnswerWatch()
        self.head = HeaderPanel(self.desk, self.look)
        self.path = PathPanel(self.desk, self.look)
        self.timeline = TimelinePanel(self.desk, self.look)
        self.parts = PartsPanel(self.desk, self.look)
        self.response = ResponsePanel(self.desk, self.look)
        self.circuit = CircuitPanel(self.desk, self.look)
        self.figures = FiguresPanel(self.desk, self.look)
        self.foot = FooterPanel(self.look, keys)
        self.opamps = OpAmpsPanel(self.desk, self.look)
        self.candidates = CandidatesPanel(self.desk, self.look)
        self.waveform = WaveformPanel(self.desk, self.look)
        self.views: dict[Shown, Board] = {
            Shown.RESPONSE: self.response,
            Shown.CIRCUIT: self.circuit,
            Shown.OPAMPS: self.opamps,
            Shown.CANDIDATES: self.candidates,
            Shown.TIMELINE: self.waveform,
        }
        for board in self.views.values():
            board.add_class("view")
        self.boards: tuple[Board, ...] = (
            *(self.head, self.path, self.timeline, self.parts),
            *(*self.views.values(), self.figures, self.foot),
        )

    # ---- life ----

    def compose(self) -> ComposeResult:
        """The panels from top to bottom."""
        yield self.head
        yield self.path
        yield self.timeline
        with Horizontal(id="work"):
            yield self.parts
            with Vertical(id="views"):
                yield from self.views.values()
        yield self.figures
        yield self.foot

    def on_mount(self) -> None:
        """Colours, the caution of the first run, and the pulse."""
        for palette in PALETTES:
            self.register_theme(palette.theme())
        self.theme = self.look.palette.name
        if self.on_signal is not None:
            for number in ENDINGS:
                asyncio.get_running_loop().add_signal_handler(number, self.end, number)
        self.app_resume_signal.subscribe(self, lambda _: self.refresh(layout=True))  # the shell wrote over it
        self.arrange(self.size.width, self.size.height)
        self.desk.link.send(SetVolume(self.desk.listening.volume_db))
        if self.keep and (told := self.desk.keeping.begin()):
            self._greeting.append((told, "warning"))
        for text, severity in self._greeting:
            self.foot.say(text, severity)
        self.poll()
        self.set_interval(1.0 / FRAMES_PER_S, self.poll)
        self.run_worker(self._keeper.run(self._sessions, self._figured), group="figures")
        self.show()
        if not self._show_caution or caution_seen(self._config):
            self._begin()
        else:
            self.push_screen(CautionScreen(self.desk.keys), self._caution_read)

    def _caution_read(self, accepted: bool | None) -> None:
        if accepted:
            remember_caution(self._config)
            self._begin()

    def _begin(self) -> None:
        if self._autoplay and not self.desk.stopped:
            self.desk.listening.play(True)
            self.show()

    def _fatal_error(self) -> None:
        """Close the screen; the caller says what happened in a line, not in pages over the shell's text."""
        self._close_messages_no_wait()

    def end(self, number: int) -> None:
        """Leave because of a signal."""
        self.ended_by = number
        if self.on_signal is not None:
            self.on_signal()
        self.exit(self.desk.session)

    # ---- arrangement ----

    def on_resize(self, event: Resize) -> None:
        """Another size, another arrangement."""
        self.arrange(event.size.width, event.size.height)

    def _see_to_size(self) -> None:
        """Lay the screens out anew where that was missed: the library's timer for it is lost on a very busy machine."""
        screens = self.screen_stack  # none when the desk ends
        late = bool(screens) and screens[-1].outer_size != self.size
        if late and self._laid_out_late:
            for screen in screens:
                screen.post_message(Resize(self.size, self.size))
        self._laid_out_late = late

    def arrange(self, width: int, height: int) -> None:
        """Set the classes that the style sheet arranges by, the views that are shown, the rows of path and foot."""
        screen = self.screen_stack[0]
        wide, tall = width >= WIDE, height >= TALL
        for holds, name in ((not wide, "narrow"), (wide, "wide"), (tall, "tall")):
            screen.set_class(holds, name)
        shown = {self.desk.view.shown}
        if wide or tall:
            shown = {Shown.RESPONSE, self.desk.view.shown}
            if len(shown) == 1:
                shown.add(Shown.CIRCUIT)
        for name, board in self.views.items():
            board.display = name in shown
            board.set_class(len(shown) > 1 and name is not Shown.RESPONSE, "second")
        screen.set_class(shown == {Shown.CIRCUIT}, "drawing")
        lines = len(self.desk.session.stage.drawing.strip("\n").splitlines()) + 1
        self.circuit.styles.height = min(max(12, lines), height // 3) if tall and len(shown) > 1 else None
        self.path.styles.height = self.path.wanted_height(height)
        self.timeline.styles.height = 1 if height < 30 else 2 if height < TALL else 3
        self.foot.stand(1 if height < 30 or width >= 160 else 2)

    def on_app_focus(self, event: AppFocus | AppBlur) -> None:
        """Full pace, slower while nobody looks."""
        self._focused = isinstance(event, AppFocus)

    on_app_blur = on_app_focus

    def on_footer_panel_pressed(self, event: FooterPanel.Pressed) -> None:
        """A click on a hint is its key."""
        self.action_do(event.name)

    # ---- what is shown ----

    def poll(self) -> None:
        """Take what the engine has said since the last time, and paint what changed."""
        self._polls += 1
        link = self.desk.link
        if not self.desk.stopped and not link.alive:
            self.desk.stopped = True
            self._revive()
            self.desk.listening.playing = False
            self.head.rebuild()
        for notice in link.notices():
            self.foot.say(notice.text, notice.severity)
        for report in link.reports():
            if said := self.desk.hear_report(report):
                self.foot.say(said)
        snapshot = link.latest()
        late = self._watch.late(snapshot is not None)
        if late and not self.desk.unanswered:
            self._revive()
        self.desk.unanswered = late
        if snapshot is not None:
            first = self.desk.snapshot is None
            self.desk.take(snapshot)
            if snapshot.sample_rate_hz != self._keeper.sample_rate_hz:
                self._keeper.sample_rate_hz = snapshot.sample_rate_hz
                self._keeper.want()
            if first:
                self.arrange(self.size.width, self.size.height)
                if self.keep:
                    gc.freeze()  # what is there by now stays: looking through it again would keep a key waiting
        self._see_to_size()
        self.desk.keeping.note()
        if (edited := self.desk.stage_watch.look()) is not None:
            self.foot.say(*edited)
            self.show()
        if self._focused or self._polls % _UNFOCUSED_EVERY == 0:
            slow = self.views.values() if self._polls % _VIEWS_EVERY == 0 else ()
            for board in (self.head, self.path, self.timeline, *slow):
                if board.display:
                    board.rebuild()
            self.foot.tick()

    def say(self, text: str, severity: str = "information") -> None:
        """See :class:`DialogApp`."""
        self.foot.say(text, severity)

    def show(self) -> None:
        """See :class:`DialogApp`."""
        self.arrange(self.size.width, self.size.height)
        for board in self.boards:
            if board.display:
                board.rebuild()
        self._keeper.want()

    def _sessions(self) -> tuple[Session, Session, Session | None]:
        return self.desk.session, self.desk.before, self.desk.history.last

    def _figured(self, figures: FigureSet) -> None:
        self.desk.figures = figures
        self.response.rebuild()
        self.figures.rebuild()

    # ---- actions ----

    def do_colours(self) -> None:
        """The other palette."""
        self.look.switch()
        self.theme = self.look.palette.name

    def do_restart(self) -> str | None:
        """Start a muted circuit from rest, or another engine when this one has stopped."""
        snapshot = self.desk.snapshot
        if not (self.desk.stopped or self.desk.unanswered):
            if snapshot is not None and snapshot.fault is not None:
                self.desk.link.send(Recover())
                return "the circuit starts from rest"
            return "the engine is running"
        if self._restart is None:
            return "leave the desk and open it again: this engine cannot be restarted from here"
        self._start(self._restart, play=False)
        return "starting the engine again"

    def _revive(self) -> None:
        """Start another engine by itself, unless this one has been started so just now: then a person decides."""
        if self._restart is not None and self._reviver.may(self.desk.now_s()):
            self._start(self._restart, play=self.desk.listening.playing)

    def _start(self, restart: Restart, *, play: bool) -> None:
        if not self._restarting:
            self._restarting = True
            self.run_worker(self._start_again(restart, play), group="restart")

    async def _start_again(self, restart: Restart, play: bool) -> None:
        left = self.desk.as_left()
        await asyncio.to_thread(self.desk.link.close)  # one that hangs is ended by force, which takes seconds
        try:
            # A new process inherits standard error; while the desk runs, sys.stderr is not a real file.
            with contextlib.redirect_stderr(sys.__stderr__):
                link = await asyncio.to_thread(restart, left)
        except PreviewError as error:
            self.foot.say(str(error), "error")
        else:
            lost = self.desk.resume(link, left)
            self._watch = AnswerWatch()
            self.desk.listening.play(play)
            hint = "" if play else f"; {self.desk.keys.shown('play_pause')} plays"
            lost = lost and f"; {lost}"
            self.foot.say(
                f"the engine had stopped and runs again{hint}{lost}", "warning" if lost else "information"
            )
        finally:
            self._restarting = False
            self.show()

    def do_quit(self) -> None:
        """Leave the desk."""
        self.exit(self.desk.session)
