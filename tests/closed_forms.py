"""Gain of every bundled stage as its textbook formula, op-amps without limits: ``GAIN[name](s, **values)``.

Written by hand from the schematics and handbook formulas, without the network room: S. Franco, Design with
Operational Amplifiers and Analog Integrated Circuits, chapters 3 and 4, for the filters; the rest are one or two
node equations each.
"""

from __future__ import annotations

from collections.abc import Callable

__all__ = ["GAIN"]


def par(*z: complex) -> complex:
    """Impedances side by side."""
    return 1 / sum(1 / x for x in z)


def inverting_low_pass(s, R1, R2, C1):
    return -(R2 / R1) / (1 + s * R2 * C1)


def inverting_high_pass(s, R1, R2, C1):
    return -s * R2 * C1 / (1 + s * R1 * C1)


def inverting_band_pass(s, R1, R2, C1, C2):
    return -s * R2 * C1 / ((1 + s * R1 * C1) * (1 + s * R2 * C2))


def non_inverting_gain(s, R1, R2, R3, C1, C2):
    return 1 + s * R2 * C1 / ((1 + s * R3 * C1) * (1 + s * R2 * C2))


def rc_low_pass(s, R1, C1):
    return 1 / (1 + s * R1 * C1)


def rc_high_pass(s, R1, C1):
    return s * R1 * C1 / (1 + s * R1 * C1)


def rc_low_pass_gain(s, R1, C1, R2, R3):
    return (1 + R3 / R2) / (1 + s * R1 * C1)


def rc_high_pass_gain(s, R1, C1, R2, R3):
    return (1 + R3 / R2) * s * R1 * C1 / (1 + s * R1 * C1)


def inverting_gain(s, R1, R2, R3):
    return -R2 / R1


def summing(s, R1, R2, R3, R4, R5):
    return -R5 / R1


def difference(s, R1, R2, R3, R4):
    return R4 / (R3 + R4) * (1 + R2 / R1)


def instrumentation_amplifier(s, R1, R2, R3, R4, R5, R6, R7, R8, R9):
    first, second = 1 + R2 / R1, -R3 / R1
    return first * R5 / (R4 + R5) * (1 + R7 / R6) - second * R7 / R6


def integrator(s, R1, R2, R3, C1):
    return -(R2 / R1) / (1 + s * R2 * C1)


def charge_amplifier(s, R1, R2, C1, C2, C3):
    return -s * C1 * R2 / ((1 + s * R1 * (C1 + C3)) * (1 + s * R2 * C2))


def transimpedance(s, R1, R2, C1, C2):
    return -(R2 / R1) / (1 + s * R2 * C2)


def krc_low_pass(s, R1, R2, C1, C2, k=1.0):
    return k / (1 + s * (R1 * C2 + R2 * C2 + (1 - k) * R1 * C1) + s * s * R1 * R2 * C1 * C2)


def krc_high_pass(s, R1, R2, C1, C2, k=1.0):
    over = 1 + s * (R1 * C1 + R1 * C2 + (1 - k) * R2 * C2) + s * s * R1 * R2 * C1 * C2
    return k * s * s * R1 * R2 * C1 * C2 / over


def sallen_key_low_pass_gain(s, R1, R2, R3, R4, C1, C2):
    return krc_low_pass(s, R1, R2, C1, C2, 1 + R4 / R3)


def sallen_key_high_pass_gain(s, R1, R2, R3, R4, C1, C2):
    return krc_high_pass(s, R1, R2, C1, C2, 1 + R4 / R3)


def sallen_key_band_pass(s, R1, R2, R3, R4, R5, C1, C2):
    k = 1 + R5 / R4
    tap = 1 + 1 / (s * C2 * R2)  # volts at the first node for one volt at the second
    first = tap * (1 / R1 + 1 / R3 + s * C1) + 1 / R2 - k / R3
    return k / (R1 * first)


def multiple_feedback_low_pass(s, R1, R2, R3, C1, C2):
    w2 = 1 / (R2 * R3 * C1 * C2)
    return -(R3 / R1) * w2 / (s * s + s / C1 * (1 / R1 + 1 / R2 + 1 / R3) + w2)


def multiple_feedback_high_pass(s, R1, R2, C1, C2, C3):
    return -(C1 / C2) * s * s / (s * s + s * (C1 + C2 + C3) / (R2 * C2 * C3) + 1 / (R1 * R2 * C2 * C3))


