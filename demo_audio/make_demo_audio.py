"""Make the demo's recordings: ``python demo_audio/make_demo_audio.py [--out FOLDER]``.

Everything is computed from fixed seeds, but for the speech, which the Debian package espeak-ng speaks. Each
signal is made in volts and written as 24-bit FLAC at the full scale that ORIGIN.toml gives for it; the full
scale also stands in the file's comment.
"""

from __future__ import annotations

import argparse
import io
import shutil
import subprocess
import sys
import tomllib
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import soundfile
import soxr
from numpy.typing import NDArray

from preview.values.levels import parse_full_scale, vpk_from_dbu

HERE = Path(__file__).resolve().parent
Signal = NDArray[np.float64]
Complex = NDArray[np.complex128]

ANNOUNCEMENT_HZ = 48_000
GUITAR_HZ = 44_100
PUMP_HZ = 12_800

SHAFT_HZ = 24.7
BLADES = 5
BEARING_HZ = 3.58 * SHAFT_HZ  # hits on a nine-ball bearing's outer race, about 0.4 x 9 a turn
VOLTS_PER_G = 0.1


def filtered(volts: Signal, sample_rate_hz: int, response: Callable[[Complex], Complex]) -> Signal:
    """The signal, shape (frames, channels), through an analog response given over s = j f [Hz]."""
    padded = volts.shape[0] + sample_rate_hz // 10
    s: Complex = np.asarray(1j * np.fft.rfftfreq(padded, 1.0 / sample_rate_hz), dtype=np.complex128)
    spectrum = np.fft.rfft(volts, padded, axis=0) * np.asarray(response(s))[:, np.newaxis]
    return np.asarray(np.fft.irfft(spectrum, padded, axis=0)[: volts.shape[0]])


def pickup_coil(s: Complex) -> Complex:
    """A pickup's coil with its cable: second-order low-pass, resonance 4.2 kHz, Q 1.7; s = j f [Hz]."""
    return np.asarray(1.0 / (1.0 + s / (1.7 * 4200.0) + (s / 4200.0) ** 2))


def voice_high_pass(s: Complex) -> Complex:
    """The microphone channel's bass cut: second-order Butterworth at 90 Hz; s = j f [Hz]."""
    return np.asarray((s / 90.0) ** 2 / (1.0 + np.sqrt(2.0) * s / 90.0 + (s / 90.0) ** 2))


def read_origin() -> dict[str, dict[str, Any]]:
    """The tables of ORIGIN.toml by file name."""
    table = tomllib.loads((HERE / "ORIGIN.toml").read_text(encoding="utf-8"))
    return {entry["file"]: entry for entry in table["file"]}


# ---- announcement ------------------------------------------------------------------------------------------


def chime(sample_rate_hz: int) -> Signal:
    """Three struck bars, D5 F5 C5, one volt peak."""
    seconds = 2.3
    t = np.arange(round(seconds * sample_rate_hz)) / sample_rate_hz
    total = np.zeros_like(t)
    for start_s, note_hz in ((0.0, 587.33), (0.42, 698.46), (0.84, 523.25)):
        since = np.maximum(t - start_s, 0.0)
        # Free bar: modes at 1 : 2.756 : 5.404 of the first (Euler-Bernoulli beam).
        for ratio, share, decay_s in ((1.0, 1.0, 0.55), (2.756, 0.22, 0.16), (5.404, 0.08, 0.05)):
            attack = 1.0 - np.exp(-since / 0.002)
            total += share * attack * np.exp(-since / decay_s) * np.sin(2.0 * np.pi * note_hz * ratio * since)
    total *= np.clip((seconds - t) / 0.25, 0.0, 1.0)
    return np.asarray(total / np.max(np.abs(total)))


def speech(text: str, sample_rate_hz: int) -> Signal:
    """The spoken text, one volt peak; ends the program with a message where espeak-ng is missing."""
    program = shutil.which("espeak-ng")
    if program is None:
        raise SystemExit("make_demo_audio: no espeak-ng on this machine; Debian: apt-get install espeak-ng")
    spoken = subprocess.run(
        [program, "-v", "en-gb", "-s", "150", "-p", "42", "--stdout", text], capture_output=True, check=False
    )
    if spoken.returncode != 0 or len(spoken.stdout) < 1000:
        reason = spoken.stderr.decode(errors="replace").strip() or "no sound came out"
        raise SystemExit(f"make_demo_audio: espeak-ng failed: {reason}")
    samples, spoken_hz = soundfile.read(io.BytesIO(spoken.stdout), dtype="float64")
    heard = np.flatnonzero(np.abs(samples) > 0.003)
    samples = samples[heard[0] : heard[-1] + 1]
    resampled = soxr.resample(samples, spoken_hz, sample_rate_hz, quality="VHQ")
    return np.asarray(resampled / np.max(np.abs(resampled)), dtype=np.float64)


