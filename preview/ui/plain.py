"""The desk as lines of text, for screen readers and terminals that can do no more: the same actions in words.

A line is an action by its words or its key (``value up``, ``bypass``, ``]``), with a count or an answer behind it where
it takes one (``value up 3``, ``supply ±12``), or a part and what it is set to (``R1=4k7``). Views are read out as
sentences (``view response``, ``path``, ``parts``).
"""

from __future__ import annotations

import queue
import threading
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import TextIO

from preview.circuit.settings import read_setting
from preview.engine.messages import Recover, SetVolume
from preview.errors import PreviewError, UsageError, debugging, printable
from preview.session import Session
from preview.ui.actions import Action, Group
from preview.ui.asking import Menu, Outcome, Page, Question
from preview.ui.desk import Desk
from preview.ui.differences import differences
from preview.ui.figures import Figures, MakeFigures, compute_figures, job_of
from preview.ui.firstrun import HEARING, caution_seen, config_folder, remember_caution
from preview.ui.keymap import KeyMap, read_keys
from preview.ui.link import EngineLink, Restart, Reviver
from preview.ui.phrases import answer_of, understood
from preview.ui.spoken import effect, help_lines, part_lines, path_lines, place_line, spoken, state_line

__all__ = ["PlainDesk", "run_plain"]

_POLL_S = 0.05
_MOST_REPEATS = 1000
_READ_OUT: dict[str, Callable[[Desk], list[str]]] = {
    "path": path_lines,
    "parts": part_lines,
    "state": lambda desk: [state_line(desk)],
}
"""What can be read out beside the views."""
_SEEKS = ("back_small", "forward_small", "back_large", "forward_large", "to_start")
"""Actions that move the playhead and have nothing else to say."""


