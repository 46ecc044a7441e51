"""A record of a check: a line for each finished recording, kept as it comes, so that a check can be taken up again.

Each line is a JSON object with what the result hangs on (file, its size and time of change, a digest of circuit and
options) beside the result. What does not match is not used; a line that was cut off in the middle is passed over.
"""

from __future__ import annotations

import hashlib
import json
import os
from collections.abc import Mapping
from dataclasses import asdict
from pathlib import Path
from typing import Any

from preview import __version__
from preview.audio.files import reason
from preview.dsp.events import LimitEvent
from preview.engine.check.results import CheckPlan, FileCheck, LevelsRead, Margin, OpAmpCheck, TraceRead
from preview.errors import OutputFileError

__all__ = ["Record", "digest", "stamp"]

RECORD_FORMAT = 1


def digest(plan: CheckPlan) -> str:
    """Of all that the results hang on besides the recordings."""
    what = (
        RECORD_FORMAT,
        __version__,
        plan.session.netlist(),
        plan.session.quality,
        plan.session.full_scale,
        plan.full_scale,
        plan.per_unit,
        plan.log,
        plan.settled,
        plan.margin,
    )
    return hashlib.sha256(repr(what).encode()).hexdigest()[:16]


class Record:
    """Results in a file, found again by recording.

    Parameters
    ----------
    path : Path
        The file; made if it is not there, continued if it is.
    plan : CheckPlan
        What the recordings are put through.

    Raises
    ------
    OutputFileError
        It cannot be read or written, or is something else.
    """

    def __init__(self, path: Path, plan: CheckPlan) -> None:
        self.path = path
        """The file."""
        self._digest = digest(plan)
        self._found: dict[str, tuple[list[int], dict[str, Any]]] = {}
        try:
            self._file = open(path, "ab+")  # noqa: SIM115 - closed by close()
            self._file.seek(0)
            self._read()
        except OutputFileError:
            raise
        except OSError as error:
            raise OutputFileError(f"{path}: {reason(error)}") from error

    def _read(self) -> None:
        line = b"\n"
        for number, line in enumerate(self._file):
            try:
                entry = json.loads(line)
                known, where = entry["digest"], (entry["file"], (entry["stamp"], entry["result"]))
            except (ValueError, KeyError, TypeError):
                if number == 0 and line.endswith(b"\n"):
                    self._file.close()
                    raise OutputFileError(
                        f"{self.path}: is not a record of a check", "give another name"
                    ) from None
                continue
            if known == self._digest:
                self._found[where[0]] = where[1]
        if not line.endswith(b"\n"):
            self._file.write(b"\n")

    def result(self, path: Path) -> FileCheck | None:
        """The result of a recording that has not changed since; None where there is none."""
        entry = self._found.get(os.path.abspath(path))
        if entry is None or entry[0] != stamp(path):
            return None
        try:
            return _revived(entry[1] | {"path": str(path)})
        except (KeyError, TypeError):
            return None

    def keep(self, began: list[int] | None, found: FileCheck) -> None:
        """Add a result of a file whose stamp was this when it was begun; it is on the disk when this returns."""
        if began is None:
            return
        entry = {
            "digest": self._digest,
            "file": os.path.abspath(found.path),
            "stamp": began,
            "result": asdict(found),
        }
        try:
            self._file.write(json.dumps(entry).encode() + b"\n")
            self._file.flush()
            os.fsync(self._file.fileno())
        except OSError as error:
            raise OutputFileError(f"{self.path}: {reason(error)}") from error

    def close(self) -> None:
        """Let go of the file."""
        self._file.close()


def stamp(path: Path) -> list[int] | None:
    """Size and time of change; None where the file is not there."""
    try:
        stat = os.stat(path)
    except (OSError, ValueError):
        return None
    return [stat.st_size, stat.st_mtime_ns]


def _revived(result: Mapping[str, Any]) -> FileCheck:
    """A result as it was before it became JSON."""
    trace = {k: _tuples(v) for k, v in result["trace"].items()}
    return FileCheck(
        **{
            **result,
            "input": LevelsRead(**result["input"]),
            "output": LevelsRead(**result["output"]),
            "opamps": tuple(OpAmpCheck(**o) for o in result["opamps"]),
            "events": tuple(LimitEvent(**e) for e in result["events"]),
            "margin": None if result["margin"] is None else Margin(**result["margin"]),
            "trace": TraceRead(**trace),
            "warnings": tuple(result["warnings"]),
        }
    )


def _tuples(value: Any) -> Any:
    return tuple(_tuples(one) for one in value) if isinstance(value, list) else value
