"""Logs of numbers read as signals: their layouts, rates, gaps, and every table that cannot be used."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from preview.audio.logs import LogFormat, LogSource, open_signal
from preview.audio.logtable import CHUNK_ROWS
from preview.audio.source import FileSource
from preview.errors import AudioFileError


def source(
    folder: Path, text: str | bytes, form: LogFormat | None = None, name: str = "log.csv"
) -> LogSource:
    path = folder / name
    path.write_bytes(text.encode() if isinstance(text, str) else text)
    return LogSource(path, form or LogFormat())


def values(log: LogSource) -> list[list[float]]:
    out = np.zeros((log.frames + 3, log.channels))
    assert log.read(out) == log.frames
    assert log.read(out) == 0
    return out[: log.frames].tolist()


ROWS = [[1.0], [-2.5], [3.25], [0.5]]


@pytest.mark.parametrize(
    "text",
    [
        "time,accel\n0.00,1\n0.01,-2.5\n0.02,3.25\n0.03,0.5\n",
        "time,accel\r\n0.00,1\r\n0.01,-2.5\r\n\r\n0.02,3.25\r\n0.03,0.5",
        "\ufefftime;accel\n0,00;1,0\n0,01;-2,5\n0,02;3,25\n0,03;0,5\n",
        "Time (ms)\taccel (g)\n0\t1\n10\t-2.5\n20\t3.25\n30\t0.5\n",
        "t_us,accel\n0,1\n10000,-2.5\n20000,3.25\n30000,0.5\n",
        "# bilge pump\n# full scale 2 V\nSerial,77\nRate,100\n\ntime,accel\n[s],[g]\n0.00,1\n"
        "0.01,-2.5\n0.02,3.25\n0.03,0.5\n",
        "accel,timestamp\n1,2024-05-01T12:00:00.00\n-2.5,2024-05-01T12:00:00.01\n3.25,2024-05-01 12:00:00.02\n"
        "0.5,2024-05-01T12:00:00.03\n",
        '"time","accel, x"\n"0.00","1"\n"0.01","-2.5"\n"0.02","3.25"\n"0.03","0.5"\n',
        "clock accel\n12:59:59.98 1\n12:59:59.99 -2.5\n13:00:00.00 3.25\n13:00:00.01 0.5\n".replace(
            "clock", "time"
        ),
        "time,accel,note\n0.00,1,on\n0.01,-2.5,on\n0.02,3.25,off\n0.03,0.5,\n",
    ],
)
def test_the_layout_is_found(tmp_path: Path, text: str) -> None:
    form = LogFormat(columns=("accel",)) if "note" in text else LogFormat()
    log = source(tmp_path, text, form)
    assert log.sample_rate_hz == 100.0
    assert log.frames == 4
    assert values(log) == ROWS
    assert log.warnings == ()


@pytest.mark.parametrize(
    ("form", "expected"),
    [
        (LogFormat(columns=("y",)), [[10.0], [20.0], [30.0]]),
        (LogFormat(columns=("3",)), [[10.0], [20.0], [30.0]]),
        (LogFormat(columns=("Y", "x")), [[10.0, 1.0], [20.0, 2.0], [30.0, 3.0]]),
        (LogFormat(rate_hz=7.5, columns=("x",)), [[1.0], [2.0], [3.0]]),
        (LogFormat(time="x", columns=("y",)), [[10.0], [20.0], [30.0]]),
    ],
)
def test_columns_are_chosen_by_name_or_number(
    tmp_path: Path, form: LogFormat, expected: list[list[float]]
) -> None:
    log = source(tmp_path, "time,x,y [V]\n0,1,10\n0.5,2,20\n1,3,30\n", form)
    assert values(log) == expected
    assert log.sample_rate_hz == (7.5 if form.rate_hz else 1.0 if form.time else 2.0)


def test_a_single_column_needs_a_rate(tmp_path: Path) -> None:
    with pytest.raises(AudioFileError, match="no column is called time"):
        source(tmp_path, "1\n2\n3\n")
    log = source(tmp_path, "1\n2\n3\n", LogFormat(rate_hz=10.0))
    assert values(log) == [[1.0], [2.0], [3.0]]


@pytest.mark.parametrize("rate", [10.0, 12.5, 50.0, 1000.0, 1024.0, 8000.0])
def test_the_rate_is_that_of_the_times_however_they_are_rounded(tmp_path: Path, rate: float) -> None:
    rows = int(20 * rate)
    for digits in (3, 6, 9):
        text = "time,v\n" + "".join(f"{i / rate:.{digits}f},{i % 7}\n" for i in range(rows))
        assert source(tmp_path, text).sample_rate_hz == pytest.approx(
            rate, rel=1e-3 / 20 if digits == 3 else 1e-7
        )
    stamps = "time,v\n" + "".join(f"{int(i / rate)},{i % 7}\n" for i in range(rows))  # whole seconds
    assert source(tmp_path, stamps).sample_rate_hz == pytest.approx(rate, rel=0.1)


def test_missing_cells_hold_the_value_before_them_and_are_told(tmp_path: Path) -> None:
    log = source(tmp_path, "time,a,b\n0,1,\n1,,5\n2,nan,6\n3,4,oops\n4,7,8\n", LogFormat(columns=("a", "b")))
    assert values(log) == [[1, 0], [1, 5], [1, 6], [4, 6], [7, 8]]
    assert log.non_finite_count == 4
    assert "4 cells hold no number" in log.warnings[0]


@pytest.mark.parametrize(
    ("times", "message"),
    [
        ([0.0, 1.0, 2.0, 4.0, 5.0], "row 4 of the numbers comes 2 s after the one before"),
        ([0, 1, 2, 1, 2], "row 4 of the numbers comes -1 s after the one"),
        ([0, 0, 0, 0, 0], "do not rise"),
        ([5, 4, 3, 2, 1], "do not rise"),
        ([0, 1, "", 3, 4], "row 3 of the numbers has no time"),
        ([0, 0.1, 0.2, 0.3, 600], "comes"),
    ],
)
def test_rows_that_are_missing_or_out_of_order_are_refused(
    tmp_path: Path, times: list[object], message: str
) -> None:
    text = "time,v\n" + "".join(f"{t},1\n" for t in times)
    with pytest.raises(AudioFileError, match=message):
        source(tmp_path, text)
    assert source(tmp_path, text, LogFormat(rate_hz=10.0)).frames == 5


def test_a_gap_far_into_a_log_is_found(tmp_path: Path) -> None:
    rows = 2 * CHUNK_ROWS + 100
    lines = [f"{i / 100:.2f},{i}" for i in range(rows)]
    del lines[CHUNK_ROWS]
    with pytest.raises(AudioFileError, match=rf"row {CHUNK_ROWS + 1} of the numbers comes 0.02 s"):
        source(tmp_path, "time,v\n" + "\n".join(lines))


def test_uneven_times_are_taken_as_even_with_a_warning(tmp_path: Path) -> None:
    rng = np.random.default_rng(2)
    times = np.arange(500) * 0.1 + rng.uniform(-0.015, 0.015, 500)
    times[0], times[-1] = 0.0, 49.9
    log = source(tmp_path, "time,v\n" + "".join(f"{t:.6f},1\n" for t in times))
    assert log.sample_rate_hz == pytest.approx(10.0)
    assert "uneven" in log.warnings[0]


def test_any_row_can_be_sought_and_blocks_do_not_matter(tmp_path: Path) -> None:
    rows = 3 * CHUNK_ROWS + 57
    numbers = np.random.default_rng(4).integers(-1000, 1000, rows)
    text = "time,v\n" + "".join(
        f"{i / 50:.2f},{'' if i % 4096 == 0 and i else n}\n" for i, n in enumerate(numbers)
    )
    log = source(tmp_path, text)
    whole = np.array(values(log))
    assert whole[4096] == whole[4095]
    for first in (
        0,
        1,
        4096,
        CHUNK_ROWS - 1,
        CHUNK_ROWS,
        CHUNK_ROWS + 1,
        2 * CHUNK_ROWS + 5,
        rows - 1,
        rows,
        rows + 9,
    ):
        log.seek(first)
        out = np.zeros((700, 1))
        got = 0
        while count := log.read(out[got : got + 17]):
            got += count
        assert got == max(0, min(700, rows - first))
        np.testing.assert_array_equal(out[:got], whole[first : first + got])


@pytest.mark.parametrize(
    ("text", "form", "message"),
    [
        ("", LogFormat(), "no rows of numbers"),
        ("time,v\n", LogFormat(), "no rows of numbers"),
        ("dear diary\nnothing today\n", LogFormat(), "no rows of numbers"),
        (b"RIFF\0\0\0\0WAVE", LogFormat(), "not a text table"),
        ("time,v\n0,1\n1,2\n".encode("utf-16"), LogFormat(), "16 bits a letter"),
        ("time,a,b\n0,1,2\n1,2,3\n", LogFormat(), "columns time, a, b"),
        ("time,a,b\n0,1,2\n1,2,3\n", LogFormat(columns=("c",)), "--column c: no such column"),
        ("time,a,b\n0,1,2\n1,2,3\n", LogFormat(columns=("a", "2")), "names one column twice"),
        ("time,a\n0,1\n1,2\n", LogFormat(time="x"), "--time x: no such column"),
        ("x,a\n0,1\n1,2\n", LogFormat(), "no column is called time"),
        ("time,a\n0,1\n", LogFormat(), "one row has no rate"),
        ("time,a\n0,1\n5,2\n10,3\n", LogFormat(), "0.2 rows a second"),
    ],
)
def test_what_is_no_log_is_refused(tmp_path: Path, text: str | bytes, form: LogFormat, message: str) -> None:
    with pytest.raises(AudioFileError, match=message):
        source(tmp_path, text, form)


@pytest.mark.parametrize(
    ("text", "form", "torn"),
    [
        ("t,v\n0,00,1,50\n0,01,1,60\n", LogFormat(), True),
        ("t,v\n0,00,1,50\n0,01,1,60\n", LogFormat(rate_hz=10.0), True),
        ("v\n1,50\n-1,60\n", LogFormat(rate_hz=10.0), True),
        ("v\n1.5,1.50\n1.6,1.60\n", LogFormat(rate_hz=10.0), False),
        ("1,50\n1,60\n", LogFormat(rate_hz=10.0), False),
    ],
)
def test_decimal_commas_between_commas_are_told_of(
    tmp_path: Path, text: str, form: LogFormat, torn: bool
) -> None:
    with pytest.raises(AudioFileError) as caught:
        source(tmp_path, text, form)
    assert ("if 1,5 is one number" in str(caught.value.hint)) == torn


def test_a_missing_file_and_a_folder_are_told(tmp_path: Path) -> None:
    with pytest.raises(AudioFileError, match="no such file"):
        LogSource(tmp_path / "nowhere.csv", LogFormat())
    (tmp_path / "folder.csv").mkdir()
    with pytest.raises(AudioFileError, match="is a folder"):
        LogSource(tmp_path / "folder.csv", LogFormat())


def test_the_ending_says_what_is_opened(tmp_path: Path) -> None:
    import soundfile

    soundfile.write(tmp_path / "a.wav", np.zeros(10), 8000)
    (tmp_path / "b.TSV").write_text("time\tv\n0\t1\n1\t2\n")
    with open_signal(tmp_path / "a.wav") as one, open_signal(tmp_path / "b.TSV") as other:
        assert isinstance(one, FileSource)
        assert isinstance(other, LogSource)
        assert other.info.subtype == "v"


def test_columns_in_two_units_of_voltage_are_refused(tmp_path: Path) -> None:
    text = "time,a [mV],b [V]\n0,1,2\n1,2,3\n"
    with pytest.raises(AudioFileError, match=r"not in one unit: a \[mV\], b \[V\]"):
        source(tmp_path, text, LogFormat(columns=("a", "b")))
    assert "full scale 1 mV" in source(tmp_path, text, LogFormat(columns=("a",))).info.comment
    assert source(tmp_path, "time,RPM V\n0,1\n1,2\n").info.comment == "full scale 1 V peak"
    assert source(tmp_path, "# full scale 3 V\ntime,a [mV]\n0,1\n1,2\n").info.comment.count("full scale") == 1