def levelled(voice: Signal, sample_rate_hz: int) -> Signal:
    """The voice above 90 Hz, its level changes halved in dB as by a desk's compressor; one volt peak."""
    voice = filtered(voice[:, None], sample_rate_hz, voice_high_pass)[:, 0]
    window = np.hanning(round(0.08 * sample_rate_hz))
    power = np.convolve(voice**2, window / window.sum(), mode="same")
    louder = voice / np.maximum(np.sqrt(np.maximum(power, 0.0)), 0.02) ** 0.5
    return np.asarray(louder / np.max(np.abs(louder)))


def announcement(spoken: Signal) -> Signal:
    """Chime at +4 dBu, then speech at 0 dBu (peaks of those sines), with the desk's noise at -70 dBu [V]."""
    rate = ANNOUNCEMENT_HZ
    bars = chime(rate) * vpk_from_dbu(4.0)
    voice = levelled(spoken, rate) * vpk_from_dbu(0.0)
    lead, gap, tail = (np.zeros(round(s * rate)) for s in (0.15, 0.1, 0.35))
    volts = np.concatenate([lead, bars, gap, voice, tail])
    noise = np.random.default_rng(1040).standard_normal(volts.size)
    volts += noise * vpk_from_dbu(-70.0) / np.sqrt(2.0)
    return _faded(volts, rate, 0.02, 0.1)[:, None]


# ---- guitar ------------------------------------------------------------------------------------------------

OPEN_STRINGS_HZ = (82.407, 110.0, 146.832, 195.998, 246.942, 329.628)
STIFFNESS = (1.0e-4, 7e-5, 5e-5, 9e-5, 6e-5, 4e-5)
BEAT_S = 0.62
PICKUPS = ((0.245, 1.0), (0.062, 1.9))  # distance from the bridge over the open string, turns (relative)

# String (0 is the lowest), fret, beat it starts, beats it sounds, strength.
PHRASE = (
    (1, 0, 0.0, 2.9, 0.80), (2, 2, 0.5, 2.3, 0.55), (3, 2, 1.0, 1.9, 0.60), (4, 1, 1.5, 1.4, 0.65),
    (5, 0, 2.0, 0.9, 0.75), (4, 3, 2.5, 0.5, 0.60),
    (0, 1, 3.0, 2.9, 0.90), (2, 3, 3.5, 2.3, 0.55), (3, 2, 4.0, 1.0, 0.60), (3, 4, 4.75, 0.25, 0.5),
    (3, 5, 5.0, 0.9, 0.70), (5, 3, 5.5, 0.5, 0.80),
    (5, 5, 6.0, 0.70, 0.85), (5, 3, 6.75, 0.24, 0.60), (4, 5, 7.0, 0.45, 0.75), (4, 3, 7.5, 0.45, 0.65),
    (1, 3, 8.0, 5.0, 0.75), (2, 2, 8.03, 5.0, 0.65), (3, 0, 8.07, 5.0, 0.60), (4, 3, 8.11, 5.0, 0.60),
    (5, 0, 8.15, 5.0, 0.60),
)  # fmt: skip


