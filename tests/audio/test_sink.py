"""Writing: whole or not at all, the same bytes each time, and refusals in plain words."""

from __future__ import annotations

import errno
import io
import os
import stat
import subprocess
import sys
import wave
from pathlib import Path

import numpy as np
import pytest
import scipy.io.wavfile

from preview.audio.files import probe
from preview.audio.sink import ENDINGS, FileSink, check_output
from preview.audio.source import FileSource, StdinSource
from preview.audio.wavefile import read_wave_header, wave_header
from preview.errors import AudioFileError, OutputFileError, UsageError

RATE = 48_000
SAMPLES = np.random.default_rng(4).uniform(-0.99, 0.99, (RATE, 2))


def write(path: Path, depth: str = "float", samples: np.ndarray = SAMPLES, **more: object) -> FileSink:
    with FileSink(path, sample_rate_hz=RATE, channels=samples.shape[1], depth=depth, **more) as sink:
        for start in range(0, len(samples), 7001):
            sink.write(samples[start : start + 7001])
    return sink


def read(path: Path) -> np.ndarray:
    with FileSource(path) as source:
        samples = np.empty((source.frames, source.channels))
        assert source.read(samples) == source.frames
        assert source.warnings == ()
    return samples


@pytest.mark.parametrize("depth", ["16", "24", "float"])
@pytest.mark.parametrize("ending", ENDINGS)
def test_every_ending_and_depth_comes_back_as_close_as_the_depth_allows(
    tmp_path: Path, ending: str, depth: str
) -> None:
    path = tmp_path / f"out{ending.upper()}"
    if ending == ".flac" and depth == "float":
        with pytest.raises(UsageError, match=r"FLAC holds no float samples \(add --depth 16 or --depth 24\)"):
            write(path, depth)
        assert list(tmp_path.iterdir()) == []
        return
    write(path, depth, comment="full scale 8.7 V peak")
    got = read(path)
    if depth == "float":
        np.testing.assert_array_equal(got, SAMPLES.astype(np.float32))
    else:
        assert np.abs(got - SAMPLES).max() <= 0.5 * 2.0 ** (1 - int(depth)) * (1 + 1e-9)
    assert probe(path).comment == ("" if ending in (".w64", ".au") else "full scale 8.7 V peak")
    assert list(tmp_path.iterdir()) == [path]


@pytest.mark.parametrize("ending", ENDINGS)
def test_two_renders_are_the_same_bytes(tmp_path: Path, ending: str) -> None:
    # The library's PEAK chunk holds the second of writing; that it is off is seen by its absence.
    depth = "24" if ending == ".flac" else "float"
    for name in ("a", "b"):
        write(tmp_path / f"{name}{ending}", depth, comment="x")
    first = (tmp_path / f"a{ending}").read_bytes()
    assert first == (tmp_path / f"b{ending}").read_bytes()
    assert b"PEAK" not in first
    assert b"peak" not in first


def test_other_libraries_read_our_wav(tmp_path: Path) -> None:
    write(tmp_path / "f.wav")
    rate, floats = scipy.io.wavfile.read(tmp_path / "f.wav")
    assert (rate, floats.dtype) == (RATE, np.float32)
    np.testing.assert_array_equal(floats, SAMPLES.astype(np.float32))
    write(tmp_path / "i.wav", "16")
    with wave.open(str(tmp_path / "i.wav")) as file:
        assert (file.getnchannels(), file.getsampwidth(), file.getframerate(), file.getnframes()) == (
            2,
            2,
            RATE,
            RATE,
        )
        got = np.frombuffer(file.readframes(RATE), "<i2").reshape(-1, 2)
    np.testing.assert_array_equal(got, np.rint(SAMPLES * 32768))


@pytest.mark.parametrize("channels", [1, 3, 8, 64])
def test_any_number_of_channels_is_written(tmp_path: Path, channels: int) -> None:
    samples = np.random.default_rng(1).uniform(-1, 1, (101, channels))
    write(tmp_path / "many.wav", "24", samples)
    np.testing.assert_array_equal(read(tmp_path / "many.wav"), np.rint(samples * 2**23) / 2**23)
    with pytest.raises(UsageError, match="65 channels"):
        FileSink(tmp_path / "x.wav", sample_rate_hz=RATE, channels=65)
    if channels > 8:
        with pytest.raises(UsageError, match=r"FLAC holds at most 8 channels, not 64 \(write \.wav\)"):
            write(tmp_path / "many.flac", "24", samples)


