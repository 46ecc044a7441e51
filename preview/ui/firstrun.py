"""Whether the hearing caution was seen on this account: an empty file in the person's config folder."""

from __future__ import annotations

from pathlib import Path

import platformdirs

__all__ = ["HEARING", "caution_seen", "config_folder", "remember_caution"]

_MARK = "hearing-caution-seen"
HEARING = (
    "The listening volume starts at -20 dB. Put headphones on after the sound has started, and raise the "
    "volume with + in small steps.",
    "A stage with gain, or a part value that changes, can make the signal ten times larger at once.",
    "The volume does not touch the volts: meters and clipping stay as in the circuit.",
)
"""The hearing caution."""


def config_folder() -> Path:
    """The person's config folder for Preview."""
    return Path(platformdirs.user_config_dir("preview", appauthor=False))


def caution_seen(folder: Path) -> bool:
    """Whether the caution was read and accepted before."""
    try:
        return (folder / _MARK).exists()
    except OSError:
        return False


def remember_caution(folder: Path) -> None:
    """Note that it was accepted; where the folder cannot be written it is simply shown again."""
    try:
        folder.mkdir(parents=True, exist_ok=True)
        (folder / _MARK).touch()
    except OSError:
        return