def pluck(string: int, fret: int, sounds_s: float, strength: float, rng: np.random.Generator) -> Signal:
    """One plucked string at both pickups, shape (frames, 2), relative volts.

    A string plucked at a point and seen by its velocity at another has modes of height
    sin(n pi p) sin(n pi x) / n, p and x being the two places over the sounding length.
    """
    release_s = 0.12
    t = np.arange(round((sounds_s + release_s) * GUITAR_HZ)) / GUITAR_HZ
    shorter = 2.0 ** (-fret / 12.0)
    first_hz = OPEN_STRINGS_HZ[string] / shorter
    plucked_at = (0.16 + 0.03 * rng.random()) / shorter
    modes = np.arange(1, int(9000.0 / first_hz))
    hz = first_hz * modes * np.sqrt(1.0 + STIFFNESS[string] * modes**2)
    loss_per_s = 0.45 + 0.55 * (hz / 1000.0) ** 2 + 0.25 * string**0.5
    # A soft touch is duller: the plectrum's edge rounds off the top.
    height = (
        strength
        * np.sin(np.pi * modes * plucked_at)
        / modes
        * np.exp(-((hz / (2500.0 + 3500.0 * strength)) ** 2))
    )
    seen = np.stack([turns * np.sin(np.pi * modes * place / shorter) for place, turns in PICKUPS])
    out = np.zeros((t.size, 2))
    for n in range(modes.size):
        # Two planes of motion, a little apart in pitch and loss.
        wave = np.exp(-loss_per_s[n] * t) * np.sin(2.0 * np.pi * hz[n] * t)
        wave += 0.3 * np.exp(-0.6 * loss_per_s[n] * t) * np.sin(2.0 * np.pi * hz[n] * 1.0007 * t)
        out += (height[n] * wave)[:, None] * seen[:, n]
    after_s = np.maximum(t - sounds_s, 0.0)
    return np.asarray(out * np.exp(-after_s / 0.022)[:, None])


def guitar_phrase() -> Signal:
    """The phrase at the two pickups, 310 mV on its highest peak [V]."""
    rng = np.random.default_rng(2)
    frames = round(8.0 * GUITAR_HZ)
    volts = np.zeros((frames, 2))
    for string, fret, beat, beats, strength in PHRASE:
        start = round((0.1 + beat * BEAT_S) * GUITAR_HZ)
        note = pluck(string, fret, beats * BEAT_S, strength, rng)[: frames - start]
        volts[start : start + note.shape[0]] += note
    volts = filtered(volts, GUITAR_HZ, pickup_coil)
    volts *= 0.310 / np.max(np.abs(volts))
    t = np.arange(frames) / GUITAR_HZ
    hum = sum(
        a * np.sin(2.0 * np.pi * 50.0 * k * t + k) for k, a in ((1, 1.0), (3, 0.5), (5, 0.25), (7, 0.1))
    )
    volts += 250e-6 * np.asarray(hum)[:, None] * np.array([1.0, 1.25])
    volts += 8e-6 * rng.standard_normal(volts.shape)
    return _faded(volts, GUITAR_HZ, 0.01, 0.6)


# ---- bilge pump --------------------------------------------------------------------------------------------


def bilge_pump() -> Signal:
    """Acceleration of the pump's housing at 100 mV/g, DC-coupled [V].

    Everything in it comes round in 10 s (247 turns), so that it loops without a joint.
    """
    rng = np.random.default_rng(247)
    frames = 10 * PUMP_HZ
    t = np.arange(frames) / PUMP_HZ
    # The pump's speed wanders by a part in a thousand as the water's level does.
    turns = np.cumsum(SHAFT_HZ * (1.0 + 0.001 * np.sin(2.0 * np.pi * 0.2 * t))) / PUMP_HZ
    shaft = 2.0 * np.pi * turns
    g = sum(a * np.sin(k * shaft + 0.7 * k) for k, a in ((1, 0.42), (2, 0.20), (3, 0.07)))
    swell = 1.0 + 0.25 * np.sin(shaft) + 0.15 * np.sin(2.0 * np.pi * 0.3 * t)
    for k, a in ((1, 0.80), (2, 0.34), (3, 0.18), (4, 0.09), (6, 0.05)):
        g = g + a * swell * np.sin(k * BLADES * shaft + 1.3 * k)
    g = g + _bearing_bursts(rng, turns, frames)
    g = g + _flow_noise(rng, frames, swell)
    drift_v = 0.06 + 0.14 * (1.0 - np.cos(2.0 * np.pi * 0.1 * t)) + 0.01 * np.sin(2.0 * np.pi * 0.4 * t)
    return np.asarray(VOLTS_PER_G * g + drift_v)[:, None]


