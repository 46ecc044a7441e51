"""The demo's recordings: there, audible, unclipped, at volts that such sources give, made by the script."""

from __future__ import annotations

import importlib.util
import shutil
import tomllib
from pathlib import Path
from types import ModuleType
from typing import Any

import numpy as np
import pytest
import soundfile
from numpy.typing import NDArray

from preview.values.levels import dbu_from_vpk, full_scale_in_comment, parse_full_scale

DEMO = Path(__file__).parents[2] / "demo_audio"
ORIGIN: dict[str, Any] = tomllib.loads((DEMO / "ORIGIN.toml").read_text(encoding="utf-8"))
FILES: dict[str, dict[str, Any]] = {entry["file"]: entry for entry in ORIGIN["file"]}
STAGES = {"inverting-low-pass", "inverting-high-pass", "inverting-band-pass", "non-inverting-gain"}


def volts_of(name: str) -> tuple[NDArray[np.float64], int]:
    """The recording in volts, shape (frames, channels), and its sample rate [Hz]."""
    samples, rate_hz = soundfile.read(DEMO / name, dtype="float64", always_2d=True)
    return samples * parse_full_scale(FILES[name]["full_scale"]).volts, rate_hz


def band_db(volts: NDArray[np.float64], rate_hz: int, low_hz: float, high_hz: float) -> float:
    """Power between two frequencies re the whole [dB]."""
    power = np.abs(np.fft.rfft(volts * np.hanning(volts.size))) ** 2
    hz = np.fft.rfftfreq(volts.size, 1.0 / rate_hz)
    return float(10.0 * np.log10(power[(hz >= low_hz) & (hz < high_hz)].sum() / power.sum()))


@pytest.fixture(scope="module")
def maker() -> ModuleType:
    spec = importlib.util.spec_from_file_location("make_demo_audio", DEMO / "make_demo_audio.py")
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


def test_every_recording_has_its_origin_and_no_other() -> None:
    recordings = {
        path.name for path in DEMO.iterdir() if path.suffix.lower() in (".flac", ".wav", ".aiff", ".mp3")
    }
    assert recordings == set(FILES)
    for entry in FILES.values():
        for key in ("title", "about", "full_scale", "origin", "licence"):
            assert entry[key].strip()
        assert "MIT" in entry["licence"]
        assert entry["suggested_stage"] in STAGES


@pytest.mark.parametrize("name", FILES)
def test_suggested_stage_is_bundled(name: str) -> None:
    stages = Path(__file__).parents[2] / "preview" / "stages"
    assert (stages / f"{FILES[name]['suggested_stage']}.toml").is_file()


def test_the_folder_is_small() -> None:
    assert sum(path.stat().st_size for path in DEMO.iterdir() if path.is_file()) < 2_500_000


@pytest.mark.parametrize("name", FILES)
def test_full_scale_stands_in_the_comment(name: str) -> None:
    with soundfile.SoundFile(DEMO / name) as file:
        assert file.comment == f"full scale {FILES[name]['full_scale']}"
        assert file.title == FILES[name]["title"]
        assert full_scale_in_comment(file.comment) == parse_full_scale(FILES[name]["full_scale"])


@pytest.mark.parametrize(
    ("name", "rate_hz", "channels", "seconds", "lowest_peak_v", "highest_peak_v"),
    [
        # Line level: programme peaks near alignment level, well under full scale (EBU R 68 practice).
        ("announcement.flac", 48_000, 1, (8.0, 10.0), 1.0, 3.1),
        # Passive guitar pickups give some 0.1 to 1 V peak when struck hard (common practice).
        ("guitar-phrase.flac", 44_100, 2, (7.5, 8.5), 0.1, 0.5),
        # Some 10 g on a small pump with a worn bearing, at 100 mV/g (common practice).
        ("bilge-pump.flac", 12_800, 1, (10.0, 10.0), 0.3, 2.0),
    ],
)
def test_format_and_peak_are_those_of_the_source(
    name: str,
    rate_hz: int,
    channels: int,
    seconds: tuple[float, float],
    lowest_peak_v: float,
    highest_peak_v: float,
) -> None:
    volts, found_hz = volts_of(name)
    assert found_hz == rate_hz
    assert volts.shape[1] == channels
    assert seconds[0] <= volts.shape[0] / rate_hz <= seconds[1]
    assert np.all(np.isfinite(volts))
    assert lowest_peak_v < np.max(np.abs(volts)) < highest_peak_v
    assert np.max(np.abs(volts)) < 0.95 * parse_full_scale(FILES[name]["full_scale"]).volts