class PlainDesk:
    """The desk in lines.

    Parameters
    ----------
    session : Session
        What is open.
    link : EngineLink
        The engine, already running this session.
    lines : TextIO
        What the person types.
    out : TextIO
        What is said.
    restart : callable, optional
        Starts another engine when this one has stopped.
    make_figures : callable
        Computes the response.
    config : Path, optional
        Folder of the person's own keys; their own if None.
    """

    def __init__(
        self,
        session: Session,
        link: EngineLink,
        *,
        lines: TextIO,
        out: TextIO,
        restart: Restart | None = None,
        make_figures: MakeFigures = compute_figures,
        config: Path | None = None,
    ) -> None:
        self._config = config or config_folder()
        self._out = out
        self._restart = restart
        self._reviver = Reviver()
        self._make_figures = make_figures
        self._figured: tuple[Session, Session, float] | None = None
        self._typed: queue.SimpleQueue[str | None] = queue.SimpleQueue()
        self._left = False
        trouble = ""
        try:
            keys = read_keys(self._config)
        except PreviewError as error:
            keys, trouble = KeyMap(), str(error)
        self.desk = Desk(session, link, keys=keys)
        if trouble:
            self.say(f"error: {trouble}")
        threading.Thread(target=self._read, args=(lines,), name="line-reader", daemon=True).start()

    # ---- lines in and out ----

    def say(self, text: str) -> None:
        """A line, cleaned of what could paint a terminal."""
        self._out.write(printable(" ".join(text.split())) + "\n")
        self._out.flush()

    def _read(self, lines: TextIO) -> None:
        try:
            for line in lines:
                self._typed.put(line.rstrip("\n"))
        finally:
            self._typed.put(None)

    def _next_line(self, prompt: str) -> str | None:
        """What is typed next; None at the end of the input. What the engine says meanwhile is said at once."""
        self._out.write(prompt)
        self._out.flush()
        while True:
            self.poll()
            try:
                return self._typed.get(timeout=_POLL_S)
            except queue.Empty:
                continue

    def poll(self) -> None:
        """Take what the engine has said since the last time."""
        desk, link = self.desk, self.desk.link
        if not desk.stopped and not link.alive:
            self._stopped()
            link = desk.link
        for notice in link.notices():
            self.say(f"{'' if notice.severity == 'information' else notice.severity + ': '}{notice.text}")
        for report in link.reports():
            if said := desk.hear_report(report):
                self.say(said)
        snapshot = link.latest()
        if snapshot is not None:
            desk.take(snapshot)
        desk.keeping.note()
        if (edited := desk.stage_watch.look()) is not None:
            self.say(edited[0])

    def _stopped(self) -> None:
        """Start another engine in place of one that stopped, once; what fails again is left to the person."""
        desk, played = self.desk, self.desk.listening.playing
        desk.stopped, desk.listening.playing = True, False
        if self._restart is not None and self._reviver.may(desk.now_s()):
            try:
                self._start_again(self._restart)
            except PreviewError as error:
                self.say(f"error: {error}")
            else:
                desk.listening.play(played)
                self.say("warning: the engine had stopped and runs again")
                return
        self.say("error: ENGINE STOPPED: no sound. 'restart' starts it again")

    def _start_again(self, restart: Restart) -> None:
        left = self.desk.as_left()
        self.desk.link.close()
        if lost := self.desk.resume(restart(left), left):
            self.say(f"warning: {lost}")

    # ---- the loop ----

    def run(self) -> Session:
        """Until the person leaves or the input ends; the session as it was left."""
        desk = self.desk
        desk.link.send(SetVolume(desk.listening.volume_db))
        self.say("line mode: 'help' lists what can be typed, 'quit' leaves")
        if caution_seen(self._config):
            self._play(True)
        else:
            for line in HEARING:
                self.say(f"caution: {line}")
            self.say("'play' starts the sound, and this is not said again")
        while not self._left and (typed := self._next_line("> ")) is not None:
            self.obey(typed)
        return desk.session

    def obey(self, line: str) -> None:
        """Carry one line out, and say what it has changed."""
        before, state = self.desk.session, state_line(self.desk).split(", ")
        try:
            self._carry_out(line.strip())
        except PreviewError as error:
            self.say(f"error: {error}")
        except Exception as error:  # what one line cannot do must not take the sound down
            if debugging():
                raise
            self.say(f"error: an error inside the program ({type(error).__name__}: {error})")
        now = self.desk.session
        if now is not before:
            changes = differences(before, now)
            if changes:
                self._figure()
                self.say("; ".join([*changes, effect(self.desk)]))
        said = [
            words
            for words in state_line(self.desk).split(", ")
            if words not in state and "at 0:" not in words
        ]
        if said:
            self.say(", ".join(said))

    def _carry_out(self, line: str) -> None:
        if not line:
            self.say(state_line(self.desk))
        elif line.lower() in _READ_OUT:
            for text in _READ_OUT[line.lower()](self.desk):
                self.say(text)
        elif line.lower() in ("play", "pause"):
            self._play(line.lower() == "play")
        elif self._sets_part(line):
            return
        else:
            action, rest = understood(self.desk.keys, line)
            self._do(action, rest)

    def _play(self, on: bool) -> None:
        self.desk.listening.play(on)
        if on:
            remember_caution(self._config)

    def _sets_part(self, line: str) -> bool:
        """Whether the line was a part and what it is set to, such as ``R1=4k7`` or ``P1 = 70 %``."""
        name, equals, text = (piece.strip() for piece in line.partition("="))
        if not equals or not text or not self.desk.parts.choose_named(name):
            return False
        part = self.desk.parts.part
        assert part is not None
        self.desk.parts.set(read_setting(part, text, f"{part.designator} = "))
        return True

    def _do(self, action: Action, rest: str) -> None:
        method = getattr(self, f"do_{action.name}", None) or self.desk.method(action.name)
        assert method is not None
        times = int(rest) if rest.isdigit() and action.group is Group.PARTS else 1
        if not 0 < times <= _MOST_REPEATS:
            raise UsageError(f"{rest} times", f"1 to {_MOST_REPEATS}")
        for _ in range(times):
            outcome = method()
        if action.name.startswith("view_") or action.name == "switch_view":
            self._figure()
            for text in spoken(self.desk, self.desk.view.shown):
                self.say(text)
            return
        self._present(outcome, "" if times > 1 else rest)
        part = self.desk.parts.part
        if action.name in ("next_part", "previous_part", "reset_part") and part is not None:
            self.say(next(text for text in part_lines(self.desk) if text.startswith("selected")))
        elif action.name in _SEEKS:
            self.say(place_line(self.desk) or "where it plays is not known yet")

    # ---- what actions answer with ----

    def _present(self, outcome: Outcome, answer: str = "") -> None:
        if isinstance(outcome, str):
            self.say(outcome)
        elif isinstance(outcome, Page):
            self.say(outcome.title)
            for paragraph in outcome.paragraphs:
                self.say(paragraph)
        elif isinstance(outcome, Question):
            self._ask(outcome, answer)
        elif isinstance(outcome, Menu):
            self._choose(outcome, answer)

    def _ask(self, question: Question, answer: str) -> None:
        if answer:
            self.say(question.understand(answer))
            self._present(question.take(answer))
            return
        self.say(f"{question.title}. {question.about}. Now {question.now}; an empty line leaves it")
        for text in self._answers():
            try:
                self.say(question.understand(text))
                self._present(question.take(text))
                return
            except PreviewError as error:
                self.say(f"not taken: {error}")

    def _choose(self, menu: Menu, answer: str) -> None:
        if answer:
            self._present(menu.take(answer_of(menu, answer)))
            return
        self.say(menu.title)
        for number, choice in enumerate(menu.choices, 1):
            now = " (now)" if choice.answer == menu.now else ""
            self.say(f"{number}: {choice.label}{now}. {choice.about}")
        self.say("type a number or a name; an empty line leaves it")
        for text in self._answers():
            try:
                taken = menu.take(answer_of(menu, text))
            except PreviewError as error:
                self.say(f"not taken: {error}")
                continue
            if not isinstance(taken, Menu):
                self._present(taken)
                return
            menu = taken
            self.say("; ".join(f"{c.label}: {c.about}" for c in menu.choices if c.answer == menu.now))

    def _answers(self) -> Iterator[str]:
        """Lines until an empty one."""
        while (line := self._next_line("answer> ")) is not None and line.strip():
            yield line.strip()

    def _figure(self) -> None:
        """Compute response and corners of what is set now, unless they are known."""
        desk = self.desk
        rate_hz = desk.snapshot.sample_rate_hz if desk.snapshot else 0.0
        wanted = desk.session, desk.before, rate_hz
        if wanted == self._figured:
            return
        self._figured = wanted
        desk.figures.now, desk.figures.before = (self._figures(session, rate_hz) for session in wanted[:2])

    def _figures(self, session: Session, rate_hz: float) -> Figures:
        try:
            return self._make_figures(job_of(session, rate_hz))
        except PreviewError as error:
            return Figures(problem=str(error))

    # ---- actions of this front end ----

    def do_help(self) -> None:
        """Read the actions out."""
        for line in help_lines(self.desk.keys):
            self.say(line)

    def do_palette(self) -> None:
        """Every action by its name."""
        self.say(", ".join(action.words for action in self.desk.keys.desk))

    def do_colours(self) -> str:
        """There are none."""
        return "the line mode has no colours"

    def do_pan_left(self) -> str:
        """There is nothing to move."""
        return "the line mode reads the circuit out whole: 'view circuit'"

    do_pan_right = do_pan_up = do_pan_down = do_pan_left

    def do_restart(self) -> str:
        """Start a muted circuit from rest, or another engine when this one has stopped."""
        desk = self.desk
        if not desk.stopped:
            if desk.snapshot is not None and desk.snapshot.fault is not None:
                desk.link.send(Recover())
                return "the circuit starts from rest"
            return "the engine is running"
        if self._restart is None:
            return "leave and open it again: this engine cannot be restarted from here"
        self._start_again(self._restart)
        return "the engine runs again; 'play' plays"

    def do_quit(self) -> None:
        """Leave."""
        self._left = True


def run_plain(
    session: Session,
    link: EngineLink,
    *,
    lines: TextIO,
    out: TextIO,
    restart: Restart | None = None,
    config: Path | None = None,
) -> Session:
    """Run the line mode until the person leaves; the session as it was left. The engine is closed when it returns."""
    desk = PlainDesk(session, link, lines=lines, out=out, restart=restart, config=config)
    if told := desk.desk.keeping.begin():
        desk.say(told)
    try:
        left = desk.run()
        desk.desk.keeping.end()
        return left
    finally:
        desk.desk.link.close()
