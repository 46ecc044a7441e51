"""Where samples come from: a file, or a WAV stream on standard input. Full scale is 1.0."""

from __future__ import annotations

import sys
from pathlib import Path
from types import TracebackType
from typing import BinaryIO, Self

import numpy as np
import soundfile
from numpy.typing import NDArray

from preview.audio.files import UNKNOWN_FRAMES, FileInfo, check_range, open_sound, reason
from preview.audio.wavefile import WaveError, decode, read_wave_header
from preview.errors import AudioFileError, printable

__all__ = ["FileSource", "StdinSource"]

_PREROLL_FRAMES = 8192  # after a seek the lossy decoders need this long to settle
_PREROLL_SUBTYPES = ("VORBIS", "OPUS", "MPEG_LAYER_I", "MPEG_LAYER_II", "MPEG_LAYER_III")
_SALVAGE_FRAMES = 64


class _Source:
    """What both sources share: counting, the context manager, replacing what is not a number."""

    info: FileInfo

    def __init__(self, info: FileInfo) -> None:
        self.info = info
        self.position = 0
        """Frame that the next ``read`` begins with."""
        self.non_finite_count = 0
        """Samples that were not a number or infinite; each was replaced by 0."""
        self.missing_frames = 0
        """Frames promised but not there; known when the end is reached."""

    @property
    def channels(self) -> int:
        """Number of channels."""
        return self.info.channels

    @property
    def sample_rate_hz(self) -> float:
        """Sample rate [Hz]."""
        return self.info.sample_rate_hz

    @property
    def frames(self) -> int:
        """Length in frames as promised; ``UNKNOWN_FRAMES`` where a pipe does not say."""
        return self.info.frames

    @property
    def warnings(self) -> tuple[str, ...]:
        """What is wrong but not fatal, as known by now, one plain line each."""
        lines = list(self.info.warnings)
        if self.missing_frames:
            lines.append(f"damaged or cut short: it promised {self.frames} frames and gave {self.position}")
        if self.non_finite_count:
            lines.append(f"{self.non_finite_count} samples were not finite numbers and were replaced by 0")
        return tuple(lines)

    def close(self) -> None:
        """Let go of the file."""

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    def _clean(self, block: NDArray[np.float64]) -> None:
        finite = np.isfinite(block)
        if not finite.all():
            self.non_finite_count += int(block.size - np.count_nonzero(finite))
            block[~finite] = 0.0


