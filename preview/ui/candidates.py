"""Settings that are kept as A, B, C ..., heard at once, and compared. No screen in here.

Each candidate has its stage, parts, op-amp types, supply, source and load, and a history of its own. Full scale,
quality and what plays are common to all.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field, replace
from string import ascii_uppercase
from typing import TYPE_CHECKING

from preview.circuit.netlist import Netlist
from preview.engine.messages import (
    CandidateReading,
    Command,
    DropCandidate,
    KeepCandidate,
    ListenNull,
    SelectCandidate,
    SetMatch,
    Snapshot,
)
from preview.engine.sessionfile import Saved
from preview.errors import PreviewError, UsageError
from preview.session import Session
from preview.ui.asking import Choice, Menu, Outcome, Page, Question
from preview.ui.changes import common_changes, with_input_of
from preview.ui.differences import differences
from preview.ui.history import History

if TYPE_CHECKING:
    from preview.ui.desk import Desk

__all__ = ["Candidates", "Kept"]

_LONGEST_NAME = 40
_TRUST_S = 0.4
"""For so long after a key the desk's own wish is shown, not a snapshot that may be older [s]."""


@dataclass(slots=True)
class Kept:
    """One candidate."""

    session: Session
    """As it was when it was heard last; the one that is heard now is the desk's session."""
    history: History = field(default_factory=History)
    """What can be taken back in it."""
    name: str = ""
    """A name that a person gave it."""


def _hearing(letter: str) -> Callable[[Candidates], str]:
    def hear(candidates: Candidates) -> str:
        return candidates.hear(letter)

    hear.__doc__ = f"Hear candidate {letter}."
    return hear


