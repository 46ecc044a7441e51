"""Commands of the desk that the player or the preparer carries out as they are."""

from __future__ import annotations

from preview.engine import messages
from preview.engine.bench import Bench
from preview.engine.messages import Command
from preview.engine.player import Player
from preview.engine.preparer import Preparer

__all__ = ["change_circuit", "change_playing"]


def change_circuit(command: Command, preparer: Preparer, bench: Bench) -> None:
    """Carry out a command about parts, circuits and candidates."""
    match command:
        case messages.SetPart(designator, value):
            preparer.set_part(designator, value)
        case messages.SetCircuit(netlist):
            preparer.set_circuit(netlist)
        case messages.SetQuality(quality):
            preparer.set_quality(quality)
        case messages.KeepCandidate(letter, netlist):
            preparer.keep(letter, netlist)
        case messages.SelectCandidate(letter):
            preparer.choose((letter,), bench.select(letter))
        case messages.DropCandidate(letter):
            preparer.drop(letter)
        case messages.ListenNull(None):
            preparer.choose((preparer.letter,), bench.select(preparer.letter))
        case messages.ListenNull((first, second)):
            preparer.choose((first, second), bench.listen_null(first, second))


def change_playing(command: Command, player: Player) -> None:
    """Carry out a command about what plays and how it is heard."""
    match command:
        case messages.SetFullScale(full_scale_v):
            player.set_full_scale(full_scale_v)
        case messages.Play():
            player.play()
        case messages.Pause():
            player.pause()
        case messages.Seek(frame):
            player.seek(frame)
        case messages.SetRegion(start, end):
            player.set_region(start, end)
        case messages.SetAtEnd(at_end):
            player.set_at_end(at_end)
        case messages.SetBypass(on):
            player.set_bypass(on)
        case messages.SetVolume(volume_db):
            player.set_volume(volume_db)
        case messages.SetMute(on):
            if not on and player.deck.fault is not None:
                player.recover()
            player.mute(on)
        case messages.SetHeardChannels(channels):
            player.choose_channels(channels)
        case messages.Recover():
            player.recover()
        case messages.ClearHolds():
            player.clear_holds()
