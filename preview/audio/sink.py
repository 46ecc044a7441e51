"""Where samples go: a file that appears only when it is whole, or a WAV stream on standard output."""

from __future__ import annotations

import os
import secrets
import stat
from collections.abc import Iterable
from pathlib import Path
from types import TracebackType
from typing import BinaryIO, Self

import numpy as np
import soundfile
from numpy.typing import NDArray

from preview.audio.files import CHANNELS_MAX, reason
from preview.audio.quantise import Quantiser
from preview.audio.wavefile import DEPTHS, Depth, sample_bytes
from preview.audio.writers import (
    NO_COMMENT_FORMATS,
    LibraryWriter,
    PipeWriter,
    TextWriter,
    WaveWriter,
    Writer,
)
from preview.errors import OutputFileError, UsageError

__all__ = ["ENDINGS", "Depth", "FileSink", "check_output", "holds_volts", "keeps_comment"]

_FORMATS = {
    ".wav": "WAV",
    ".rf64": "RF64",
    ".w64": "W64",
    ".aiff": "AIFF",
    ".aif": "AIFF",
    ".caf": "CAF",
    ".au": "AU",
    ".flac": "FLAC",
    ".csv": "CSV",
    ".tsv": "TSV",
}
TEXTS = {"CSV": ",", "TSV": "\t"}
"""Logs of numbers, and what stands between their cells."""
ENDINGS = tuple(ending for ending, kind in _FORMATS.items() if kind not in TEXTS)
"""Endings of sound files that can be written."""

_FLAC_CHANNELS_MAX = 8
_SIZE_32_FORMATS = ("AIFF", "AU")
_SIZE_32_MAX = (1 << 32) - 65_536


def keeps_comment(path: Path) -> bool:
    """Whether the kind of file that the name's ending asks for has room for a comment."""
    return _FORMATS.get(path.suffix.lower()) not in NO_COMMENT_FORMATS


def holds_volts(path: Path) -> bool:
    """Whether what the name's ending asks for holds plain volts: a sample of 1.0 is 1 V."""
    return _FORMATS.get(path.suffix.lower()) in TEXTS


def check_output(
    path: Path, inputs: Iterable[Path] = (), *, depth: Depth = "float", channels: int = 1
) -> None:
    """Refuse, before anything is computed, an output that cannot come about.

    Parameters
    ----------
    path : Path
        The output; ``-`` is standard output.
    inputs : iterable of Path
        Files that are read; the output must be none of them.

    Raises
    ------
    UsageError
        The ending or the depth is not one that can be written.
    OutputFileError
        The place cannot be written to, or is an input.
    """
    if depth not in DEPTHS:
        raise UsageError(f"depth {depth}", f"it is one of {', '.join(DEPTHS)}")
    if os.fspath(path) == "-":
        return
    kind = _FORMATS.get(path.suffix.lower())
    if kind is None:
        found = f"the ending {path.suffix}" if path.suffix else "a name without ending"
        raise UsageError(f"{path}: {found} does not say what to write", f"write one of {' '.join(_FORMATS)}")
    if kind in TEXTS and depth != "float":
        raise UsageError(f"{path}: a log holds numbers, not samples of {depth} bits", "leave --depth out")
    if kind == "FLAC" and depth == "float":
        raise UsageError(f"{path}: FLAC holds no float samples", "add --depth 16 or --depth 24")
    if kind == "FLAC" and channels > _FLAC_CHANNELS_MAX:
        raise UsageError(
            f"{path}: FLAC holds at most {_FLAC_CHANNELS_MAX} channels, not {channels}", "write .wav"
        )
    try:
        _check_place(path, inputs)
    except OutputFileError:
        raise
    except OSError as error:
        raise OutputFileError(f"{path}: {reason(error)}") from error
    except ValueError as error:  # a NUL in the name
        raise OutputFileError(f"{path}: no file can have this name") from error


def _check_place(path: Path, inputs: Iterable[Path]) -> None:
    target = Path(os.path.realpath(path))
    if not target.parent.is_dir():
        raise OutputFileError(f"{path}: there is no folder {target.parent}")
    if target.exists():
        mode = target.stat().st_mode
        if stat.S_ISDIR(mode):
            raise OutputFileError(f"{path}: is a folder")
        if not stat.S_ISREG(mode):
            raise OutputFileError(
                f"{path}: is a pipe or device, not a file", "give - to write to standard output"
            )
        if not os.access(target, os.W_OK):
            raise OutputFileError(f"{path}: the file there is write-protected")
        for source in inputs:
            if os.fspath(source) != "-" and source.exists() and source.samefile(target):
                raise OutputFileError(f"{path}: is also the input", "give the output another name")
    if not os.access(target.parent, os.W_OK | os.X_OK):
        raise OutputFileError(f"{path}: no permission to write in {target.parent}")