class Candidates:
    """The candidates of the desk."""

    def __init__(self, desk: Desk) -> None:
        self._desk = desk
        self.letter = "A"
        """The one that is heard."""
        self.partner: str | None = None
        """The one that was heard before it."""
        self.matched = False
        """Whether they are heard at matched loudness."""
        self.null: tuple[str, str] | None = None
        """The first minus the second is heard."""
        self._kept = {"A": Kept(desk.session, desk.history)}
        self._asked_s = -1e9

    # ---- what there is ----

    @property
    def letters(self) -> tuple[str, ...]:
        """Every letter in use, in order."""
        return tuple(sorted(self._kept))

    def session(self, letter: str) -> Session:
        """A candidate's setting."""
        return self._desk.session if letter == self.letter else self._kept[letter].session

    def name(self, letter: str) -> str:
        """The name that a person gave it; empty for none."""
        return self._kept[letter].name

    def reading(self, letter: str) -> CandidateReading | None:
        """What the engine says of it; None where it has said nothing yet."""
        snapshot = self._desk.snapshot
        return next((r for r in snapshot.candidates if r.letter == letter), None) if snapshot else None

    def different(self, letter: str) -> list[str]:
        """How the one that is heard differs from that one."""
        return differences(self.session(letter), self._desk.session)

    def take(self, snapshot: Snapshot) -> None:
        """The newest word of the engine."""
        if self._desk.now_s() - self._asked_s > _TRUST_S:
            self.matched, self.null = snapshot.match, snapshot.null

    def others(self) -> tuple[tuple[str, Netlist], ...]:
        """The circuits of those that are not heard now, by letter."""
        return tuple(
            (letter, self.session(letter).netlist()) for letter in self.letters if letter != self.letter
        )

    def restore(self, saved: Saved) -> None:
        """The candidates that were saved in place of those there are; what is common to all is brought along."""
        desk = self._desk
        gone = [letter for letter in self._kept if letter not in {one.letter for one in saved.candidates}]
        for command in common_changes(desk.session, saved.session):
            desk.link.send(command)
        for one in saved.candidates:
            self._send(KeepCandidate(one.letter, one.session.netlist()))
        self._kept = {one.letter: Kept(one.session, History(), one.name) for one in saved.candidates}
        self.letter, self.partner, self.null = saved.letter, None, None
        self._send(SelectCandidate(saved.letter))
        for letter in gone:
            self._send(DropCandidate(letter))
        if saved.match != self.matched:
            self.matched = saved.match
            self._send(SetMatch(saved.match))
        input_now = desk.session
        desk.adopt(with_input_of(saved.session, input_now), self._kept[saved.letter].history)

    def _send(self, command: Command) -> None:
        self._asked_s = self._desk.now_s()
        self._desk.link.send(command)

    # ---- keeping and hearing ----

    def keep(self, letter: str) -> None:
        """Put a copy of what is heard under that letter."""
        session = self._desk.session
        self._send(KeepCandidate(letter, session.netlist()))
        if letter in self._kept:
            kept = self._kept[letter]
            kept.history.note(kept.session)
            kept.session = session
        else:
            self._kept[letter] = Kept(session)

    def do_candidate_keep(self) -> str:
        """Keep what is heard and go on in a copy of it."""
        free = next((letter for letter in ascii_uppercase if letter not in self._kept), None)
        if free is None:
            return "there are 26 candidates; drop one first"
        before = self.letter
        self.keep(free)
        self.hear(free)
        keys = self._desk.keys
        return f"{before} is kept; you go on in {free}. {keys.shown('candidate_flip')} goes from one to the other"

    def hear(self, letter: str) -> str:
        """Hear this candidate."""
        if letter not in self._kept:
            return f"there is no candidate {letter}; {self._desk.keys.shown('candidate_keep')} keeps what is heard"
        if letter != self.letter:
            desk = self._desk
            leaving = self._kept[self.letter]
            leaving.session, leaving.history = desk.session, desk.history
            self.partner, self.letter = self.letter, letter
            coming = self._kept[letter]
            now = desk.session
            session = replace(
                coming.session,
                full_scale=now.full_scale,
                quality=now.quality,
                at_end=now.at_end,
                notes=now.notes,
            )
            desk.adopt(with_input_of(session, now), coming.history)
        self.null = None
        self._send(SelectCandidate(letter))
        return f"heard: {self.title(letter)}"

    do_hear_a, do_hear_b, do_hear_c = (_hearing(letter) for letter in "ABC")
    do_hear_d, do_hear_e, do_hear_f = (_hearing(letter) for letter in "DEF")

    def title(self, letter: str) -> str:
        """Letter and name."""
        name = self.name(letter)
        return f"{letter}, {name}" if name else letter

    def do_candidate_flip(self) -> str:
        """Hear the candidate that was heard before this one."""
        other = self.partner if self.partner in self._kept else self._next()
        return self._alone() if other is None else self.hear(other)

    def do_candidate_next(self) -> str:
        """Hear the next candidate."""
        other = self._next()
        return self._alone() if other is None else self.hear(other)

    def _next(self) -> str | None:
        letters = self.letters
        return letters[(letters.index(self.letter) + 1) % len(letters)] if len(letters) > 1 else None

    def _alone(self) -> str:
        return f"there is only one candidate; {self._desk.keys.shown('candidate_keep')} keeps it and begins another"

    # ---- comparing ----

    def do_match(self) -> str:
        """Matched loudness, on or off."""
        self.matched = not self.matched
        self._send(SetMatch(self.matched))
        if self.matched:
            return "candidates at the loudness of the quietest one (BS.1770); the volts stay"
        return "each candidate as loud as it is"

    def do_null(self) -> str:
        """Hear this candidate minus the other one, and back."""
        if self.null is not None:
            self.null = None
            self._send(ListenNull(None))
            return f"heard: {self.title(self.letter)}"
        other = self.partner if self.partner in self._kept else self._next()
        if other is None or other == self.letter:
            return self._alone()
        self.null = (self.letter, other)
        self._send(ListenNull(self.null))
        return f"heard: {self.letter} minus {other}, what is left is their difference"

    def do_candidate_differences(self) -> Outcome:
        """List how this candidate differs from another one."""
        others = [letter for letter in self.letters if letter != self.letter]
        if not others:
            return self._alone()

        def page(letter: str) -> Page:
            lines = self.different(letter) or ["nothing: they are the same"]
            return Page(f"From {self.title(letter)} to {self.title(self.letter)}", tuple(lines))

        return page(others[0]) if len(others) == 1 else self._menu("Compare with", page)

    # ---- looking after them ----

    def _menu(self, title: str, take: Callable[[str], Outcome], *, heard: bool = False) -> Menu:
        letters = [letter for letter in self.letters if heard or letter != self.letter]
        return Menu(
            title, [Choice(letter, self.title(letter), self.summary(letter)) for letter in letters], take
        )

    def summary(self, letter: str) -> str:
        """How a candidate differs from the one that is heard, in a line."""
        if letter == self.letter:
            return "heard"
        return "; ".join(differences(self._desk.session, self.session(letter))) or "the same as what is heard"

    def do_candidate_choose(self) -> Menu:
        """Choose the candidate that is heard from a list."""
        menu = self._menu("Hear", self.hear, heard=True)
        return replace(menu, now=self.letter)

    def do_candidate_copy(self) -> Outcome:
        """Put what is heard in the place of another candidate."""
        if len(self._kept) == 1:
            return self._alone()

        def copied(letter: str) -> str:
            self.keep(letter)
            return f"{letter} is now a copy of {self.letter}"

        return self._menu(f"Copy {self.letter} over", copied)

    def do_candidate_rename(self) -> Question:
        """Give the candidate that is heard a name."""
        letter = self.letter

        def understand(text: str) -> str:
            name = " ".join(text.split())
            if len(name) > _LONGEST_NAME:
                raise UsageError(f"{len(name)} characters", f"{_LONGEST_NAME} at most")
            return f"{letter}, {name}"

        def take(text: str) -> str:
            said = understand(text)
            self._kept[letter].name = " ".join(text.split())
            return said

        return Question(f"Name of {letter}", "A word or two", self.name(letter) or "none", understand, take)

    def do_candidate_drop(self) -> Outcome:
        """Forget another candidate."""
        if len(self._kept) == 1:
            return self._alone()

        def dropped(letter: str) -> str:
            if letter == self.letter:
                raise PreviewError(f"{letter} is heard", "hear another one first")
            del self._kept[letter]
            if self.partner == letter:
                self.partner = None
            self._send(DropCandidate(letter))
            return f"{letter} is dropped"

        return self._menu("Drop", dropped)
