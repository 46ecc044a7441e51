"""What the desk is connected to: the input, the output node, the sound device, the mute. No screen in here."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING

from preview.circuit.nodes import OUT
from preview.engine.messages import (
    Command,
    DeviceList,
    DeviceRow,
    InputKind,
    OpenFile,
    Recover,
    RescanDevices,
    SetDevice,
    SetHeardChannels,
    SetMute,
    Snapshot,
    UseLive,
    UseSignal,
)
from preview.errors import AudioFileError, printable
from preview.session import Session
from preview.ui.asking import Choice, Menu, Outcome, Question
from preview.ui.changes import with_input_of
from preview.ui.link import EngineLink
from preview.ui.words import kilohertz
from preview.values.stimulus import STIMULUS_EXAMPLES, Waveform, parse_stimulus

if TYPE_CHECKING:
    from preview.ui.desk import Desk

__all__ = ["Connections"]

_FILE, _LIVE, _DEFAULT = "\0file", "\0live", "\0default"
"""Answers that no signal and no device can have for a name."""


class Connections:
    """The actions of input, output and device."""

    def __init__(self, desk: Desk) -> None:
        self._desk = desk
        self.devices: DeviceList | None = None
        """The devices that were found last."""
        self._coming: Session | None = None
        self._device: str | None = None
        """The device that was chosen here, by the answer; None where none was."""

    def resume(self, link: EngineLink) -> None:
        """What a new engine must be told of its surroundings."""
        snapshot = self._desk.snapshot
        if self._device is not None:
            link.send(_set_device(self._device))
        if snapshot is not None and snapshot.heard_channels:
            link.send(SetHeardChannels(snapshot.heard_channels))
        if snapshot is not None and snapshot.muted and snapshot.fault is None:
            link.send(SetMute(True))

    def take(self, snapshot: Snapshot) -> None:
        """The newest word of the engine: an input that was asked for is the session's once it is there."""
        coming = self._coming
        if coming is None:
            return
        kind = InputKind.LIVE if coming.live else InputKind.SIGNAL if coming.stimulus else InputKind.FILE
        named = coming.audio is None or snapshot.input_name == coming.audio.name
        if snapshot.input_kind is kind and named:
            self._coming = None
            desk = self._desk
            desk.session = with_input_of(desk.session, coming)
            desk.overview = desk.marks = desk.node_peaks = None
            desk.listening.region = None

    # ---- input ----

    def use(self, command: Command, coming: Session) -> None:
        """Ask the engine for another input; the session follows when it is there."""
        self._coming = coming
        self._desk.link.send(command)

    def do_input(self) -> Menu:
        """Choose what is heard: a recording, a test signal, or live input."""
        rows = [Choice(_FILE, "a recording ...", "type the path of an audio file")]
        rows += [
            Choice(wave, f"{wave} ...", f"a test signal such as {STIMULUS_EXAMPLES[wave]}")
            for wave in Waveform
        ]
        rows.append(Choice(_LIVE, "live input", "the sound device's input; it begins muted"))
        session = self._desk.session
        now = _LIVE if session.live else session.stimulus.waveform if session.stimulus else _FILE
        return Menu("Input", rows, self._input_chosen, now=now)

    def _input_chosen(self, answer: str) -> Outcome:
        if answer == _FILE:
            return self._ask_file()
        if answer == _LIVE:
            coming = replace(self._desk.session, audio=None, stimulus=None, live=True, live_device=None)
            self.use(UseLive(None), coming)
            keys = self._desk.keys
            return f"live input begins muted: keep the volume low, then {keys.shown('mute')} lets it be heard"
        return self._ask_signal(Waveform(answer))

    def _ask_file(self) -> Question:
        def path_of(text: str) -> Path:
            path = Path(text.strip()).expanduser()
            if not path.is_file():
                what = "a folder" if path.is_dir() else "no such file"
                raise AudioFileError(f"{path}: {what}", "the path of a recording")
            return path

        def take(text: str) -> str:
            path = path_of(text)
            coming = replace(self._desk.session, audio=path, stimulus=None, live=False, live_device=None)
            self.use(OpenFile(path), coming)
            return f"opening {printable(path.name)}"

        now = str(self._desk.session.audio or "none")
        return Question("Recording", "The path of an audio file", now, lambda text: str(path_of(text)), take)

    def _ask_signal(self, waveform: Waveform) -> Question:
        def take(text: str) -> str:
            stimulus = parse_stimulus(text)
            coming = replace(self._desk.session, audio=None, stimulus=stimulus, live=False, live_device=None)
            self.use(UseSignal(stimulus), coming)
            return f"test signal {stimulus.text}"

        session = self._desk.session
        now = session.stimulus.text if session.stimulus is not None else "none"
        about = f"In volts at the input, such as {STIMULUS_EXAMPLES[waveform]}"
        return Question("Test signal", about, now, lambda text: parse_stimulus(text).text, take)

    def do_mute(self) -> str:
        """Silence the device while everything runs, and back."""
        snapshot = self._desk.snapshot
        if snapshot is not None and snapshot.fault is not None:
            self._desk.link.send(Recover())
            return "the circuit starts from rest"
        muted = snapshot is not None and snapshot.muted
        self._desk.link.send(SetMute(not muted))
        return "heard again" if muted else "muted: everything runs on, the meters read"

    # ---- output ----

    def do_output(self) -> Outcome:
        """Choose the node that is listened to."""
        session = self._desk.session
        nodes = (OUT, *session.stage.outputs)
        if len(nodes) == 1:
            return "this stage has one output"

        def chosen(node: str) -> str:
            self._desk.change(replace(self._desk.session, output=node))
            return f"listening to {node}"

        about = {OUT: "the stage's output"}
        return Menu(
            "Listen to",
            [Choice(n, n, about.get(n, "another output")) for n in nodes],
            chosen,
            now=session.output,
        )

    def do_channels(self) -> Outcome:
        """Choose which channels of the input are heard."""
        snapshot = self._desk.snapshot
        if snapshot is None or snapshot.channels < 3:
            return "every channel is heard"
        pairs = [(n, min(n + 1, snapshot.channels - 1)) for n in range(0, snapshot.channels, 2)]
        rows = [Choice(f"{a} {b}", f"channels {a + 1} and {b + 1}") for a, b in pairs]

        def chosen(answer: str) -> str:
            channels = tuple(int(number) for number in answer.split())
            self._desk.link.send(SetHeardChannels(channels))
            return f"heard: channels {' and '.join(str(n + 1) for n in channels)}"

        now = " ".join(str(n) for n in snapshot.heard_channels)
        return Menu("Channels that are heard", rows, chosen, now=now)

    def hear_devices(self, found: DeviceList) -> str:
        """The devices that there are now."""
        self.devices = found
        if found.trouble:
            return found.trouble
        count = sum(row.output_channels > 0 for row in found.devices)
        return f"{count} output devices; {self._desk.keys.shown('device')} chooses one"

    def do_device(self) -> Outcome:
        """Choose the sound device; looks for those that were plugged in since."""
        self._desk.link.send(RescanDevices())
        if self.devices is None:
            return "looking for sound devices"
        rows = [Choice(_DEFAULT, "default", "the device that the system plays through")]
        rows += [_device_row(row) for row in self.devices.devices if row.output_channels > 0]

        def chosen(name: str) -> str:
            self._device = name
            self._desk.link.send(_set_device(name))
            return f"to {'the default device' if name == _DEFAULT else printable(name)}"

        snapshot = self._desk.snapshot
        return Menu("Sound device", rows, chosen, now=snapshot.output_name if snapshot else "")


def _set_device(answer: str) -> SetDevice:
    return SetDevice(None if answer == _DEFAULT else answer)


def _device_row(row: DeviceRow) -> Choice:
    default = ", default" if row.default_output else ""
    about = f"{row.host_api}, {row.output_channels} channels, {kilohertz(row.sample_rate_hz)}{default}"
    return Choice(row.name, printable(row.name), about)
