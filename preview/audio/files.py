"""Audio files: opening them, what they hold, and what is wrong with them in plain words."""

from __future__ import annotations

import errno
import os
import stat
import sys
from dataclasses import dataclass
from pathlib import Path
from typing import NoReturn

import soundfile

from preview.audio.headers import Promise, promise, recognise
from preview.errors import AudioFileError, printable

__all__ = [
    "CHANNELS_MAX",
    "READABLE",
    "SAMPLE_RATE_MAX_HZ",
    "SAMPLE_RATE_MIN_HZ",
    "UNKNOWN_FRAMES",
    "FileInfo",
    "check_range",
    "open_sound",
    "probe",
    "reason",
]

SAMPLE_RATE_MIN_HZ = 10
SAMPLE_RATE_MAX_HZ = 192_000
CHANNELS_MAX = 64
UNKNOWN_FRAMES = -1
"""Length of a recording that comes from a pipe and does not say."""

READABLE = "WAV, RF64, W64, AIFF, CAF, AU, FLAC, MP3, Ogg Vorbis and Ogg Opus"

_FRAMES_ABSURD = 1 << 62
_REASONS = {
    errno.ENOENT: "no such file",
    errno.ENOTDIR: "no such file: a part of the path is not a folder",
    errno.EACCES: "permission denied",
    errno.EPERM: "permission denied",
    errno.EISDIR: "is a folder",
    errno.ENOSPC: "disk full",
    errno.EDQUOT: "disk quota used up",
    errno.EFBIG: "file larger than the system allows",
    errno.EROFS: "read-only file system",
    errno.ENAMETOOLONG: "name too long",
    errno.ELOOP: "too many links that lead to each other",
    errno.EMFILE: "too many open files",
    errno.EPIPE: "the reader has closed the pipe",
    errno.EIO: "the disk reports an error",
}


@dataclass(frozen=True, slots=True)
class FileInfo:
    """What an audio file holds."""

    path: Path
    """The file; ``-`` for standard input."""
    frames: int
    """Length in frames; ``UNKNOWN_FRAMES`` where a pipe does not say."""
    channels: int
    """Number of channels."""
    sample_rate_hz: float
    """Sample rate [Hz]; whole but for logs."""
    format: str
    """Container, such as WAV or FLAC."""
    subtype: str
    """Encoding, such as PCM_24 or FLOAT."""
    comment: str
    """The comment in the file, cleaned for a terminal; empty where there is none."""
    warnings: tuple[str, ...] = ()
    """What is wrong but not fatal, one plain line each, without the file's name."""

    @property
    def duration_s(self) -> float:
        """Length [s]; nan where it is not known."""
        return self.frames / self.sample_rate_hz if self.frames >= 0 else float("nan")


def probe(path: Path) -> FileInfo:
    """What the file holds, without reading its samples.

    Raises
    ------
    AudioFileError
        It cannot be read, with the reason.
    """
    sound, info = open_sound(path)
    sound.close()
    return info


def open_sound(path: Path) -> tuple[soundfile.SoundFile, FileInfo]:
    """The open file and what it holds; raises AudioFileError in place of everything else."""
    promised, head = _look(path)
    if promised.channels == 0:
        raise AudioFileError(f"{path}: its header says 0 channels", f"1 to {CHANNELS_MAX} can be read")
    name: str | bytes = str(path) if sys.platform == "win32" else os.fsencode(path)
    try:
        sound = soundfile.SoundFile(name)
    except TypeError as error:  # the library takes the ending .raw for a promise of no header
        raise AudioFileError(
            f"{path}: the ending says samples without a header", "rename it to what it is, such as .wav"
        ) from error
    except soundfile.SoundFileError as error:
        _not_audio(path, promised, head, error)
    except OSError as error:
        raise AudioFileError(f"{path}: {reason(error)}") from error
    try:
        return sound, _info(path, sound, promised)
    except BaseException:
        sound.close()
        raise


