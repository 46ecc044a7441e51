"""Where the audio libraries write: a file, as on stdout and stderr they would wreck the desk."""

from __future__ import annotations

import os
from pathlib import Path

import platformdirs

__all__ = ["write_to_log"]

LOG_BYTES_MAX = 1 << 20


def write_to_log(log: Path | None) -> None:
    """Point stdout and stderr of this process at a file; None for the person's log folder."""
    try:
        if log is None:
            folder = platformdirs.user_log_path("preview", appauthor=False, ensure_exists=True)
            log = folder / "engine.log"
        too_long = log.exists() and log.stat().st_size > LOG_BYTES_MAX
        flags = os.O_WRONLY | os.O_CREAT | (os.O_TRUNC if too_long else os.O_APPEND)
        target = os.open(log, flags, 0o600)
    except OSError:
        target = os.open(os.devnull, os.O_WRONLY)
    for stream in (1, 2):
        os.dup2(target, stream)
    os.close(target)
