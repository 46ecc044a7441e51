"""The ways of writing samples to a file or a pipe. Errors of the system and the library pass through."""

from __future__ import annotations

import contextlib
import os
import sys
from pathlib import Path
from typing import BinaryIO, Protocol

import numpy as np
import soundfile
from numpy.typing import NDArray

from preview.audio.files import reason
from preview.audio.quantise import Quantiser
from preview.audio.wavefile import wave_header
from preview.errors import OutputFileError

__all__ = ["NO_COMMENT_FORMATS", "LibraryWriter", "PipeWriter", "TextWriter", "WaveWriter", "Writer"]

NO_COMMENT_FORMATS = ("W64", "AU")
"""Kinds of file into which the library writes no comment."""
_SET_ADD_PEAK_CHUNK = 0x1050  # libsndfile's SFC_SET_ADD_PEAK_CHUNK; the chunk carries a time stamp


class RawFile(Protocol):
    """An unbuffered binary file."""

    def write(self, data: memoryview, /) -> int | None:
        """Write some of the bytes; how many."""

    def flush(self) -> None:
        """Push out what is held."""


class Writer(Protocol):
    """One way of writing samples."""

    def write(self, samples: NDArray[np.float64]) -> None:
        """Append the samples."""

    def bring_up(self) -> bool:
        """Make what is written so far readable, and go on; whether this kind of file can."""

    def finish(self) -> None:
        """Make the file whole."""

    def close(self) -> None:
        """Let go of the file, whole or not."""


class WaveWriter:
    """WAV with our own header, RF64 where 32 bits cannot hold the size."""

    def __init__(
        self,
        path: Path,
        quantiser: Quantiser,
        sample_rate_hz: int,
        channels: int,
        comment: str,
        rf64: bool | None,
    ) -> None:
        self._quantiser = quantiser
        self._header = (sample_rate_hz, channels, comment, rf64)
        self._data_bytes = 0
        self._file = open(path, "r+b", buffering=0)  # noqa: SIM115 - closed by close()
        try:
            write_all(self._file, self._header_bytes())
        except BaseException:
            self._file.close()
            raise

    def _header_bytes(self) -> bytes:
        rate, channels, comment, rf64 = self._header
        return wave_header(
            sample_rate_hz=rate,
            channels=channels,
            depth=self._quantiser.depth,
            comment=comment,
            data_bytes=self._data_bytes,
            rf64=rf64,
        )

    def write(self, samples: NDArray[np.float64]) -> None:
        data = self._quantiser.packed(samples)
        write_all(self._file, data)
        self._data_bytes += len(data)

    def bring_up(self) -> bool:
        end = self._file.tell()
        self._file.seek(0)
        write_all(self._file, self._header_bytes())
        self._file.seek(end)
        return True

    def finish(self) -> None:
        if self._data_bytes & 1:
            write_all(self._file, b"\0")
        self._file.seek(0)
        write_all(self._file, self._header_bytes())
        self._file.close()

    def close(self) -> None:
        self._file.close()


class PipeWriter:
    """WAV of unknown length to standard output, past Python's buffer so that an error is seen here."""

    def __init__(
        self, stream: BinaryIO | None, quantiser: Quantiser, sample_rate_hz: int, channels: int, comment: str
    ) -> None:
        if stream is None:
            if sys.stdout is None:
                raise OutputFileError("standard output: it is closed", "use > FILE or a pipe")
            if sys.stdout.isatty():
                raise OutputFileError(
                    "standard output: it is a terminal; samples would fill it", "use > FILE or a pipe"
                )
            sys.stdout.flush()
            stream = sys.stdout.buffer
        raw = getattr(stream, "raw", stream)
        self._file: RawFile = raw
        self._quantiser = quantiser
        header = wave_header(
            sample_rate_hz=sample_rate_hz,
            channels=channels,
            depth=quantiser.depth,
            comment=comment,
            data_bytes=None,
        )
        try:
            write_all(self._file, header)
        except OSError as error:
            raise OutputFileError(f"standard output: {reason(error)}") from error

    def write(self, samples: NDArray[np.float64]) -> None:
        write_all(self._file, self._quantiser.packed(samples))

    def bring_up(self) -> bool:
        return False

    def finish(self) -> None:
        self._file.flush()

    def close(self) -> None:
        with contextlib.suppress(OSError):
            self._file.flush()


class LibraryWriter:
    """Every other kind of file, through libsndfile."""

    def __init__(
        self, path: Path, quantiser: Quantiser, sample_rate_hz: int, channels: int, comment: str, kind: str
    ) -> None:
        self._path = str(path) if sys.platform == "win32" else os.fsencode(path)
        self._quantiser = quantiser
        self._frames = 0
        subtype = "FLOAT" if quantiser.depth == "float" else f"PCM_{quantiser.depth}"
        self._file = soundfile.SoundFile(
            self._path, "w", samplerate=sample_rate_hz, channels=channels, format=kind, subtype=subtype
        )
        # The package has no public way to give this command; without it two renders differ by a time stamp.
        soundfile._snd.sf_command(self._file._file, _SET_ADD_PEAK_CHUNK, soundfile._ffi.NULL, 0)
        if comment and kind not in NO_COMMENT_FORMATS:
            self._file.comment = comment

    def write(self, samples: NDArray[np.float64]) -> None:
        if self._quantiser.depth == "float":
            self._file.write(self._quantiser.floats(samples))
        else:
            whole = self._quantiser.integers(samples)
            self._file.write(whole << (32 - int(self._quantiser.depth)))
        self._frames += len(samples)

    def bring_up(self) -> bool:
        return False

    def finish(self) -> None:
        self._file.close()
        if self._frames:
            with soundfile.SoundFile(self._path) as check:  # closing reports no error: look at what is there
                check.seek(self._frames - 1)
                if check.frames != self._frames or len(check.read(1)) != 1:
                    raise soundfile.SoundFileRuntimeError("the file came out incomplete")

    def close(self) -> None:
        with contextlib.suppress(soundfile.SoundFileError):
            self._file.close()


class TextWriter:
    """A log of numbers: a comment, names, then a row a sample with its time."""

    def __init__(
        self, path: Path, sample_rate_hz: float, channels: int, comment: str, delimiter: str
    ) -> None:
        self._rate_hz, self._delimiter = sample_rate_hz, delimiter
        self._rows = 0
        names = ["out [V]"] if channels == 1 else [f"out {c + 1} [V]" for c in range(channels)]
        self._file = open(path, "wb", buffering=0)  # noqa: SIM115 - closed by close()
        try:
            write_all(self._file, f"# {comment}\n{delimiter.join(['time [s]', *names])}\n".encode())
        except BaseException:
            self._file.close()
            raise

    def write(self, samples: NDArray[np.float64]) -> None:
        times = (self._rows + np.arange(len(samples))) / self._rate_hz
        rows = zip(times.tolist(), samples.tolist(), strict=True)
        lines = [self._delimiter.join([f"{at:.12g}", *(f"{v:.10g}" for v in row)]) for at, row in rows]
        self._rows += len(lines)
        if lines:
            write_all(self._file, ("\n".join(lines) + "\n").encode())

    def bring_up(self) -> bool:
        return True

    def finish(self) -> None:
        self._file.close()

    def close(self) -> None:
        self._file.close()


def write_all(file: RawFile, data: bytes) -> None:
    rest = memoryview(data)
    while rest:
        written = file.write(rest)
        rest = rest[written or 0 :]