class FileSource(_Source):
    """An audio file, read in order or from any frame.

    Parameters
    ----------
    path : Path
        The file.

    Raises
    ------
    AudioFileError
        It cannot be read.
    """

    def __init__(self, path: Path) -> None:
        self._sound, info = open_sound(path)
        super().__init__(info)
        self._trouble: AudioFileError | None = None

    def read(self, samples_out: NDArray[np.float64]) -> int:
        """Fill the array from its start; the count of frames filled, 0 at the end.

        Parameters
        ----------
        samples_out : ndarray, (n, channels), float64, C-contiguous
            The caller's array; what lies beyond the count is left in any state.

        Raises
        ------
        AudioFileError
            The file is damaged here; all that is sound before it was given first.
        """
        if self._trouble is not None:
            raise self._trouble
        want = max(0, min(len(samples_out), self.frames - self.position))
        filled = 0
        while filled < want:
            part = samples_out[filled:want]
            try:
                got = len(self._sound.read(len(part), dtype="float64", always_2d=True, out=part))
            except soundfile.SoundFileError as error:
                got = self._salvage(part, self.position + filled)
                at = self.position + filled + got
                self._trouble = AudioFileError(
                    f"{self.info.path}: damaged at frame {at} ({at / self.sample_rate_hz:.3f} s) "
                    f"of {self.frames}; it cannot be read further"
                )
                self._trouble.__cause__ = error
                filled += got
                break
            if got == 0:
                self.missing_frames = self.frames - self.position - filled
                break
            filled += got
        self._clean(samples_out[:filled])
        self.position += filled
        if self._trouble is not None and filled == 0:
            raise self._trouble
        return filled

    def seek(self, frame: int) -> None:
        """Make that frame the next to be read; it is held within the file."""
        target = min(max(0, frame), self.frames)
        if target == self.position and self._trouble is None:
            return
        try:
            if self._trouble is not None:  # the decoder does not recover from an error: take a new one
                self._sound.close()
                self._sound, _ = open_sound(self.info.path)
                self._trouble = None
            start = target
            if self.info.subtype in _PREROLL_SUBTYPES:
                start = max(0, target - _PREROLL_FRAMES)
            self._sound.seek(start)
            if start < target:
                self._sound.read(target - start, dtype="float64", always_2d=True)
        except soundfile.SoundFileError as error:
            self._trouble = AudioFileError(f"{self.info.path}: damaged before frame {target}")
            self._trouble.__cause__ = error
        self.position = target

    def close(self) -> None:
        """Let go of the file."""
        self._sound.close()

    def _salvage(self, part: NDArray[np.float64], start: int) -> int:
        """Fill what a fresh decoder still gives before the damage, in small steps."""
        saved = 0
        try:
            sound, _ = open_sound(self.info.path)
            with sound:
                sound.seek(start)
                while saved < len(part):
                    piece = part[saved : saved + _SALVAGE_FRAMES]
                    got = len(sound.read(len(piece), dtype="float64", always_2d=True, out=piece))
                    if got == 0:
                        break
                    saved += got
        except (soundfile.SoundFileError, AudioFileError):
            pass  # this is the damage: what was saved before it counts
        return saved


class StdinSource(_Source):
    """A WAV stream on standard input, also one whose header does not know its length.

    Parameters
    ----------
    stream : BinaryIO, optional
        Another stream to read from.

    Raises
    ------
    AudioFileError
        What comes is not WAV, or nothing comes.
    """

    def __init__(self, stream: BinaryIO | None = None) -> None:
        if stream is None:
            if sys.stdin is None:
                raise AudioFileError("standard input: it is closed", "use < FILE or a pipe")
            if sys.stdin.isatty():
                raise AudioFileError(
                    "standard input: it is the keyboard, not a WAV stream", "use < FILE or a pipe"
                )
            stream = sys.stdin.buffer
        try:
            header = read_wave_header(stream)
        except WaveError as error:
            raise AudioFileError(
                f"standard input: {error}", "WAV is what can be read from a pipe; give other kinds as a file"
            ) from error
        except OSError as error:
            raise AudioFileError(f"standard input: {reason(error)}") from error
        form = header.format
        check_range("standard input", form.channels, form.sample_rate_hz)
        known = header.data_bytes is not None
        super().__init__(
            FileInfo(
                path=Path("-"),
                frames=header.data_bytes // form.frame_bytes
                if header.data_bytes is not None
                else UNKNOWN_FRAMES,
                channels=form.channels,
                sample_rate_hz=form.sample_rate_hz,
                format="WAV",
                subtype=form.subtype,
                comment=printable(header.comment),
            )
        )
        self._stream = stream
        self._form = form
        self._left_frames = self.info.frames if known else None

    def read(self, samples_out: NDArray[np.float64]) -> int:
        """Fill the array from its start, waiting for the pipe; the count of frames filled, 0 at the end."""
        want = len(samples_out)
        if self._left_frames is not None:
            want = min(want, self._left_frames - self.position)
        if want <= 0:
            return 0
        size = self._form.frame_bytes
        try:
            data = self._stream.read(want * size)
        except OSError as error:
            raise AudioFileError(f"standard input: {reason(error)}") from error
        got = len(data) // size
        samples_out[:got] = decode(data[: got * size], self._form)
        self._clean(samples_out[:got])
        self.position += got
        if got < want and self._left_frames is not None:
            self.missing_frames = self._left_frames - self.position
        return got