def test_integers_clip_at_full_scale_and_count_and_floats_do_not(tmp_path: Path) -> None:
    samples = np.array([[0.0], [1.0], [-1.0], [1.0001], [-7.0], [np.nan], [np.inf], [0.5]])
    sink = write(tmp_path / "i.wav", "16", samples)
    assert (sink.over_count, sink.non_finite_count, sink.frames_written) == (2, 2, 8)
    top = 32767 / 32768
    np.testing.assert_array_equal(read(tmp_path / "i.wav")[:, 0], [0, top, -1, top, -1, 0, 0, 0.5])
    sink = write(tmp_path / "f.wav", "float", samples)
    assert (sink.over_count, sink.non_finite_count) == (0, 2)
    np.testing.assert_array_equal(
        read(tmp_path / "f.wav")[:, 0], np.float32([0, 1, -1, 1.0001, -7, 0, 0, 0.5])
    )


def test_an_empty_result_is_a_valid_file(tmp_path: Path) -> None:
    for ending in set(ENDINGS) - {".flac"}:
        write(tmp_path / f"none{ending}", "16", SAMPLES[:0])
        with pytest.raises(AudioFileError, match="holds no samples"):
            probe(tmp_path / f"none{ending}")
    with pytest.raises(OutputFileError, match="there are no samples, and FLAC cannot be empty"):
        write(tmp_path / "none.flac", "16", SAMPLES[:0])


# -- whole or not at all -----------------------------------------------------------------------------------


@pytest.mark.parametrize("error", [KeyboardInterrupt, RuntimeError])
@pytest.mark.parametrize("ending", [".wav", ".flac", ".aiff"])
def test_an_interrupt_leaves_what_was_there(tmp_path: Path, ending: str, error: type[BaseException]) -> None:
    path = tmp_path / f"out{ending}"
    path.write_bytes(b"the former one")

    def interrupted() -> None:
        with FileSink(path, sample_rate_hz=RATE, channels=2, depth="24") as sink:
            sink.write(SAMPLES)
            hidden = [p for p in tmp_path.iterdir() if p != path]
            assert len(hidden) == 1
            assert hidden[0].name.startswith(f".out{ending}.")
            assert hidden[0].name.endswith(".part")
            raise error

    with pytest.raises(error):
        interrupted()
    assert path.read_bytes() == b"the former one"
    assert list(tmp_path.iterdir()) == [path]


FULL = """
import resource, signal, sys
from pathlib import Path
import numpy as np
from preview.audio.sink import FileSink
from preview.errors import OutputFileError
signal.signal(signal.SIGXFSZ, signal.SIG_IGN)
resource.setrlimit(resource.RLIMIT_FSIZE, (100_000, 100_000))
samples = np.random.default_rng(0).uniform(-1, 1, (int(sys.argv[2]), 2))
try:
    with FileSink(Path(sys.argv[1]), sample_rate_hz=48000, channels=2, depth="24") as sink:
        for start in range(0, len(samples), 1000):
            sink.write(samples[start:start + 1000])
except OutputFileError as error:
    print(error)
    sys.exit(error.exit_code)
"""


@pytest.mark.skipif(sys.platform == "win32", reason="the limit that stands for a full disk is a POSIX thing")
@pytest.mark.parametrize("ending", ENDINGS)
@pytest.mark.parametrize("frames", [30_000, 16_700])
def test_no_more_room_is_told_and_nothing_is_left(tmp_path: Path, ending: str, frames: int) -> None:
    # 16 700 frames pass the limit with the last block only, where encoders write on closing.
    path = tmp_path / f"out{ending}"
    done = subprocess.run(
        [sys.executable, "-c", FULL, str(path), str(frames)], capture_output=True, text=True, timeout=60
    )
    assert done.stdout == f"{path}: file larger than the system allows\n", done.stderr
    assert done.returncode == 3
    assert list(tmp_path.iterdir()) == []