def _look(path: Path) -> tuple[Promise, bytes]:
    try:
        mode = os.stat(path).st_mode
        if stat.S_ISDIR(mode):
            raise AudioFileError(f"{path}: is a folder, not an audio file")
        if not stat.S_ISREG(mode):
            raise AudioFileError(
                f"{path}: is a pipe or device, not a file",
                "give - as the name to read WAV from standard input",
            )
        with open(path, "rb") as file:
            size = os.fstat(file.fileno()).st_size
            head = file.read(64)
            if not head:
                raise AudioFileError(f"{path}: the file is empty (0 bytes)")
            return promise(file, size), head
    except AudioFileError:
        raise
    except OSError as error:
        raise AudioFileError(f"{path}: {reason(error)}") from error
    except ValueError as error:  # a NUL in the name
        raise AudioFileError(f"{path}: no file can have this name") from error


def _not_audio(path: Path, promised: Promise, head: bytes, error: Exception) -> NoReturn:
    if promised.is_cut:
        message = f"{path}: {_cut_text(promised)}; this kind cannot be read when it is cut"
        raise AudioFileError(message, "get a whole copy") from error
    looks = recognise(head)
    if looks:
        message = f"{path}: cannot be read; it looks like {looks}"
    elif head[:4] in (b"RIFF", b"RF64", b"FORM", b"riff", b"caff", b".snd", b"fLaC", b"OggS"):
        message = f"{path}: damaged, or of a kind that cannot be read: the header makes no sense"
    else:
        message = f"{path}: not an audio file, or damaged from the start"
    raise AudioFileError(message, f"what can be read: {READABLE}") from error


def _cut_text(promised: Promise) -> str:
    if promised.data_bytes is None or promised.held_bytes is None:
        return "cut short: the end of the stream is missing"
    held = max(0, promised.held_bytes)
    return f"cut short: its header promises {promised.data_bytes} bytes of samples, {held} are there"


def _info(path: Path, sound: soundfile.SoundFile, promised: Promise) -> FileInfo:
    check_range(str(path), sound.channels, sound.samplerate)
    frames = sound.frames
    if frames >= _FRAMES_ABSURD:  # FLAC from a pipe: the library cannot go about in it
        raise AudioFileError(
            f"{path}: its header does not say how long it is", "write the file anew as WAV or FLAC"
        )
    if frames <= 0:
        if promised.data_bytes is None and promised.held_bytes:  # size 0, with samples behind it
            raise AudioFileError(
                f"{path}: its header was never finished", "give - as the name and the file with <"
            )
        cause = f": {_cut_text(promised)}" if promised.is_cut else ""
        raise AudioFileError(f"{path}: holds no samples{cause}")
    warnings = (_cut_text(promised),) if promised.is_cut else ()
    return FileInfo(
        path=path,
        frames=frames,
        channels=sound.channels,
        sample_rate_hz=sound.samplerate,
        format=sound.format,
        subtype=sound.subtype,
        comment=printable(sound.comment or ""),
        warnings=warnings,
    )


def check_range(name: str, channels: int, sample_rate_hz: int) -> None:
    """Raise AudioFileError where the channels or the sample rate are out of range."""
    if not 1 <= channels <= CHANNELS_MAX:
        raise AudioFileError(f"{name}: {channels} channels", f"1 to {CHANNELS_MAX} can be read")
    if not SAMPLE_RATE_MIN_HZ <= sample_rate_hz <= SAMPLE_RATE_MAX_HZ:
        raise AudioFileError(
            f"{name}: sample rate {sample_rate_hz} Hz",
            f"{SAMPLE_RATE_MIN_HZ} to {SAMPLE_RATE_MAX_HZ} Hz can be used",
        )


def reason(error: OSError) -> str:
    """Why the system refused, in plain words."""
    known = _REASONS.get(error.errno) if isinstance(error.errno, int) else None
    return known or error.strerror or "cannot be opened"
