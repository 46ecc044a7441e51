"""The demo's recordings, which lie beside the program in its source tree."""

from __future__ import annotations

import tomllib
from dataclasses import dataclass
from pathlib import Path

import preview
from preview.errors import AudioFileError

__all__ = ["DemoRecording", "demo_recording"]

FIRST = "announcement"


@dataclass(frozen=True, slots=True)
class DemoRecording:
    """One of the demo's recordings."""

    path: Path
    """The file."""
    full_scale: str
    """The volts of full scale, as text; empty where not stated."""
    stage: str
    """The stage that suits it; empty where not stated."""


def demo_recording(folder: Path | None = None) -> DemoRecording:
    """The announcement, or the first recording there is.

    Parameters
    ----------
    folder : Path, optional
        Folder with ``ORIGIN.toml``; the one beside the package where not given.

    Raises
    ------
    AudioFileError
        The demo is not there.
    """
    if folder is None:
        folder = Path(preview.__file__).resolve().parent.parent / "demo_audio"
    try:
        listed = tomllib.loads((folder / "ORIGIN.toml").read_text(encoding="utf-8"))["file"]
        chosen = next((item for item in listed if FIRST in item["file"]), listed[0])
        return DemoRecording(
            path=folder / chosen["file"],
            full_scale=str(chosen.get("full_scale", "")),
            stage=str(chosen.get("suggested_stage", "")),
        )
    except (OSError, ValueError, LookupError, TypeError) as error:
        raise AudioFileError(
            "the demo's recordings are not beside the program", "name a recording: preview listen AUDIO"
        ) from error
