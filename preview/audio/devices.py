"""Sound devices, through PortAudio. The library is loaded on first use, so that a machine without it runs."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Literal

from preview.errors import DeviceError

__all__ = [
    "Device",
    "all_devices",
    "find_input",
    "find_output",
    "installed",
    "library",
    "output_devices",
    "plain",
    "refresh",
    "table",
]


@dataclass(frozen=True, slots=True)
class Device:
    """A sound device. Kept by name and host API, as its number changes when others come and go."""

    name: str
    """Its name."""
    host_api: str
    """The system interface that offers it."""
    max_output_channels: int
    """Most channels it plays."""
    default_sample_rate_hz: float
    """The rate it prefers [Hz]."""
    is_default: bool
    """Whether the system plays through it by default."""
    max_input_channels: int = 0
    """Most channels it records."""
    is_default_input: bool = False
    """Whether the system records from it by default."""


def library() -> Any:
    """The sounddevice module; raises DeviceError where it or PortAudio is missing."""
    try:
        import sounddevice
    except OSError as error:
        raise DeviceError(
            "the audio library PortAudio is not installed",
            "Debian and Ubuntu: apt install libportaudio2; macOS: brew install portaudio",
        ) from error
    except ImportError as error:
        raise DeviceError(
            "the Python package sounddevice is not installed", "pip install sounddevice"
        ) from error
    return sounddevice


def installed() -> bool:
    """Whether the audio library is there."""
    try:
        library()
    except DeviceError:
        return False
    return True


def table() -> tuple[tuple[int, Device], ...]:
    """Every device with its present number."""
    sounddevice = library()
    try:
        apis = sounddevice.query_hostapis()
        played, recorded = (_default(sounddevice, kind) for kind in ("output", "input"))
        return tuple(
            (
                row["index"],
                Device(
                    name=row["name"],
                    host_api=apis[row["hostapi"]]["name"],
                    max_output_channels=row["max_output_channels"],
                    default_sample_rate_hz=row["default_samplerate"],
                    is_default=row["index"] == played,
                    max_input_channels=row["max_input_channels"],
                    is_default_input=row["index"] == recorded,
                ),
            )
            for row in sounddevice.query_devices()
        )
    except sounddevice.PortAudioError as error:
        raise DeviceError(f"the audio devices cannot be listed: {plain(error)}") from error


def _default(sounddevice: Any, kind: str) -> int:
    try:
        return int(sounddevice.query_devices(kind=kind)["index"])
    except sounddevice.PortAudioError:  # there is no default
        return -1


def all_devices() -> tuple[Device, ...]:
    """Every device; empty where there is none. DeviceError without the library."""
    return tuple(device for _, device in table())


def output_devices() -> tuple[Device, ...]:
    """Every device that can play; empty where there is none. DeviceError without the library."""
    return tuple(device for device in all_devices() if device.max_output_channels > 0)


def refresh() -> None:
    """Look for devices anew. Every stream must be closed before."""
    sounddevice = library()
    try:
        # The package has no public way to make PortAudio look again.
        sounddevice._terminate()
        sounddevice._initialize()
    except sounddevice.PortAudioError as error:
        raise DeviceError(f"the audio system does not start: {plain(error)}") from error


def find_output(text: str) -> Device:
    """The device of that name, or the only one whose ``host API: name`` contains the text in any case."""
    return _find(text, output_devices(), "output")


def find_input(text: str) -> Device:
    """The input device of that name, found as ``find_output`` finds one."""
    return _find(text, tuple(device for device in all_devices() if device.max_input_channels > 0), "input")


def _find(text: str, devices: tuple[Device, ...], kind: Literal["input", "output"]) -> Device:
    folded = text.casefold()
    for match in (
        [d for d in devices if d.name == text or f"{d.host_api}: {d.name}" == text],
        [d for d in devices if d.name.casefold() == folded],
        [d for d in devices if folded in f"{d.host_api}: {d.name}".casefold()],
    ):
        if len(match) == 1 or (match and all(d.name == match[0].name for d in match)):
            return match[0]
        if match:
            raise DeviceError(
                f"{kind} device {text}: several fit", "; ".join(f"{d.host_api}: {d.name}" for d in match)
            )
    names = ", ".join(d.name for d in devices) or "none"
    raise DeviceError(f"{kind} device {text}: there is none of that name", f"there is {names}")


def plain(error: BaseException) -> str:
    """The library's message without its code."""
    text = str(error.args[0]) if error.args else str(error)
    return text.split(" [PaErrorCode")[0]