def _bearing_bursts(rng: np.random.Generator, turns: Signal, frames: int) -> Signal:
    """Hits of the balls on a pit in the outer race, each ringing the housing near 3.1 kHz [g]."""
    ring_t = np.arange(round(0.012 * PUMP_HZ)) / PUMP_HZ
    out = np.zeros(frames + ring_t.size + 1)
    hits = int(turns[-1] * BEARING_HZ / SHAFT_HZ)
    at_turn = (np.arange(hits) + 0.5 + 0.02 * rng.standard_normal(hits)) * SHAFT_HZ / BEARING_HZ
    load = 1.0 + 0.45 * np.cos(2.0 * np.pi * at_turn)  # the pit is pressed harder once a turn
    height_g = 2.4 * load * rng.lognormal(0.0, 0.28, hits)
    for turn, height in zip(at_turn, height_g, strict=True):
        exact = float(np.interp(turn, turns, np.arange(frames)))
        frame = int(exact)
        late_s = (frame + 1 - exact) / PUMP_HZ  # start between two samples
        ring = np.sin(2.0 * np.pi * 3100.0 * (ring_t + late_s)) + 0.4 * np.sin(
            2.0 * np.pi * 4350.0 * (ring_t + late_s)
        )
        out[frame + 1 : frame + 1 + ring.size] += height * np.exp(-(ring_t + late_s) / 0.0016) * ring
    out[: out.size - frames] += out[frames:]
    return out[:frames]


def _flow_noise(rng: np.random.Generator, frames: int, swell: Signal) -> Signal:
    """Water through the housing: noise from 300 Hz to 4 kHz, 0.12 g rms [g]."""
    hz = np.fft.rfftfreq(frames, 1.0 / PUMP_HZ)
    shape = (hz / 300.0) ** 2 / (1.0 + (hz / 300.0) ** 2) / np.sqrt(1.0 + (hz / 4000.0) ** 4)
    noise = np.fft.irfft(np.fft.rfft(rng.standard_normal(frames)) * shape, frames)
    return np.asarray(0.12 * noise / np.std(noise) * swell)


# ---- writing -----------------------------------------------------------------------------------------------


def _faded(volts: Signal, sample_rate_hz: int, in_s: float, out_s: float) -> Signal:
    """The signal with raised-cosine ends, so that it starts and ends at rest."""
    gain = np.ones(volts.shape[0])
    for seconds, edge in ((in_s, gain), (out_s, gain[::-1])):
        count = round(seconds * sample_rate_hz)
        edge[:count] = 0.5 - 0.5 * np.cos(np.pi * np.arange(count) / count)
    return volts * (gain if volts.ndim == 1 else gain[:, None])


def samples_24(volts: Signal, full_scale_v: float) -> NDArray[np.int32]:
    """24-bit samples in the upper bits of int32, as libsndfile takes them."""
    steps = np.rint(volts / full_scale_v * 2.0**23)
    if np.max(np.abs(steps)) >= 2.0**23:
        raise ValueError("the signal is above full scale")
    return np.asarray(steps.astype(np.int32) << 8)


def write(folder: Path, entry: dict[str, Any], volts: Signal, sample_rate_hz: int) -> Path:
    """Write one recording with its title and full scale; the path."""
    path = folder / str(entry["file"])
    full_scale_v = parse_full_scale(entry["full_scale"]).volts
    with soundfile.SoundFile(path, "w", sample_rate_hz, volts.shape[1], "PCM_24", format="FLAC") as file:
        file.title = entry["title"]
        file.comment = f"full scale {entry['full_scale']}"
        file.license = entry["licence"]
        file.write(samples_24(volts, full_scale_v))
    return path


def main() -> int:
    """Make all three recordings."""
    parser = argparse.ArgumentParser(description="make the demo's recordings")
    parser.add_argument("--out", type=Path, default=HERE, help="folder to write to (this one)")
    folder: Path = parser.parse_args().out
    origin = read_origin()
    spoken = speech(origin["announcement.flac"]["text"], ANNOUNCEMENT_HZ)
    for name, volts, rate in (
        ("announcement.flac", announcement(spoken), ANNOUNCEMENT_HZ),
        ("guitar-phrase.flac", guitar_phrase(), GUITAR_HZ),
        ("bilge-pump.flac", bilge_pump(), PUMP_HZ),
    ):
        path = write(folder, origin[name], volts, rate)
        print(
            f"{name}: {volts.shape[0] / rate:.2f} s, {volts.shape[1]} ch, peak {np.max(np.abs(volts)):.3f} V,"
            f" {path.stat().st_size / 1000:.0f} kB"
        )
    return 0


if __name__ == "__main__":
    sys.exit(main())
