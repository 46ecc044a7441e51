"""What an action can answer with: a line, a question, a menu or a page. No screen in here.

The desk shows them as dialogs, the line mode as prompts and text; both carry out what is answered by ``take``.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

__all__ = ["Choice", "Menu", "Outcome", "Page", "Question"]


@dataclass(frozen=True, slots=True)
class Choice:
    """One row of a menu."""

    answer: str
    """What the row stands for."""
    label: str
    """Its name."""
    about: str = ""
    """What it is, in a line."""


@dataclass(frozen=True, slots=True)
class Question:
    """A value to be typed."""

    title: str
    """What is asked for."""
    about: str
    """A line that explains it."""
    now: str
    """The value in force."""
    understand: Callable[[str], str]
    """Text -> what it was understood as; raises PreviewError on what cannot be taken."""
    take: Callable[[str], Outcome]
    """Carry the answer out; raises PreviewError."""


@dataclass(frozen=True, slots=True)
class Menu:
    """Rows of which one is chosen."""

    title: str
    """What is chosen."""
    choices: Sequence[Choice]
    """The rows."""
    take: Callable[[str], Outcome]
    """Carry the choice out; raises PreviewError. A menu as its result is shown in place of this one."""
    now: str = ""
    """The answer in force; its row is marked first."""
    heads: str = ""
    """A line above the explanations; empty for none."""


@dataclass(frozen=True, slots=True)
class Page:
    """Text to read."""

    title: str
    """What it is about."""
    paragraphs: tuple[str, ...]
    """Its paragraphs."""


Outcome = str | Question | Menu | Page | None
"""What an action answers with: a line to show, something to ask or to read, or nothing."""