def test_a_full_disk_is_called_so(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def full(*given: object) -> None:
        raise OSError(errno.ENOSPC, "No space left on device")

    monkeypatch.setattr("preview.audio.writers.write_all", full)
    with pytest.raises(OutputFileError, match=r"out\.wav: disk full$"):
        write(tmp_path / "out.wav")
    assert list(tmp_path.iterdir()) == []


def test_a_failing_rename_leaves_nothing(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def refuse(*given: object) -> None:
        raise PermissionError(errno.EACCES, "Permission denied")

    monkeypatch.setattr("os.replace", refuse)
    with pytest.raises(OutputFileError, match="permission denied"):
        write(tmp_path / "out.wav")
    assert list(tmp_path.iterdir()) == []


@pytest.mark.skipif(os.name != "posix", reason="permissions of POSIX")
def test_the_file_gets_the_permissions_of_any_new_file(tmp_path: Path) -> None:
    before = os.umask(0o027)
    try:
        write(tmp_path / "out.wav")
    finally:
        os.umask(before)
    assert stat.S_IMODE((tmp_path / "out.wav").stat().st_mode) == 0o640


def test_a_link_is_written_through(tmp_path: Path) -> None:
    (tmp_path / "real.wav").write_bytes(b"old")
    (tmp_path / "link.wav").symlink_to(tmp_path / "real.wav")
    write(tmp_path / "link.wav")
    assert (tmp_path / "link.wav").is_symlink()
    assert probe(tmp_path / "real.wav").frames == RATE


def test_a_long_name_is_written(tmp_path: Path) -> None:
    path = tmp_path / ("n" * 251 + ".wav")
    write(path)
    assert list(tmp_path.iterdir()) == [path]


# -- refusals ----------------------------------------------------------------------------------------------


def test_places_that_cannot_be_written_are_refused_before_any_work(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    (tmp_path / "folder.wav").mkdir()
    with pytest.raises(OutputFileError, match=r"folder\.wav: is a folder"):
        check_output(tmp_path / "folder.wav")
    with pytest.raises(OutputFileError, match="there is no folder"):
        check_output(tmp_path / "none" / "out.wav")
    with pytest.raises(OutputFileError, match="no file can have this name"):
        check_output(tmp_path / "a\0.wav")
    os.mkfifo(tmp_path / "pipe.wav")
    with pytest.raises(OutputFileError, match="is a pipe or device"):
        check_output(tmp_path / "pipe.wav")
    (tmp_path / "old.wav").write_bytes(b"")
    monkeypatch.setattr("os.access", lambda path, mode: Path(path).suffix != ".wav")
    with pytest.raises(OutputFileError, match="is write-protected"):
        check_output(tmp_path / "old.wav")
    monkeypatch.setattr("os.access", lambda path, mode: False)
    with pytest.raises(OutputFileError, match=r"out\.wav: no permission to write in"):
        check_output(tmp_path / "out.wav")


def test_the_input_is_never_overwritten(tmp_path: Path) -> None:
    write(tmp_path / "in.wav")
    (tmp_path / "other.wav").hardlink_to(tmp_path / "in.wav")
    (tmp_path / "link.wav").symlink_to(tmp_path / "in.wav")
    for name in ("in.wav", "other.wav", "link.wav", "../" + tmp_path.name + "/in.wav"):
        with pytest.raises(OutputFileError, match="is also the input"):
            check_output(tmp_path / name, [Path("-"), tmp_path / "missing.wav", tmp_path / "in.wav"])
    check_output(tmp_path / "out.wav", [tmp_path / "in.wav"])
    check_output(Path("-"), [tmp_path / "in.wav"])


@pytest.mark.parametrize(
    ("name", "words"),
    [
        ("out.mp3", r"the ending \.mp3 does not say what to write \(write one of \.wav \.rf64 \.w64"),
        ("out", "a name without ending does not say"),
        ("out.wav\x1b[2J", r"out\.wav\?\[2J: the ending \.wav\?"),
    ],
)
def test_unknown_endings_name_the_known(tmp_path: Path, name: str, words: str) -> None:
    with pytest.raises(UsageError, match=words):
        check_output(tmp_path / name)


def test_an_unknown_depth_names_the_known() -> None:
    with pytest.raises(UsageError, match=r"depth 20 \(it is one of 16, 24, float\)"):
        check_output(Path("out.wav"), depth="20")  # type: ignore[arg-type]  # the fault under test


# -- large files -------------------------------------------------------------------------------------------


def test_over_4_gb_the_header_is_rf64_with_the_true_sizes() -> None:
    data_bytes = 5 * 2**30
    header = wave_header(sample_rate_hz=RATE, channels=2, depth="float", comment="x", data_bytes=data_bytes)
    small = wave_header(sample_rate_hz=RATE, channels=2, depth="float", comment="x", data_bytes=800)
    assert len(header) == len(small)
    # EBU Tech 3306, 3: ds64 is the first chunk; sizes of RIFF, data and sample count, 64 bits each.
    assert header[:4] == b"RF64"
    assert header[12:16] == b"ds64"
    riff, data, frames = np.frombuffer(header[20:44], "<u8")
    assert (riff, data, frames) == (len(header) - 8 + data_bytes, data_bytes, data_bytes // 8)
    assert read_wave_header(io.BytesIO(header)).data_bytes == data_bytes
    assert small[:4] == b"RIFF"
    assert small[12:16] == b"JUNK"


@pytest.mark.skipif(sys.platform == "win32", reason="the file is sparse, which costs room there")
def test_libsndfile_reads_our_file_of_5_gb_to_its_last_frame(tmp_path: Path) -> None:
    frames = 5 * 2**30 // 8
    header = wave_header(sample_rate_hz=RATE, channels=2, depth="float", comment="", data_bytes=frames * 8)
    with open(tmp_path / "large.wav", "wb") as file:
        file.write(header)
        file.seek(len(header) + (frames - 1) * 8)
        file.write(np.float32([0.25, -0.5]).tobytes())
    assert probe(tmp_path / "large.wav").frames == frames
    with FileSource(tmp_path / "large.wav") as source:
        source.seek(frames - 1)
        last = np.empty((4, 2))
        assert source.read(last) == 1
    np.testing.assert_array_equal(last[0], [0.25, -0.5])


def test_kinds_that_end_at_4_gb_say_so(tmp_path: Path) -> None:
    with FileSink(tmp_path / "x.aiff", sample_rate_hz=RATE, channels=2) as sink:
        sink.frames_written = 2**29
        with pytest.raises(OutputFileError, match=r"AIFF ends at 4 GB \(write \.wav, \.w64 or \.caf\)"):
            sink.write(SAMPLES)
        sink.abort()


# -- standard output ---------------------------------------------------------------------------------------


@pytest.mark.parametrize("depth", ["16", "24", "float"])
@pytest.mark.parametrize("channels", [1, 2, 6])
def test_a_pipe_carries_what_a_file_would(tmp_path: Path, depth: str, channels: int) -> None:
    samples = np.random.default_rng(1).uniform(-1, 1, (3001, channels))
    write(tmp_path / "x.wav", depth, samples)
    memory = io.BytesIO()
    write(Path("-"), depth, samples, comment="full scale 5 V", stdout=memory)
    memory.seek(0)
    source = StdinSource(memory)
    assert source.info.comment == "full scale 5 V"
    got = np.empty((4000, channels))
    assert source.read(got) == 3001
    np.testing.assert_array_equal(got[:3001], read(tmp_path / "x.wav"))
    memory.seek(0)
    (tmp_path / "piped.wav").write_bytes(memory.getvalue())
    np.testing.assert_array_equal(read(tmp_path / "piped.wav"), got[:3001])


PIPE = """
import sys
from pathlib import Path
import numpy as np
from preview.audio.sink import FileSink
from preview.errors import OutputFileError
try:
    with FileSink(Path("-"), sample_rate_hz=48000, channels=2) as sink:
        for _ in range(100):
            sink.write(np.zeros((10_000, 2)))
except OutputFileError as error:
    print(error, file=sys.stderr)
    sys.exit(error.exit_code)
"""


@pytest.mark.skipif(not Path("/dev/full").exists(), reason="needs the device that is always full")
def test_a_full_disk_behind_standard_output_is_one_line() -> None:
    with open("/dev/full", "wb") as full:
        done = subprocess.run([sys.executable, "-c", PIPE], stdout=full, stderr=subprocess.PIPE, timeout=60)
    assert (done.stderr, done.returncode) == (b"standard output: disk full\n", 3)


def test_a_reader_that_has_gone_is_one_line() -> None:
    with subprocess.Popen(
        [sys.executable, "-c", PIPE], stdout=subprocess.PIPE, stderr=subprocess.PIPE
    ) as process:
        assert process.stdout is not None
        assert process.stderr is not None
        process.stdout.read(100)
        process.stdout.close()
        told = process.stderr.read()
    assert (told, process.returncode) == (b"standard output: the reader has closed the pipe\n", 3)


def test_samples_are_not_poured_into_a_terminal(monkeypatch: pytest.MonkeyPatch) -> None:
    terminal = io.TextIOWrapper(io.BytesIO())
    monkeypatch.setattr(terminal, "isatty", lambda: True, raising=False)
    for stream, words in ((terminal, "it is a terminal"), (None, "it is closed")):
        monkeypatch.setattr("sys.stdout", stream)
        with pytest.raises(OutputFileError, match=words):
            FileSink(Path("-"), sample_rate_hz=RATE, channels=1)
