"""What is said of files that are whole, damaged, cut or no audio at all."""

from __future__ import annotations

import errno
import os
import struct
from pathlib import Path

import numpy as np
import pytest
import soundfile

from preview.audio.files import FileInfo, probe
from preview.audio.headers import recognise
from preview.errors import AudioFileError

RATE = 48_000
SAMPLES = np.random.default_rng(3).uniform(-0.5, 0.5, (RATE, 2))

KINDS = {
    "wav": ("WAV", "FLOAT"),
    "pcm.wav": ("WAV", "PCM_24"),
    "rf64": ("RF64", "FLOAT"),
    "w64": ("W64", "FLOAT"),
    "aiff": ("AIFF", "PCM_24"),
    "float.aiff": ("AIFF", "FLOAT"),
    "caf": ("CAF", "FLOAT"),
    "au": ("AU", "FLOAT"),
    "flac": ("FLAC", "PCM_16"),
    "mp3": ("MP3", "MPEG_LAYER_III"),
    "ogg": ("OGG", "VORBIS"),
    "opus": ("OGG", "OPUS"),
}


def make(folder: Path, kind: str) -> Path:
    path = folder / f"tone.{kind}"
    container, subtype = KINDS[kind]
    soundfile.write(path, SAMPLES, RATE, format=container, subtype=subtype)
    return path


def cut(path: Path, ratio: float = 0.6) -> Path:
    data = path.read_bytes()
    path.write_bytes(data[: int(len(data) * ratio)])
    return path


@pytest.mark.parametrize("kind", KINDS)
def test_a_whole_file_is_described_without_a_warning(tmp_path: Path, kind: str) -> None:
    info = probe(make(tmp_path, kind))
    assert (info.frames, info.channels, info.sample_rate_hz) == (RATE, 2, RATE)
    assert info.duration_s == 1.0
    assert info.subtype == KINDS[kind][1]
    assert info.warnings == ()


@pytest.mark.parametrize("kind", ["wav", "pcm.wav", "rf64", "w64", "aiff", "float.aiff", "au"])
def test_a_cut_file_tells_what_was_promised_and_what_is_there(tmp_path: Path, kind: str) -> None:
    path = make(tmp_path, kind)
    data_bytes = RATE * 2 * (3 if KINDS[kind][1] == "PCM_24" else 4)
    held = data_bytes - 30_000
    path.write_bytes(path.read_bytes()[: path.stat().st_size - _tail_bytes(path, data_bytes) - 30_000])
    info = probe(path)
    assert info.warnings == (
        f"cut short: its header promises {data_bytes} bytes of samples, {held} are there",
    )
    assert info.frames == held // (data_bytes // RATE)


def _tail_bytes(path: Path, data_bytes: int) -> int:
    """Bytes behind the samples, such as chunks that stand at the end."""
    whole = path.read_bytes()
    last = SAMPLES[-1].astype("<f4").tobytes()
    if "aiff" in path.name or path.suffix == ".au":
        last = SAMPLES[-1].astype(">f4").tobytes()
    found = whole.rfind(last)
    return len(whole) - found - len(last) if found >= 0 else 0


def test_a_cut_ogg_stream_is_noticed_although_it_has_no_length(tmp_path: Path) -> None:
    assert probe(cut(make(tmp_path, "ogg"))).warnings == ("cut short: the end of the stream is missing",)


def test_a_cut_caf_file_is_refused_with_the_reason(tmp_path: Path) -> None:
    with pytest.raises(
        AudioFileError, match=r"tone\.caf: cut short: its header promises .* cannot be read when"
    ):
        probe(cut(make(tmp_path, "caf")))


@pytest.mark.parametrize(
    ("name", "content", "words"),
    [
        ("empty.wav", b"", r"empty\.wav: the file is empty \(0 bytes\)"),
        ("noise.wav", b"\x93\x01\xfe\x00" * 999, "not an audio file, or damaged from the start"),
        ("letter.flac", b"Dear engineer,\n" * 50, "it looks like text"),
        ("letter.txt", "Größe µ\n".encode() * 50, "it looks like text"),
        ("song.m4a", b"\0\0\0\x20ftypM4A \0\0\0\0" + bytes(200), r"MPEG-4 audio or video \(m4a, mp4\)"),
        ("film.wav", b"\x1a\x45\xdf\xa3" + bytes(200), "Matroska or WebM"),
        ("stub.wav", b"RIFF\0\0\0\0WAVE", "the header makes no sense"),
        ("raw.raw", bytes(2000), "the ending says samples without a header"),
        ("short.mp3", b"\xff\xfb\x90\x00" + bytes(3), "not an audio file, or damaged"),
    ],
)
def test_what_is_no_audio_is_told_in_plain_words(
    tmp_path: Path, name: str, content: bytes, words: str
) -> None:
    path = tmp_path / name
    path.write_bytes(content)
    with pytest.raises(AudioFileError, match=words) as caught:
        probe(path)
    assert "\n" not in str(caught.value)
    if "empty" not in name and "raw" not in name:
        assert "what can be read: WAV, RF64" in str(caught.value)


def test_a_missing_file_and_a_folder_are_told_apart(tmp_path: Path) -> None:
    with pytest.raises(AudioFileError, match=r"gone\.wav: no such file"):
        probe(tmp_path / "gone.wav")
    with pytest.raises(AudioFileError, match="is a folder, not an audio file"):
        probe(tmp_path)
    with pytest.raises(AudioFileError, match="a part of the path is not a folder"):
        probe(make(tmp_path, "au") / "x.wav")
    with pytest.raises(AudioFileError, match="no file can have this name"):
        probe(tmp_path / "a\0b.wav")
    with pytest.raises(AudioFileError, match="name too long"):
        probe(tmp_path / ("n" * 300 + ".wav"))