class FileSink:
    """A file beside its later place, under a hidden name, moved there by ``commit``.

    As a context manager it commits on a clean exit and aborts on any exception, an interrupt included.

    Parameters
    ----------
    path : Path
        The name's ending says what is written; ``-`` is standard output, as WAV of unknown length.
    sample_rate_hz : float
        Sample rate [Hz].
    channels : int
        Number of channels.
    depth : {"16", "24", "float"}
        PCM without dither, values beyond full scale clipped and counted; or 32-bit float.
    comment : str
        Written where the kind of file keeps one (not W64 and AU).
    stdout : BinaryIO, optional
        Another stream in place of standard output.

    Raises
    ------
    UsageError, OutputFileError
        As ``check_output``.
    """

    def __init__(
        self,
        path: Path,
        *,
        sample_rate_hz: float,
        channels: int,
        depth: Depth = "float",
        comment: str = "",
        stdout: BinaryIO | None = None,
    ) -> None:
        if not 1 <= channels <= CHANNELS_MAX:
            raise UsageError(f"{channels} channels", f"1 to {CHANNELS_MAX} can be written")
        check_output(path, depth=depth, channels=channels)
        self.path = path
        self.channels = channels
        self.frames_written = 0
        """Frames taken so far."""
        self._quantiser = Quantiser(depth)
        self._bytes_a_frame = channels * sample_bytes(depth)
        self._temporary: Path | None = None
        self._target = path
        self._done = False
        self._kind = "WAV" if os.fspath(path) == "-" else _FORMATS[path.suffix.lower()]
        rate = round(sample_rate_hz)
        if rate != sample_rate_hz and self._kind not in TEXTS:
            raise UsageError(
                f"{path}: {sample_rate_hz:g} Hz; sound files hold whole sample rates", "write .csv or .tsv"
            )
        self._writer: Writer
        if os.fspath(path) == "-":
            self._writer = PipeWriter(stdout, self._quantiser, rate, channels, comment)
            return
        self._target = Path(os.path.realpath(path))
        try:
            self._temporary = _create_beside(self._target)
            if self._kind in TEXTS:
                self._writer = TextWriter(
                    self._temporary, sample_rate_hz, channels, comment, TEXTS[self._kind]
                )
            elif self._kind in ("WAV", "RF64"):
                rf64 = True if self._kind == "RF64" else None
                self._writer = WaveWriter(self._temporary, self._quantiser, rate, channels, comment, rf64)
            else:
                self._writer = LibraryWriter(
                    self._temporary, self._quantiser, rate, channels, comment, self._kind
                )
        except BaseException as error:
            ours = self._translated(error)
            self._remove()
            raise ours  # noqa: B904 - the cause is set

    @property
    def over_count(self) -> int:
        """Samples beyond full scale that were clipped."""
        return self._quantiser.over_count

    @property
    def non_finite_count(self) -> int:
        """Samples that were not finite and were written as 0."""
        return self._quantiser.non_finite_count

    def write(self, samples: NDArray[np.float64]) -> None:
        """Append samples, shape (n, channels), full scale 1.0; raises OutputFileError."""
        try:
            total = (self.frames_written + len(samples)) * self._bytes_a_frame
            if self._kind in _SIZE_32_FORMATS and total > _SIZE_32_MAX:
                raise OutputFileError(f"{self.path}: {self._kind} ends at 4 GB", "write .wav, .w64 or .caf")
            self._writer.write(samples)
        except BaseException as error:
            raise self._translated(error)  # noqa: B904 - the cause is set
        self.frames_written += len(samples)

    @property
    def hidden(self) -> str:
        """Where it stands until it is whole; empty for standard output, and once it is in its place."""
        return "" if self._temporary is None else str(self._temporary)

    def bring_up(self) -> bool:
        """Make what is written so far readable where it stands; whether this kind of file can be."""
        try:
            return self._writer.bring_up()
        except BaseException as error:
            raise self._translated(error)  # noqa: B904 - the cause is set

    def commit(self) -> None:
        """Finish the file and put it in its place; raises OutputFileError and then leaves nothing behind."""
        if self._done:
            return
        try:
            if self._kind == "FLAC" and not self.frames_written:
                raise OutputFileError(f"{self.path}: there are no samples, and FLAC cannot be empty")
            self._writer.finish()
            if self._temporary is not None:
                os.replace(self._temporary, self._target)
                self._temporary = None
        except BaseException as error:
            ours = self._translated(error)
            self.abort()
            raise ours  # noqa: B904 - the cause is set
        self._done = True

    def abort(self) -> None:
        """Leave nothing behind; what stood at the place before stays."""
        if self._done:
            return
        self._done = True
        self._writer.close()
        self._remove()

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        if error is None:
            self.commit()
        else:
            self.abort()

    def _remove(self) -> None:
        if self._temporary is not None:
            self._temporary.unlink(missing_ok=True)
            self._temporary = None

    def _translated(self, error: BaseException) -> BaseException:
        """The error in our words; to be called while the file is still there to be asked for the cause."""
        name = "standard output" if os.fspath(self.path) == "-" else str(self.path)
        if isinstance(error, soundfile.SoundFileError):
            ours = OutputFileError(f"{name}: {_why_not(self._temporary) or f'cannot be written: {error}'}")
        elif isinstance(error, OSError) and not isinstance(error, OutputFileError):
            ours = OutputFileError(f"{name}: {reason(error)}")
        else:
            return error
        ours.__cause__ = error
        return ours


def _create_beside(target: Path) -> Path:
    """A new hidden file in the same folder, with the permissions that any new file gets."""
    stem = target.name[:120]
    while True:
        path = target.with_name(f".{stem}.{secrets.token_hex(4)}.part")
        try:
            os.close(os.open(path, os.O_CREAT | os.O_EXCL | os.O_WRONLY, 0o666))
        except FileExistsError:
            continue
        return path


def _why_not(path: Path | None) -> str:
    """Why nothing more can be written to the file: the library does not say, the system does."""
    if path is None:
        return ""
    try:
        with open(path, "ab", buffering=0) as file:
            file.write(bytes(1 << 16))
            file.write(bytes(1 << 16))
    except OSError as error:
        return reason(error)
    return ""
