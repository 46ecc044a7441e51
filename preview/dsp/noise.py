"""Noise in the running circuit: every resistor's, every op-amp's, with the covariance that the circuit gives it.

White noise in a linear circuit leaves its states, after a step, scattered with a covariance that is an integral over
the step [VanLoan1978]. Adding numbers of that covariance to the states, and to the output's mean, in every step gives
the exact spectrum, however stiff the circuit. The numbers are evenly distributed; what the decimator passes is the
sum of many of them. The 1/f parts of the op-amps vary slowly and enter as voltages and currents held for a few steps.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import expm

from preview.circuit.parts import PartKind
from preview.dsp.macromodel import MacroModel
from preview.dsp.noise_kernels import fill_noise
from preview.values.noise import NoiseSetting

__all__ = ["NoiseSource"]

Real = NDArray[np.float64]

BOLTZMANN_J_PER_K = 1.380649e-23
"""Exact in the SI of 2019 [J/K]."""
UPDATES_PER_FRAME = 4
"""Values of the 1/f parts in a frame."""
SECTIONS_PER_DECADE = 2
LOWEST_HZ = 0.1
"""Where the 1/f parts stop rising towards 0 Hz [Hz]."""


class NoiseSource:
    """The noise of one circuit at one set of values.

    Parameters
    ----------
    model : MacroModel
        The circuit.
    values : ndarray, shape (branches,)
        Its values.
    setting : NoiseSetting
        Gain and seed.
    factor : int
        Steps in a frame.
    """

    def __init__(self, model: MacroModel, values: Real, setting: NoiseSetting, factor: int) -> None:
        self._seed, self.hold = setting.seed, max(1, factor // UPDATES_PER_FRAME)
        gain = 10.0 ** (setting.gain_db / 20.0)
        A, columns = model.noise_inputs(values)
        kelvin = model.netlist.temperature_degc + 273.15
        white, slow, levels = [], [], []
        rate_hz = 1.0 / (model.step_s * self.hold)
        for branch in model.netlist.branches:
            if branch.kind is PartKind.RESISTOR:
                column = columns.between(branch.a, branch.b)
                white.append(column * math.sqrt(4.0 * BOLTZMANN_J_PER_K * kelvin / branch.value))
        for i, site in enumerate(model.sites):
            m = site.model
            for column, density, corner_hz in (
                (columns.at_input(i), m.noise_v_rthz, m.noise_corner_hz),
                (columns.drawn(site.plus), m.noise_a_rthz, m.noise_current_corner_hz),
                (columns.drawn(site.minus), m.noise_a_rthz, m.noise_current_corner_hz),
            ):
                if density > 0.0:
                    white.append(column * density)
                    if corner_hz > 0.0:
                        slow.append(column)
                        levels.append(density * math.sqrt(corner_hz))
        size = len(A)
        scattered = np.array(white).reshape(-1, size).T * math.sqrt(
            0.5 / model.step_s
        )  # a step is the unit of time
        self._white = gain * _root(_covariance(A, scattered))
        self._slow = gain * _held(A, np.array(slow).reshape(-1, size).T)
        poles_hz = LOWEST_HZ * 10.0 ** (
            np.arange(0, math.log10(rate_hz / 2 / LOWEST_HZ), 1.0 / SECTIONS_PER_DECADE)
        )
        self._poles = np.exp(-2.0 * np.pi * poles_hz / rate_hz)
        self._zeros = np.exp(-2.0 * np.pi * poles_hz * 10.0 ** (0.5 / SECTIONS_PER_DECADE) / rate_hz)
        # at 1 kHz the sections give a density of 1/sqrt(f) of white noise of density sqrt(2 / rate)
        z = np.exp(-2j * np.pi * 1e3 / rate_hz)
        there = abs(np.prod((1.0 - self._zeros * z) / (1.0 - self._poles * z))) * math.sqrt(2.0 / rate_hz)
        self._levels = np.array(levels) / (there * math.sqrt(1e3))

    def take_over(self, memory: Real | None, channels: int) -> Real:
        """The sections' state for so many channels: the given one, where it fits."""
        shape = (channels, len(self._levels), len(self._poles) + 1, 2)
        return memory if memory is not None and memory.shape == shape else np.zeros(shape)

    def fill(self, channel: int, at: int, steps: int, memory: Real, result: Real) -> None:
        """Noise of some steps of one channel, see ``noise_kernels.fill_noise``."""
        fill_noise(
            self._seed,
            channel,
            at,
            steps,
            self.hold,
            self._white,
            self._slow,
            self._levels,
            self._poles,
            self._zeros,
            memory,
            result,
        )


def _covariance(A: Real, B: Real) -> Real:
    """Integral of ``e^(A s) B B' e^(A' s)`` over s from 0 to 1 [VanLoan1978], by doubling from a short time."""
    size = len(A)
    doublings = max(0, math.ceil(math.log2(max(float(np.abs(A).sum(axis=1).max(initial=0.0)), 1e-300) / 0.5)))
    h = 2.0**-doublings
    block = np.zeros((2 * size, 2 * size))
    block[:size, :size], block[:size, size:], block[size:, size:] = -A, B @ B.T, A.T
    e = expm(block * h)
    phi = e[size:, size:].T
    covariance = phi @ e[:size, size:]
    for _ in range(doublings):
        covariance = covariance + phi @ covariance @ phi.T
        phi = phi @ phi
    return np.asarray(0.5 * (covariance + covariance.T))


def _root(covariance: Real) -> Real:
    """A matrix whose square is the covariance."""
    scale = np.sqrt(np.maximum(np.diag(covariance), 1e-300))
    values, vectors = np.linalg.eigh(covariance / np.outer(scale, scale))
    return np.asarray(scale[:, None] * vectors * np.sqrt(np.maximum(values, 0.0)))


def _held(A: Real, B: Real) -> Real:
    """Integral of ``e^(A s) B`` over s from 0 to 1."""
    size, count = B.shape
    block = np.zeros((size + count, size + count))
    block[:size, :size], block[:size, size:] = A, B
    return np.asarray(expm(block)[:size, size:])