def multiple_feedback_band_pass(s, R1, R2, R3, C1, C2):
    over = s * s + s * (C1 + C2) / (R3 * C1 * C2) + (1 / R1 + 1 / R2) / (R3 * C1 * C2)
    return -s / (R1 * C1) / over


def state_variable(s, R1, R2, R3, R4, R5, R6, R7, C1, C2):
    first, second = s * R6 * C1, s * R7 * C2
    share = (1 + R3 * (1 / R1 + 1 / R2)) * R5 / (R4 + R5)
    return -(R3 / R1) / (first * second + share * second + R3 / R2)


def state_variable_bp(s, R7, C2, **others):
    return -s * R7 * C2 * state_variable(s, R7=R7, C2=C2, **others)


def state_variable_hp(s, R6, C1, **others):
    return -s * R6 * C1 * state_variable_bp(s, R6=R6, C1=C1, **others)


def two_integrator_biquad(s, R1, R2, R3, R4, R5, R6, C1, C2):
    loop = R5 / R4 / (R6 * s * R3 * C2)
    return -(1 / R1) / (1 / R2 + s * C1 + loop)


def two_integrator_biquad_lp(s, R3, C2, **others):
    return -two_integrator_biquad(s, R3=R3, C2=C2, **others) / (s * R3 * C2)


def twin_t(s, R1, R2, R3, C1, C2, C34):
    """Short-circuit admittances of the two tees, seen from the far end: (to the input, own, to each foot)."""
    over_r = R1 + R2 + s * C34 * R1 * R2
    over_c = 1 + s * (C1 + C2) * R3
    forward = 1 / over_r + s * s * C1 * C2 * R3 / over_c
    own = (1 + s * C34 * R1) / over_r + s * C2 * (1 + s * C1 * R3) / over_c
    return forward, own, s * C34 * R1 / over_r, s * C2 / over_c


def twin_t_notch(s, R1, R2, R3, C1, C2, C3, C4):
    forward, own, _, _ = twin_t(s, R1, R2, R3, C1, C2, C3 + C4)
    return forward / own


def twin_t_notch_bootstrapped(s, R1, R2, R3, R4, R5, C1, C2, C3, C4):
    forward, own, foot_c, foot_r = twin_t(s, R1, R2, R3, C1, C2, C3 + C4)
    return forward / (own - R5 / (R4 + R5) * (foot_c + foot_r))


def twin_t_notch_gain(s, R1, R2, R3, R4, R5, C1, C2, C3, C4):
    forward, own, _, foot_r = twin_t(s, R1, R2, R3, C1, C2, C3 + C4)
    k = 1 + R5 / R4
    return k * forward / (own - k * foot_r)


def all_pass(s, R1, R2, R3, C1):
    return (1 + R2 / R1) / (1 + s * R3 * C1) - R2 / R1


def low_shelf(s, R1, R2, R3, C1):
    return 1 + par(R2, 1 / (s * C1)) / R3 if s else 1 + R2 / R3


def high_shelf(s, R1, R2, R3, C1):
    return (1 + s * (R2 + R3) * C1) / (1 + s * R3 * C1)


def riaa_replay(s, R1, R2, R3, R4, C1, C2, C3):
    z = R2 / (1 + s * R2 * C2) + R3 / (1 + s * R3 * C3)
    return 1 + s * C1 * z / (1 + s * C1 * R4)


def anti_alias(s, R1, R2, R3, R4, C1, C2, C3, C4):
    return krc_low_pass(s, R1, R2, C1, C2) * krc_low_pass(s, R3, R4, C3, C4)


def tone_control(s, R1, R2, R3, R4, R5, C1, C2, C3, P1a, P1b, P2a, P2b):
    """Two tees into the summing node, one behind each wiper."""
    bass_out, bass_in = R2 + par(P1a, 1 / (s * C2)), R1 + par(P1b, 1 / (s * C1))
    treble_out, treble_in = R5 + P2a, R4 + P2b
    bass = 1 / R3 / (1 / bass_in + 1 / bass_out + 1 / R3)
    treble = s * C3 / (1 / treble_in + 1 / treble_out + s * C3)
    return -(bass / bass_in + treble / treble_in) / (bass / bass_out + treble / treble_out)