@pytest.mark.skipif(not hasattr(os, "mkfifo"), reason="named pipes are a POSIX thing")
def test_a_named_pipe_does_not_hang(tmp_path: Path) -> None:
    os.mkfifo(tmp_path / "pipe.wav")
    with pytest.raises(AudioFileError, match=r"is a pipe or device, not a file \(give - as the name"):
        probe(tmp_path / "pipe.wav")


def test_an_unreadable_file_is_told(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    path = make(tmp_path, "wav")

    def refuse(*given: object, **named: object) -> None:  # a superuser can read everything, so it is acted
        raise PermissionError(errno.EACCES, "Permission denied", str(path))

    monkeypatch.setattr("builtins.open", refuse)
    with pytest.raises(AudioFileError, match=r"tone\.wav: permission denied"):
        probe(path)


def riff(channels: int, rate: int, data: bytes, *, data_size: int | None = None) -> bytes:
    fmt = struct.pack("<HHIIHH", 1, channels, rate, rate * 2 * channels, 2 * channels, 16)
    body = b"WAVEfmt " + struct.pack("<I", 16) + fmt
    body += b"data" + struct.pack("<I", len(data) if data_size is None else data_size) + data
    return b"RIFF" + struct.pack("<I", len(body)) + body


@pytest.mark.parametrize(
    ("content", "words"),
    [
        (riff(0, RATE, bytes(400)), r"its header says 0 channels \(1 to 64 can be read\)"),
        (riff(65, RATE, bytes(65 * 20)), r"65 channels \(1 to 64 can be read\)"),
        (riff(1, RATE, b""), "holds no samples"),
        (riff(1, RATE, b"", data_size=400), "holds no samples: cut short: its header promises 400 bytes"),
        (riff(1, 9, bytes(400)), r"sample rate 9 Hz \(10 to 192000 Hz can be used\)"),
        (riff(1, 192_001, bytes(400)), "sample rate 192001 Hz"),
    ],
)
def test_a_header_out_of_range_is_refused(tmp_path: Path, content: bytes, words: str) -> None:
    path = tmp_path / "odd.wav"
    path.write_bytes(content)
    with pytest.raises(AudioFileError, match=words):
        probe(path)


@pytest.mark.parametrize("rate", [10, 8_000, 192_000])
def test_the_ends_of_the_range_are_in_it(tmp_path: Path, rate: int) -> None:
    path = tmp_path / "edge.wav"
    path.write_bytes(riff(64, rate, bytes(64 * 2 * 10)))
    assert probe(path).frames == 10


def test_a_wav_file_that_was_a_pipe_is_read_to_its_end_without_a_warning(tmp_path: Path) -> None:
    path = tmp_path / "pipe.wav"
    path.write_bytes(riff(2, RATE, bytes(4 * 500), data_size=0xFFFFFFFF))
    info = probe(path)
    assert info.frames == 500
    assert info.warnings == ()


def test_a_wav_file_whose_header_was_never_finished_is_told(tmp_path: Path) -> None:
    path = tmp_path / "pipe.wav"
    path.write_bytes(riff(2, RATE, bytes(4 * 500), data_size=0))
    with pytest.raises(AudioFileError, match=r"its header was never finished \(give - as the name"):
        probe(path)


def test_a_flac_stream_that_does_not_know_its_length_is_told(tmp_path: Path) -> None:
    path = make(tmp_path, "flac")
    data = bytearray(path.read_bytes())
    # RFC 9639, 8.2: after the 4-byte marker and block header, total samples are the last 36 of the 64 bits
    # that start 10 bytes into STREAMINFO; 0 is "unknown".
    data[18 + 3] &= 0xF0
    data[22:26] = bytes(4)
    path.write_bytes(bytes(data))
    with pytest.raises(AudioFileError, match="does not say how long it is"):
        probe(path)


def test_names_and_comments_cannot_paint_the_terminal(tmp_path: Path) -> None:
    path = tmp_path / "a\x1b[31mred\u202e.wav"
    with pytest.raises(AudioFileError) as caught:
        probe(path)
    assert "a?[31mred?.wav: no such file" in str(caught.value)
    with soundfile.SoundFile(tmp_path / "c.wav", "w", RATE, 1) as file:
        file.comment = "loud\x1b[2J"
        file.write(np.zeros(10))
    assert probe(tmp_path / "c.wav").comment == "loud?[2J"


@pytest.mark.skipif(os.name != "posix", reason="other systems have no such names")
def test_a_name_that_is_not_unicode_can_be_opened(tmp_path: Path) -> None:
    path = Path(os.fsdecode(os.fsencode(tmp_path) + b"/caf\xe9.wav"))
    path.write_bytes(riff(1, RATE, bytes(20)))
    assert probe(path).frames == 10


@pytest.mark.parametrize(
    ("head", "words"),
    [(b"MThd\0\0", "a MIDI file"), (b"\xff\xf1\x50", "an AAC stream"), (b"PK\x03\x04", "archive"), (b"", "")],
)
def test_foreign_beginnings_are_recognised(head: bytes, words: str) -> None:
    assert words in recognise(head)
    assert bool(recognise(head)) == bool(words)


def test_an_unknown_length_has_no_duration() -> None:
    info = FileInfo(Path("-"), -1, 1, RATE, "WAV", "FLOAT", "")
    assert np.isnan(info.duration_s)
