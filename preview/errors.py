"""Every error that Preview shows to a person, and the text cleaning they share.

Family tree::

    PreviewError
    +-- UsageError (ValueError)            exit 2: an option's text is not understood
    |   +-- NotationError                  a value, level or series that cannot be read
    +-- AudioFileError (OSError)           exit 3: input or output file
    |   +-- OutputFileError                the place to write to
    +-- SessionFileError (ValueError)      exit 3: a session file that cannot be read or written
    +-- DeviceError (RuntimeError)         exit 4: no audio device or library
    +-- CircuitError (ValueError)          exit 5: the circuit cannot be computed
        +-- StageFileError                 a stage file that cannot be read as one
        +-- OpAmpFileError                 an op-amp file that cannot be read as one
        +-- UnknownNameError (LookupError) no such stage, part or op-amp
        +-- PartValueError                 a part value that no such part can have
"""

from __future__ import annotations

import os
import unicodedata

__all__ = [
    "AudioFileError",
    "CircuitError",
    "DeviceError",
    "NotationError",
    "OpAmpFileError",
    "OutputFileError",
    "PartValueError",
    "PreviewError",
    "SessionFileError",
    "StageFileError",
    "UnknownNameError",
    "UsageError",
    "debugging",
    "printable",
]


class PreviewError(Exception):
    """An error with a plain message and, where there is one, a cure.

    Parameters
    ----------
    message : str
        Where, what was found, what is allowed.
    hint : str, optional
        What to do about it, in a few words.
    """

    exit_code: int = 1

    def __init__(self, message: str, hint: str = "") -> None:
        super().__init__(message)
        self.message = printable(message)
        self.hint = printable(hint)

    def __str__(self) -> str:
        return f"{self.message} ({self.hint})" if self.hint else self.message


class UsageError(PreviewError, ValueError):
    """An option or its text is not understood."""

    exit_code = 2


class NotationError(UsageError):
    """A value, level or series name that cannot be read without guessing."""


class AudioFileError(PreviewError, OSError):
    """An audio file that cannot be read."""

    exit_code = 3


class OutputFileError(AudioFileError):
    """A result that cannot be written."""


class SessionFileError(PreviewError, ValueError):
    """A session file that cannot be read as one, or not be written."""

    exit_code = 3


class DeviceError(PreviewError, RuntimeError):
    """No audio device, no audio library, or a device that failed."""

    exit_code = 4


class CircuitError(PreviewError, ValueError):
    """A circuit that cannot be computed."""

    exit_code = 5


class StageFileError(CircuitError):
    """A stage file that cannot be read as one."""


class OpAmpFileError(CircuitError):
    """An op-amp file that cannot be read as one."""


class UnknownNameError(CircuitError, LookupError):
    """No such stage, part or op-amp."""


class PartValueError(CircuitError):
    """A part value that no such part can have."""


def debugging() -> bool:
    """Whether a fault inside the program shall be seen with all it has: ``PREVIEW_DEBUG=1``."""
    return os.environ.get("PREVIEW_DEBUG") == "1"


def printable(text: str) -> str:
    """Text without control, format and surrogate characters, for a terminal; each becomes ``?``."""
    return "".join(
        "?" if unicodedata.category(ch) in ("Cc", "Cf", "Cs", "Co", "Zl", "Zp") else ch for ch in text
    )
