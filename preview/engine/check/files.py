"""Which files a check is about: names, folders with all that is in them, patterns."""

from __future__ import annotations

import glob
import os
from collections.abc import Iterator, Sequence
from pathlib import Path

from preview.audio.logs import LOG_ENDINGS
from preview.errors import AudioFileError, UsageError

__all__ = ["SOUND_ENDINGS", "signal_files"]

SOUND_ENDINGS = (
    ".wav", ".wave", ".rf64", ".w64", ".aiff", ".aif", ".aifc", ".caf", ".au", ".snd", ".flac", ".mp3", ".ogg",
    ".oga", ".opus",
)  # fmt: skip
"""Endings of sound files that are taken from a folder; a file that is named is taken whatever its name."""


def signal_files(names: Sequence[str]) -> list[Path]:
    """Every file that the names stand for, each once, in order; those of a folder by their names.

    Raises
    ------
    UsageError
        Standard input, which cannot be read twice.
    AudioFileError
        A pattern or a folder in which nothing is found.
    """
    found: dict[Path, None] = {}
    for name in names:
        if name == "-":
            raise UsageError(
                "check reads a recording more than once, and standard input only comes once",
                "give it as a file",
            )
        path = Path(name)
        if path.is_dir():
            inside = list(_inside(path))
            if not inside:
                raise AudioFileError(f"{name}: no recordings and no logs in this folder")
        elif not os.path.lexists(path) and glob.has_magic(name):
            inside = [
                one
                for match in sorted(glob.glob(name, recursive=True))
                for one in (_inside(Path(match)) if os.path.isdir(match) else [Path(match)])
            ]
            if not inside:
                raise AudioFileError(f"{name}: no file has such a name")
        else:
            inside = [path]
        found |= dict.fromkeys(inside)
    return list(found)


def _inside(folder: Path) -> Iterator[Path]:
    """Recordings and logs in a folder and those in it; hidden ones are left out, links to folders not followed."""
    for at, folders, files in os.walk(folder):
        folders[:] = sorted(f for f in folders if not f.startswith("."))
        for name in sorted(files):
            if not name.startswith(".") and name.lower().endswith((*SOUND_ENDINGS, *LOG_ENDINGS)):
                yield Path(at) / name
