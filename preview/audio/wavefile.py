"""WAV and RF64 headers, read and written without seeking, so that a pipe can carry them.

References
----------
Microsoft/IBM, Multimedia Programming Interface and Data Specifications 1.0 (RIFF, fmt, data, LIST INFO);
EBU Tech 3306 (RF64, the ds64 chunk and the JUNK chunk that keeps its place).
"""

from __future__ import annotations

import struct
from dataclasses import dataclass
from typing import BinaryIO, Literal

import numpy as np
from numpy.typing import NDArray

__all__ = [
    "DEPTHS",
    "Depth",
    "WaveError",
    "WaveFormat",
    "WaveHeader",
    "decode",
    "read_wave_header",
    "sample_bytes",
    "wave_header",
]

Depth = Literal["16", "24", "float"]
"""Sample depth of a written file: PCM of 16 or 24 bits, or 32-bit float."""

DEPTHS: tuple[Depth, ...] = ("16", "24", "float")

UNKNOWN_32 = 0xFFFFFFFF
_PCM, _FLOAT, _EXTENSIBLE = 1, 3, 0xFFFE
_GUID_TAIL = bytes.fromhex("000000001000800000aa00389b71")
_BITS: dict[Depth, int] = {"16": 16, "24": 24, "float": 32}
_MAX_SMALL_CHUNK = 1 << 20


class WaveError(ValueError):
    """What is wrong with a WAV header, in words without the file's name."""


@dataclass(frozen=True, slots=True)
class WaveFormat:
    """How the samples of a WAV file are stored."""

    is_float: bool
    """IEEE float if True, else PCM."""
    bits: int
    """Bits a sample: 8, 16, 24, 32 or 64."""
    channels: int
    """Number of channels."""
    sample_rate_hz: int
    """Sample rate [Hz]."""

    @property
    def frame_bytes(self) -> int:
        """Bytes a frame."""
        return self.bits // 8 * self.channels

    @property
    def subtype(self) -> str:
        """The encoding in the words of the other formats: PCM_16, FLOAT ..."""
        if self.is_float:
            return "FLOAT" if self.bits == 32 else "DOUBLE"
        return "PCM_U8" if self.bits == 8 else f"PCM_{self.bits}"


@dataclass(frozen=True, slots=True)
class WaveHeader:
    """All that stands before the samples."""

    format: WaveFormat
    """How the samples are stored."""
    data_bytes: int | None
    """Bytes of sample data; None where the writer did not know (a pipe)."""
    comment: str
    """The comment, empty where there is none."""


def sample_bytes(depth: Depth) -> int:
    """Bytes a sample of that depth."""
    return _BITS[depth] // 8


def wave_header(
    *,
    sample_rate_hz: int,
    channels: int,
    depth: Depth,
    comment: str,
    data_bytes: int | None,
    rf64: bool | None = None,
) -> bytes:
    """The header of a WAV or RF64 file; its length does not depend on ``data_bytes`` unless that is None.

    Parameters
    ----------
    data_bytes : int or None
        Bytes of samples that follow; None for a pipe, where nobody knows.
    rf64 : bool, optional
        Force or forbid RF64; by default it is used where 32 bits cannot hold the size.
    """
    bits = _BITS[depth]
    align = bits // 8 * channels
    tag = _FLOAT if depth == "float" else _PCM
    rate = sample_rate_hz
    if channels > 2:
        fmt = struct.pack("<HHIIHH", _EXTENSIBLE, channels, rate, rate * align, align, bits)
        fmt += struct.pack("<HHIH", 22, bits, 0, tag) + _GUID_TAIL
    elif tag == _FLOAT:
        fmt = struct.pack("<HHIIHHH", tag, channels, rate, rate * align, align, bits, 0)
    else:
        fmt = struct.pack("<HHIIHH", tag, channels, rate, rate * align, align, bits)

    frames = UNKNOWN_32 if data_bytes is None else data_bytes // align
    body = _chunk(b"fmt ", fmt)
    if tag == _FLOAT or channels > 2:
        body += _chunk(b"fact", struct.pack("<I", min(frames, UNKNOWN_32)))
    if comment:
        text = comment.encode("utf-8", "replace") + b"\0"
        body += _chunk(b"LIST", b"INFO" + _chunk(b"ICMT", text))
    if data_bytes is None:
        return (
            b"RIFF" + struct.pack("<I", UNKNOWN_32) + b"WAVE" + body + b"data" + struct.pack("<I", UNKNOWN_32)
        )

    riff_bytes = 4 + 36 + len(body) + 8 + data_bytes + (data_bytes & 1)
    large = riff_bytes >= UNKNOWN_32 if rf64 is None else rf64
    if large:
        head = b"RF64" + struct.pack("<I", UNKNOWN_32) + b"WAVE"
        head += _chunk(b"ds64", struct.pack("<QQQI", riff_bytes, data_bytes, frames, 0))
    else:
        head = b"RIFF" + struct.pack("<I", riff_bytes) + b"WAVE" + _chunk(b"JUNK", bytes(28))
    return head + body + b"data" + struct.pack("<I", UNKNOWN_32 if large else data_bytes)