def test_speech_follows_the_chime() -> None:
    volts, rate_hz = volts_of("announcement.flac")
    mono = volts[:, 0]
    chime, voice = mono[round(0.15 * rate_hz) : round(2.3 * rate_hz)], mono[round(2.55 * rate_hz) :]
    # The chime's power lies at its three notes and their bar modes; that of speech does not.
    notes_hz = (523.25, 587.33, 698.46)
    in_notes = [10.0 ** (band_db(chime, rate_hz, hz - 12.0, hz + 12.0) / 10.0) for hz in notes_hz]
    assert min(in_notes) > 0.05
    assert sum(in_notes) > 0.85
    assert sum(10.0 ** (band_db(voice, rate_hz, hz - 12.0, hz + 12.0) / 10.0) for hz in notes_hz) < 0.3
    assert dbu_from_vpk(float(np.max(np.abs(chime)))) == pytest.approx(4.0, abs=0.05)
    assert dbu_from_vpk(float(np.max(np.abs(voice)))) == pytest.approx(0.0, abs=0.05)
    # Speech has formants up to 4 kHz and fricatives above, and its level moves at some syllables a second.
    assert band_db(voice, rate_hz, 1000.0, 4000.0) > -15.0
    assert band_db(voice, rate_hz, 4000.0, 11_000.0) > -30.0
    hop = rate_hz // 100
    level = np.sqrt(np.mean(voice[: voice.size // hop * hop].reshape(-1, hop) ** 2, axis=1))
    moves = np.abs(np.fft.rfft(level - level.mean())) ** 2
    hz = np.fft.rfftfreq(level.size, 0.01)
    assert moves[(hz >= 1.0) & (hz <= 10.0)].sum() > 0.5 * moves.sum()


def test_recordings_end_at_rest_where_they_are_programme() -> None:
    for name in ("announcement.flac", "guitar-phrase.flac"):
        volts, rate_hz = volts_of(name)
        peak = np.max(np.abs(volts))
        assert np.max(np.abs(volts[: rate_hz // 100])) < 0.01 * peak
        assert np.max(np.abs(volts[-rate_hz // 100 :])) < 0.01 * peak


def test_guitar_pickups_see_strings_through_a_coil() -> None:
    volts, rate_hz = volts_of("guitar-phrase.flac")
    neck, bridge = volts[:, 0], volts[:, 1]
    for channel in (neck, bridge):
        assert band_db(channel, rate_hz, 75.0, 1300.0) > -1.0
        assert band_db(channel, rate_hz, 8000.0, 22_050.0) < -50.0
    assert band_db(bridge, rate_hz, 1300.0, 5000.0) > band_db(neck, rate_hz, 1300.0, 5000.0) + 3.0
    # The first note is the open A string, 110 Hz.
    first = neck[round(0.12 * rate_hz) : round(0.38 * rate_hz)]
    power = np.abs(np.fft.rfft(first * np.hanning(first.size), 8 * first.size)) ** 2
    hz = np.fft.rfftfreq(8 * first.size, 1.0 / rate_hz)
    low = (hz > 60.0) & (hz < 160.0)
    assert hz[low][np.argmax(power[low])] == pytest.approx(110.0, abs=1.0)


def test_pump_shows_shaft_blades_bearing_and_drift() -> None:
    volts, rate_hz = volts_of("bilge-pump.flac")
    mono = volts[:, 0]
    amplitude = np.abs(np.fft.rfft(mono)) * 2.0 / mono.size
    hz = np.fft.rfftfreq(mono.size, 1.0 / rate_hz)

    def strongest_hz(low_hz: float, high_hz: float) -> float:
        inside = (hz >= low_hz) & (hz <= high_hz)
        return float(hz[inside][np.argmax(amplitude[inside])])

    assert strongest_hz(10.0, 60.0) == pytest.approx(24.7, abs=0.1)
    assert strongest_hz(60.0, 200.0) == pytest.approx(5 * 24.7, abs=0.5)
    assert strongest_hz(200.0, 300.0) == pytest.approx(10 * 24.7, abs=1.0)
    # Bearing: the envelope of the band around the housing's resonance beats at 3.58 hits a turn.
    spectrum = np.fft.rfft(mono)
    spectrum[(hz < 2400.0) | (hz > 4000.0)] = 0.0
    ringing = np.fft.irfft(spectrum)
    beats = np.abs(np.fft.rfft(ringing**2 - np.mean(ringing**2)))
    inside = (hz > 5.0) & (hz < 150.0)
    assert hz[inside][np.argmax(beats[inside])] == pytest.approx(3.58 * 24.7, abs=0.3)
    assert np.mean(ringing**4) / np.mean(ringing**2) ** 2 > 6.0  # bursts; 3 is steady noise
    # Drift: the mean over a second moves by more than 0.2 V.
    seconds = mono[: rate_hz * 10].reshape(10, rate_hz).mean(axis=1)
    assert 0.2 < np.ptp(seconds) < 0.5


def test_pump_loops_without_a_joint() -> None:
    volts, _ = volts_of("bilge-pump.flac")
    assert abs(volts[0, 0] - volts[-1, 0]) < np.max(np.abs(np.diff(volts[:, 0]))) / 4.0


@pytest.mark.parametrize(
    ("name", "made_by"),
    [
        pytest.param("guitar-phrase.flac", "guitar_phrase", marks=pytest.mark.slow),
        ("bilge-pump.flac", "bilge_pump"),
    ],
)
def test_the_script_makes_the_recording(maker: ModuleType, name: str, made_by: str) -> None:
    stored, _ = volts_of(name)
    step_v = parse_full_scale(FILES[name]["full_scale"]).volts / 2.0**23
    assert np.max(np.abs(getattr(maker, made_by)() - stored)) <= 1.001 * step_v


def test_the_script_makes_the_chime(maker: ModuleType) -> None:
    stored, rate_hz = volts_of("announcement.flac")
    before_speech = round(2.5 * rate_hz)
    made = maker.announcement(np.ones(rate_hz))[:before_speech]
    step_v = parse_full_scale("+18 dBu").volts / 2.0**23
    assert np.max(np.abs(made - stored[:before_speech])) <= 1.001 * step_v


@pytest.mark.skipif(
    shutil.which("espeak-ng") is None, reason="the speech synthesiser is not needed to use the demo"
)
def test_the_script_speaks_the_text(maker: ModuleType) -> None:
    spoken = maker.speech(FILES["announcement.flac"]["text"], 48_000)
    stored, rate_hz = volts_of("announcement.flac")
    # Other versions of the synthesiser speak a little differently, but not much faster or slower.
    assert spoken.size / rate_hz == pytest.approx(stored.shape[0] / rate_hz - 2.9, rel=0.1)


def test_a_missing_synthesiser_is_said_plainly(maker: ModuleType, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(maker.shutil, "which", lambda name: None)
    with pytest.raises(SystemExit, match="apt-get install espeak-ng"):
        maker.speech("held for the tide", 48_000)


def test_a_signal_above_full_scale_is_not_written(maker: ModuleType) -> None:
    with pytest.raises(ValueError, match="above full scale"):
        maker.samples_24(np.array([[1.01]]), 1.0)
