"""Sessions as files: everything on the desk in one TOML file, circuits included, so that it opens on any machine.

::

    format = 1                        what this version writes; a higher number is refused

    [saved]
    letter = "A"                      the candidate that is heard
    position_frame = 48000            where it was; region = [first, after the last] if there was one
    volume_db = -20.0                 bypass and match likewise

    [[saved.candidates]]
    letter = "A"
    name = "as drawn"

    [saved.candidates.session]        the fields of ``preview.session.Session``, SI base units
    audio = "/home/me/bells.flac"     or a table ``stimulus``, or ``live = true``

    [saved.candidates.session.stage]  the circuit as it was set, its parts as tables

A key that is missing has the value of a new session. A table with ``is`` names the class that it stands for.
"""

from __future__ import annotations

import contextlib
import os
import secrets
import tomllib
from dataclasses import dataclass
from pathlib import Path

from preview.engine.plain import from_plain, to_plain
from preview.engine.tomltext import toml_text
from preview.errors import PreviewError, SessionFileError, printable
from preview.session import Session

__all__ = ["ENDING", "Saved", "SavedCandidate", "load", "save"]

ENDING = ".session.toml"
"""Ending of a session's name."""
FORMAT = 1
_BYTES_MAX = 16 << 20
_LEFT_OUT = frozenset({"expects", "notes"})


@dataclass(frozen=True, slots=True)
class SavedCandidate:
    """One candidate."""

    letter: str
    """A, B, C ..."""
    session: Session
    """What is heard, through what, at which levels."""
    name: str = ""
    """What the person calls it."""


@dataclass(frozen=True, slots=True)
class Saved:
    """Everything on the desk."""

    candidates: tuple[SavedCandidate, ...]
    """Every candidate; at least one."""
    letter: str = "A"
    """The one that is heard."""
    position_frame: int = 0
    """Frame of the recording that was heard."""
    region: tuple[int, int] | None = None
    """Loop region: first frame and frame after the last."""
    volume_db: float = -20.0
    """Listening volume [dB]."""
    bypass: bool = False
    """Whether the input was heard."""
    match: bool = False
    """Whether candidates were heard at matched loudness."""

    @property
    def session(self) -> Session:
        """The session of the candidate that is heard."""
        return next(one.session for one in self.candidates if one.letter == self.letter)


def save(path: Path, saved: Saved) -> None:
    """Write a session; a file that is there stays whole until the new one is safe on the disk.

    Raises
    ------
    SessionFileError
        It cannot be written.
    """
    text = toml_text({"format": FORMAT, "saved": to_plain(saved, _LEFT_OUT)})
    target = Path(os.path.realpath(path))
    beside = target.with_name(f".{target.name[:100]}.{secrets.token_hex(4)}.part")
    try:
        with open(beside, "x", encoding="utf-8", newline="\n") as file:
            file.write(text)
            file.flush()
            os.fsync(file.fileno())
        os.replace(beside, target)
        _sync_folder(target.parent)
    except (OSError, UnicodeEncodeError) as error:  # the latter: a recording whose name is no text
        with contextlib.suppress(OSError):
            beside.unlink(missing_ok=True)
        reason = error.strerror if isinstance(error, OSError) else "a name in it is not text"
        raise SessionFileError(f"{path}: cannot be written: {reason}") from error


def load(path: Path) -> Saved:
    """Read a session.

    Raises
    ------
    SessionFileError
        It cannot be read, or is no session; the message says where.
    CircuitError
        One of its circuits cannot be computed.
    """
    try:
        with open(path, "rb") as file:
            data = file.read(_BYTES_MAX + 1)
        if len(data) > _BYTES_MAX:
            raise SessionFileError(f"{path}: larger than {_BYTES_MAX >> 20} MB, not a session")
        table = tomllib.loads(data.decode("utf-8"))
    except OSError as error:
        raise SessionFileError(f"{path}: cannot be read: {error.strerror or error}") from error
    except (UnicodeDecodeError, tomllib.TOMLDecodeError) as error:
        raise SessionFileError(f"{path}: not TOML: {printable(str(error))}") from error
    number = table.get("format")
    if not isinstance(number, int) or not 1 <= number <= FORMAT:
        raise SessionFileError(
            f"{path}: format = {printable(str(number))}", f"this version reads sessions of format {FORMAT}"
        )
    try:
        saved: Saved = from_plain(Saved, table.get("saved", {}), "saved")
    except SessionFileError:
        raise
    except (PreviewError, TypeError, ValueError) as error:
        raise SessionFileError(f"{path}: {error}") from error
    letters = [one.letter for one in saved.candidates]
    if saved.letter not in letters or len(set(letters)) < len(letters):
        raise SessionFileError(f"{path}: no single candidate {printable(saved.letter)} among {letters}")
    for candidate in saved.candidates:
        candidate.session.netlist()
    return saved


def _sync_folder(folder: Path) -> None:
    """Have the new name on the disk too, where the system can do that."""
    if hasattr(os, "O_DIRECTORY"):
        number = os.open(folder, os.O_RDONLY | os.O_DIRECTORY)
        try:
            os.fsync(number)
        finally:
            os.close(number)
