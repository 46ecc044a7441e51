"""What a file's own header promises, against what the file holds; and what an unreadable file may be."""

from __future__ import annotations

import struct
from dataclasses import dataclass
from typing import BinaryIO

__all__ = ["Promise", "promise", "recognise"]

_UNKNOWN_32 = 0xFFFFFFFF
_MAX_CHUNKS = 10_000
_OGG_PAGE_MAX = 65_307


@dataclass(frozen=True, slots=True)
class Promise:
    """What the header says of the sample data."""

    data_bytes: int | None = None
    """Bytes of sample data promised; None where the header does not say."""
    held_bytes: int | None = None
    """Bytes that the file holds from the first sample on; None where not looked for."""
    channels: int | None = None
    """Channels promised; None where not looked for."""
    end_missing: bool = False
    """The stream's own end mark is not there (Ogg)."""

    @property
    def is_cut(self) -> bool:
        """Whether the file holds less than its header promises."""
        if self.data_bytes is None or self.held_bytes is None:
            return self.end_missing
        return self.held_bytes < self.data_bytes


def promise(file: BinaryIO, size: int) -> Promise:
    """Read the header of a seekable file of ``size`` bytes; what is not known to it promises nothing."""
    file.seek(0)
    head = file.read(40)
    try:
        if head[:4] in (b"RIFF", b"RF64", b"RIFX") and head[8:12] == b"WAVE":
            return _wave(file, size, head)
        if head[:4] == b"FORM" and head[8:12] in (b"AIFF", b"AIFC"):
            return _aiff(file, size)
        if head[:4] == b"riff" and head[24:28] == b"wave":
            return _w64(file, size)
        if head[:4] == b"caff":
            return _caf(file, size)
        if head[:4] in (b".snd", b"dns."):
            return _au(size, head)
        if head[:4] == b"OggS":
            return _ogg(file, size)
    except struct.error:  # the header itself is cut: the reader will say so
        pass
    return Promise()


def _wave(file: BinaryIO, size: int, head: bytes) -> Promise:
    order = ">" if head[:4] == b"RIFX" else "<"
    at, large, channels = 12, None, None
    for _ in range(_MAX_CHUNKS):
        file.seek(at)
        name = file.read(4)
        (length,) = struct.unpack(order + "I", file.read(4))
        if name == b"ds64":
            _, large = struct.unpack("<QQ", file.read(16))
        elif name == b"fmt ":
            _, channels = struct.unpack(order + "HH", file.read(4))
        elif name == b"data":
            held = size - at - 8
            if length == _UNKNOWN_32:
                length = large
            elif length == 0 and held > 0:
                length = None
            return Promise(length, held, channels)
        at += 8 + length + (length & 1)
    return Promise(channels=channels)


def _aiff(file: BinaryIO, size: int) -> Promise:
    at, channels = 12, None
    for _ in range(_MAX_CHUNKS):
        file.seek(at)
        name = file.read(4)
        (length,) = struct.unpack(">I", file.read(4))
        if name == b"COMM":
            (channels,) = struct.unpack(">H", file.read(2))
        elif name == b"SSND":
            return Promise(length - 8, size - at - 16, channels)
        at += 8 + length + (length & 1)
    return Promise(channels=channels)


def _w64(file: BinaryIO, size: int) -> Promise:
    at, channels = 40, None
    for _ in range(_MAX_CHUNKS):
        file.seek(at)
        name = file.read(16)[:4]
        (length,) = struct.unpack("<Q", file.read(8))
        if name == b"fmt ":
            _, channels = struct.unpack("<HH", file.read(4))
        elif name == b"data":
            return Promise(length - 24, size - at - 24, channels)
        at += max(24, (length + 7) & ~7)
    return Promise(channels=channels)


def _caf(file: BinaryIO, size: int) -> Promise:
    at, channels = 8, None
    for _ in range(_MAX_CHUNKS):
        file.seek(at)
        name = file.read(4)
        (length,) = struct.unpack(">q", file.read(8))
        if name == b"desc":
            (channels,) = struct.unpack(">24xI", file.read(28))
        elif name == b"data":
            known = length if length >= 0 else None
            return Promise(known, size - at - 12, channels)
        if length < 0:
            break
        at += 12 + length
    return Promise(channels=channels)


def _au(size: int, head: bytes) -> Promise:
    order = ">" if head[:4] == b".snd" else "<"
    start, length, _, _, channels = struct.unpack(order + "IIIII", head[4:24])
    return Promise(None if length == _UNKNOWN_32 else length, size - start, channels)


def _ogg(file: BinaryIO, size: int) -> Promise:
    file.seek(max(0, size - _OGG_PAGE_MAX))
    tail = file.read(_OGG_PAGE_MAX)
    last = tail.rfind(b"OggS")
    ended = last >= 0 and len(tail) > last + 5 and bool(tail[last + 5] & 4)
    return Promise(end_missing=not ended)


def recognise(head: bytes) -> str:
    """What the first bytes of an unreadable file look like, in words; empty where they say nothing."""
    if head[4:8] == b"ftyp":
        return "MPEG-4 audio or video (m4a, mp4)"
    if head[:4] == b"\x1a\x45\xdf\xa3":
        return "a Matroska or WebM file"
    if head[:4] == b"MThd":
        return "a MIDI file: notes, not samples"
    if head[:2] in (b"\xff\xf1", b"\xff\xf9"):
        return "an AAC stream"
    if head[:4] == b"%PDF":
        return "a PDF document"
    if head[:3] == b"\xff\xd8\xff" or head[:8] == b"\x89PNG\r\n\x1a\n":
        return "a picture"
    if head[:2] == b"PK" or head[:2] == b"\x1f\x8b":
        return "a compressed archive"
    if head and all(byte in b"\t\n\r" or byte >= 0x20 for byte in head):
        try:
            head.decode("utf-8")
        except UnicodeDecodeError as error:
            return "text" if error.start >= len(head) - 3 and error.start > 0 else ""
        return "text"
    return ""