def presence_bell(s, R1, R2, R3, R4, C1, C2, P1a, P1b):
    coil = R3 * (1 + s * R4 * C2) / (1 + s * R3 * C2)
    trap = coil + 1 / (s * C1)
    halves = 1 / P1a + 1 / P1b
    drop = 1 - halves / (
        halves + 1 / trap
    )  # volts from either input to the wiper, for one volt at the inputs
    return (1 + R2 * drop / P1b) / (1 + R1 * drop / P1a)


def microphone_gain(s, R1, R2, R3, R4, C1, C2, C3, P1b):
    shunt = par(R2, 1 / (s * C1))
    return shunt / (R1 + shunt) * (1 + par(R4, 1 / (s * C3)) / (R3 + P1b + 1 / (s * C2)))


def single_supply_gain(s, R1, R2, R3, R4, R5, R6, C1, C2, C3, C4):
    bias = R3 + par(R1, R2, 1 / (s * C2))
    return bias / (bias + 1 / (s * C1)) * (1 + R5 / (R4 + 1 / (s * C3))) * R6 / (R6 + 1 / (s * C4))


def soft_limiter(s, R1, R2, R3, D1, D2, D1leak, D2leak, D1junction, D2junction):
    """For signals too small to turn a diode on; D1 and D2 are its slope at 0 V."""
    pair = par(D1, D2, D1leak, D2leak, 1 / (s * (D1junction + D2junction)))
    return -par(R2, R3 + pair) / R1


def headphone_output(s, R1, R2, R3, R4, R5, C1):
    return (1 + par(R3, 1 / (s * C1)) / R2 if s else 1 + R3 / R2) * R5 / (R4 + R5)


Gain = Callable[..., complex]

GAIN: dict[str, Gain] = {
    "all-pass": all_pass,
    "anti-alias-fourth-order": anti_alias,
    "charge-amplifier": charge_amplifier,
    "de-emphasis-50us": inverting_low_pass,
    "de-emphasis-75us": inverting_low_pass,
    "difference": difference,
    "differentiator": inverting_band_pass,
    "headphone-output": headphone_output,
    "high-shelf": high_shelf,
    "instrumentation-amplifier": instrumentation_amplifier,
    "integrator": integrator,
    "inverting-band-pass": inverting_band_pass,
    "inverting-gain": inverting_gain,
    "inverting-high-pass": inverting_high_pass,
    "inverting-low-pass": inverting_low_pass,
    "low-shelf": low_shelf,
    "microphone-gain": microphone_gain,
    "multiple-feedback-band-pass": multiple_feedback_band_pass,
    "multiple-feedback-high-pass": multiple_feedback_high_pass,
    "multiple-feedback-low-pass": multiple_feedback_low_pass,
    "non-inverting-gain": non_inverting_gain,
    "pre-emphasis-50us": high_shelf,
    "pre-emphasis-75us": high_shelf,
    "presence-bell": presence_bell,
    "rc-high-pass": rc_high_pass,
    "rc-high-pass-gain": rc_high_pass_gain,
    "rc-low-pass": rc_low_pass,
    "rc-low-pass-gain": rc_low_pass_gain,
    "riaa-replay": riaa_replay,
    "riaa-replay-iec": riaa_replay,
    "sallen-key-band-pass": sallen_key_band_pass,
    "sallen-key-high-pass": krc_high_pass,
    "sallen-key-high-pass-gain": sallen_key_high_pass_gain,
    "sallen-key-low-pass": krc_low_pass,
    "sallen-key-low-pass-gain": sallen_key_low_pass_gain,
    "single-supply-gain": single_supply_gain,
    "soft-limiter": soft_limiter,
    "state-variable": state_variable,
    "state-variable:bp": state_variable_bp,
    "state-variable:hp": state_variable_hp,
    "summing": summing,
    "tone-control": tone_control,
    "transimpedance": transimpedance,
    "twin-t-notch": twin_t_notch,
    "twin-t-notch-bootstrapped": twin_t_notch_bootstrapped,
    "twin-t-notch-gain": twin_t_notch_gain,
    "two-integrator-biquad": two_integrator_biquad,
    "two-integrator-biquad:lp": two_integrator_biquad_lp,
}
"""Formula of each stage, and of each further output of it as ``name:output``."""