def _chunk(name: bytes, body: bytes) -> bytes:
    return name + struct.pack("<I", len(body)) + body + b"\0" * (len(body) & 1)


def read_wave_header(stream: BinaryIO) -> WaveHeader:
    """Read a stream up to its first sample.

    Raises
    ------
    WaveError
        What is wrong, in words.
    """
    head = stream.read(12)
    if not head:
        raise WaveError("nothing came")
    if len(head) < 12 or head[:4] not in (b"RIFF", b"RF64") or head[8:12] != b"WAVE":
        raise WaveError("not a WAV file")
    large_bytes: int | None = None
    form: WaveFormat | None = None
    comment = ""
    while True:
        name, size = _next_chunk(stream)
        if name == b"data":
            break
        if size > _MAX_SMALL_CHUNK:
            _skip(stream, size + (size & 1))
            continue
        body = _exactly(stream, size + (size & 1))[:size]
        if name == b"ds64" and size >= 16:
            (large_bytes,) = struct.unpack_from("<Q", body, 8)
        elif name == b"fmt ":
            form = _parse_format(body)
        elif name == b"LIST" and body[:4] == b"INFO":
            comment = _find_comment(body) or comment
    if form is None:
        raise WaveError("no fmt chunk before the samples")
    data_bytes: int | None = size
    if head[:4] == b"RF64" and size == UNKNOWN_32:
        data_bytes = large_bytes
    elif size in (0, UNKNOWN_32) or (size >= 0x7FFFF000 and size % form.frame_bytes):
        data_bytes = None  # written to a pipe: the writer could not know
    return WaveHeader(form, data_bytes, comment)


def _next_chunk(stream: BinaryIO) -> tuple[bytes, int]:
    head = _exactly(stream, 8)
    return head[:4], int.from_bytes(head[4:], "little")


def _exactly(stream: BinaryIO, count: int) -> bytes:
    data = stream.read(count)
    if len(data) < count:
        raise WaveError("it ends before the first sample")
    return data


def _skip(stream: BinaryIO, count: int) -> None:
    while count:
        count -= len(_exactly(stream, min(count, 1 << 16)))


def _parse_format(body: bytes) -> WaveFormat:
    if len(body) < 16:
        raise WaveError("its fmt chunk is too short")
    tag, channels, rate, _, _, bits = struct.unpack_from("<HHIIHH", body)
    if tag == _EXTENSIBLE and len(body) >= 40:
        if body[26:40] != _GUID_TAIL:
            raise WaveError("its sample format is neither PCM nor float")
        (tag,) = struct.unpack_from("<H", body, 24)
    if tag not in (_PCM, _FLOAT):
        raise WaveError("its sample format is neither PCM nor float")
    allowed = (32, 64) if tag == _FLOAT else (8, 16, 24, 32)
    if bits not in allowed:
        raise WaveError(f"{bits} bits a sample; {', '.join(map(str, allowed))} can be read")
    return WaveFormat(tag == _FLOAT, bits, channels, rate)


def _find_comment(body: bytes) -> str:
    at = 4
    while at + 8 <= len(body):
        size = int.from_bytes(body[at + 4 : at + 8], "little")
        if body[at : at + 4] == b"ICMT":
            return body[at + 8 : at + 8 + size].split(b"\0")[0].decode("utf-8", "replace")
        at += 8 + size + (size & 1)
    return ""


def decode(data: bytes, form: WaveFormat) -> NDArray[np.float64]:
    """Whole frames as float64, shape (frames, channels); full scale is 1.0."""
    if form.is_float:
        flat = np.frombuffer(data, "<f4" if form.bits == 32 else "<f8").astype(np.float64)
    elif form.bits == 8:
        flat = (np.frombuffer(data, np.uint8).astype(np.float64) - 128.0) / 128.0
    elif form.bits == 24:
        wide = np.zeros((len(data) // 3, 4), np.uint8)
        wide[:, 1:] = np.frombuffer(data, np.uint8).reshape(-1, 3)
        flat = wide.view("<i4")[:, 0] / 2.0**31
    else:
        flat = np.frombuffer(data, f"<i{form.bits // 8}") / 2.0 ** (form.bits - 1)
    return flat.reshape(-1, form.channels)
