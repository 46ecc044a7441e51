"""Reading: in order, from anywhere, and where the file is damaged."""

from __future__ import annotations

import io
import struct
from pathlib import Path

import numpy as np
import pytest
import soundfile

from preview.audio.files import UNKNOWN_FRAMES
from preview.audio.source import FileSource, StdinSource
from preview.errors import AudioFileError
from tests.audio.test_files import KINDS, RATE, SAMPLES, cut, make, riff


def read_all(source: FileSource | StdinSource, block_frames: int) -> np.ndarray:
    parts = []
    block = np.full((block_frames, source.channels), np.nan)
    while got := source.read(block):
        parts.append(block[:got].copy())
    return np.concatenate(parts) if parts else np.empty((0, source.channels))


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("block_frames", [1009, 4096])
def test_blocks_of_any_size_give_the_same_samples_as_the_whole(
    tmp_path: Path, kind: str, block_frames: int
) -> None:
    path = make(tmp_path, kind)
    whole, _ = soundfile.read(path, always_2d=True)
    with FileSource(path) as source:
        np.testing.assert_array_equal(read_all(source, block_frames), whole)
        assert source.position == RATE
        assert source.warnings == ()


@pytest.mark.parametrize("kind", KINDS)
def test_a_seek_lands_on_the_very_sample(tmp_path: Path, kind: str) -> None:
    path = make(tmp_path, kind)
    whole, _ = soundfile.read(path, always_2d=True)
    block = np.empty((700, 2))
    with FileSource(path) as source:
        for frame in np.random.default_rng(5).integers(0, RATE - 700, 60):
            source.seek(int(frame))
            assert source.read(block) == 700
            np.testing.assert_array_equal(block, whole[frame : frame + 700])
            assert source.position == frame + 700
        source.seek(RATE + 5)
        assert source.position == RATE
        assert source.read(block) == 0
        source.seek(-3)
        assert source.position == 0


def read_until_damage(source: FileSource, block_frames: int) -> tuple[np.ndarray, AudioFileError]:
    parts, block = [], np.empty((block_frames, source.channels))
    try:
        while count := source.read(block):
            parts.append(block[:count].copy())
    except AudioFileError as error:
        return np.concatenate(parts), error
    pytest.fail("no damage was told")


def test_what_is_not_a_number_becomes_0_and_is_counted(tmp_path: Path) -> None:
    samples = SAMPLES.copy()
    samples[10, 0], samples[11, 1], samples[500, 0] = np.nan, np.inf, -np.inf
    soundfile.write(tmp_path / "nan.wav", samples, RATE, subtype="DOUBLE")
    with FileSource(tmp_path / "nan.wav") as source:
        got = read_all(source, 333)
        assert source.non_finite_count == 3
        assert source.warnings == ("3 samples were not finite numbers and were replaced by 0",)
    np.testing.assert_array_equal(got, np.where(np.isfinite(samples), samples, 0.0))


def test_a_damaged_flac_gives_what_is_sound_and_then_names_the_frame(tmp_path: Path) -> None:
    path = make(tmp_path, "flac")
    whole, _ = soundfile.read(path)
    data = bytearray(path.read_bytes())
    middle = len(data) // 2
    data[middle : middle + 600] = np.random.default_rng(1).integers(0, 256, 600, np.uint8).tobytes()
    path.write_bytes(bytes(data))
    with FileSource(path) as source:
        sound, error = read_until_damage(source, 5000)
        np.testing.assert_array_equal(sound, whole[: len(sound)])
        place = f"damaged at frame {len(sound)} ({len(sound) / RATE:.3f} s) of 48000"
        assert str(error) == f"{path}: {place}; it cannot be read further"
        block = np.empty((5000, 2))
        assert 0.3 * RATE < len(sound) < 0.55 * RATE
        with pytest.raises(AudioFileError, match="damaged at frame"):
            source.read(block)
        source.seek(100)  # what lies before the damage can still be heard
        assert source.read(block) == 5000
        np.testing.assert_array_equal(block, whole[100:5100])


@pytest.mark.parametrize("kind", ["mp3", "opus"])
def test_a_file_that_gives_less_than_it_promised_is_told(tmp_path: Path, kind: str) -> None:
    path = make(tmp_path, kind)
    data = bytearray(path.read_bytes())
    if kind == "mp3":
        data = data[: int(len(data) * 0.6)]
    else:
        data[len(data) // 2 : len(data) // 2 + 600] = bytes(600)
    path.write_bytes(bytes(data))
    with FileSource(path) as source:
        got = len(read_all(source, 4096))
        assert 0 < got < source.frames
        assert source.missing_frames == source.frames - got
        assert f"it promised {source.frames} frames and gave {got}" in source.warnings[-1]


def test_a_cut_wav_reads_to_where_it_was_cut(tmp_path: Path) -> None:
    path = cut(make(tmp_path, "wav"))
    with FileSource(path) as source:
        got = read_all(source, 4096)
        assert len(got) == source.frames < RATE
        assert len(source.warnings) == 1
    np.testing.assert_array_equal(got, SAMPLES[: len(got)].astype(np.float32))


# -- from a pipe -------------------------------------------------------------------------------------------


@pytest.mark.parametrize("subtype", ["PCM_U8", "PCM_16", "PCM_24", "PCM_32", "FLOAT", "DOUBLE"])
@pytest.mark.parametrize("container", ["WAV", "WAVEX", "RF64"])
def test_a_pipe_gives_the_same_samples_as_the_file(subtype: str, container: str) -> None:
    memory = io.BytesIO()
    soundfile.write(memory, SAMPLES[:3000], RATE, format=container, subtype=subtype)
    memory.seek(0)
    whole, _ = soundfile.read(memory)
    memory.seek(0)
    source = StdinSource(memory)
    assert (source.channels, source.sample_rate_hz, source.info.subtype) == (2, RATE, subtype)
    assert source.frames == 3000
    np.testing.assert_array_equal(read_all(source, 701), whole)
    assert source.warnings == ()


@pytest.mark.parametrize("size", [0, 0xFFFFFFFF, 0x7FFFFFFF])
def test_a_pipe_of_unknown_length_is_read_to_its_end(size: int) -> None:
    whole = np.arange(-500, 500, dtype="<i2").reshape(-1, 2)
    source = StdinSource(io.BytesIO(riff(2, RATE, whole.tobytes(), data_size=size)))
    assert source.frames == UNKNOWN_FRAMES
    np.testing.assert_array_equal(read_all(source, 64), whole / 32768)


def test_odd_chunks_before_the_samples_are_skipped_and_the_comment_is_found() -> None:
    data = riff(1, RATE, np.arange(10, dtype="<i2").tobytes())
    icmt = b"ICMT" + struct.pack("<I", 5) + b"8.7 V\0"
    extra = (
        b"junk"
        + struct.pack("<I", 3)
        + b"abc\0"
        + b"LIST"
        + struct.pack("<I", 4 + len(icmt))
        + b"INFO"
        + icmt
    )
    extra += b"huge" + struct.pack("<I", 3 << 20) + bytes(3 << 20)
    source = StdinSource(io.BytesIO(data[:12] + extra + data[12:]))
    assert source.info.comment == "8.7 V"
    np.testing.assert_array_equal(read_all(source, 4)[:, 0], np.arange(10) / 32768)


def test_a_pipe_that_ends_too_soon_is_told_and_half_a_frame_is_dropped() -> None:
    source = StdinSource(io.BytesIO(riff(2, RATE, bytes(4 * 100))[:-6]))
    assert len(read_all(source, 64)) == 98
    assert "it promised 100 frames and gave 98" in source.warnings[-1]


@pytest.mark.parametrize(
    ("content", "words"),
    [
        (b"", "standard input: nothing came"),
        (b"fLaC" + bytes(60), "standard input: not a WAV file .WAV is what can be read from a pipe"),
        (b"RIFF\0\0\0\0WAVEdata\0\0\0\0", "no fmt chunk before the samples"),
        (riff(1, RATE, b"")[:30], "it ends before the first sample"),
        (riff(0, RATE, b""), "0 channels"),
        (riff(1, 5, b""), "sample rate 5 Hz"),
        (riff(1, RATE, b"").replace(b"\x01\0\x01\0", b"\x06\0\x01\0", 1), "neither PCM nor float"),
        (
            riff(1, RATE, b"").replace(b"\x10\0data", b"\x0c\0data"),
            "12 bits a sample; 8, 16, 24, 32 can be read",
        ),
    ],
)
def test_what_cannot_be_read_from_a_pipe_is_told(content: bytes, words: str) -> None:
    with pytest.raises(AudioFileError, match=words):
        StdinSource(io.BytesIO(content))


def test_the_keyboard_is_not_a_wav_stream(monkeypatch: pytest.MonkeyPatch) -> None:
    keyboard = io.TextIOWrapper(io.BytesIO())
    monkeypatch.setattr(keyboard, "isatty", lambda: True, raising=False)
    for stream, words in ((keyboard, "it is the keyboard"), (None, "it is closed")):
        monkeypatch.setattr("sys.stdin", stream)
        with pytest.raises(AudioFileError, match=words):
            StdinSource()
