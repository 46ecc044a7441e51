"""The exact noise at the output: every source of it carried there by the adjoint network.

Resistors have their thermal noise, ``4 k T / R`` [Nyquist1928]; op-amps a voltage noise between their inputs and a
current noise at each, independent of each other, with power ``1 + corner / f`` times its white part; diodes shot
noise of what crosses the junction each way, ``2 q (I + 2 Is)`` [VanDerZiel1986], and the thermal noise of their series
resistance. Without a temperature of its own a part is at 300 K.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray

from preview.circuit.netlist import GND, Junction, Netlist
from preview.circuit.opamp_classes import shot_noise_a_rthz
from preview.circuit.parts import PartKind
from preview.errors import CircuitError
from preview.network.junctions import bias
from preview.network.mna import adjoint, nodal_equations
from preview.network.operating import operating_point, small_signal

__all__ = [
    "AUDIO_BAND_HZ",
    "BOLTZMANN_J_PER_K",
    "TEMPERATURE_K",
    "NoiseSource",
    "NoiseSpectrum",
    "NoiseTotal",
    "OutputNoise",
]

Complex = NDArray[np.complex128]
Real = NDArray[np.float64]

BOLTZMANN_J_PER_K = 1.380649e-23
"""Boltzmann constant, exact in the SI of 2019 [J/K]."""
TEMPERATURE_K = 300.0
"""Temperature of resistors, unless another is asked for [K]."""

AUDIO_BAND_HZ = (20.0, 20e3)
"""The band in which noise is summed, unless another is asked for [Hz]."""

NoiseKind = Literal["thermal", "voltage", "current +", "current -", "shot"]
"""``voltage``, ``current +`` and ``current -`` are an op-amp's, at its inputs."""

_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(8)
_PANELS_A_DECADE = 8
_MOST_HALVINGS = 40
_AGREEMENT = 1e-10
"""Share of the total by which a panel and its halves may differ."""


@dataclass(frozen=True, slots=True)
class NoiseSource:
    """Something in the circuit that makes noise."""

    designator: str
    """R1, U1, D1 ..."""
    kind: NoiseKind
    """What noise of it."""
    white: float
    """Power density of its white part [A^2/Hz, or V^2/Hz for ``voltage``]."""
    corner_hz: float = 0.0
    """Where its 1/f part is as large [Hz]."""


@dataclass(frozen=True, slots=True)
class NoiseSpectrum:
    """Noise at the output by frequency; f frequencies, k sources."""

    frequency_hz: Real
    """Frequencies [Hz], shape (f,)."""
    sources: tuple[NoiseSource, ...]
    """What makes it."""
    power_v2_per_hz: Real
    """Power density at the output that each makes [V^2/Hz], shape (f, k)."""
    gain: Real
    """Magnitude of the gain from the signal's source to the output, shape (f,)."""

    @property
    def output_v_rthz(self) -> Real:
        """Density at the output, everything together [V/sqrt(Hz)], shape (f,)."""
        return np.asarray(np.sqrt(self.power_v2_per_hz.sum(axis=1)), dtype=np.float64)

    @property
    def input_v_rthz(self) -> Real:
        """Density that a source without noise would have to bring [V/sqrt(Hz)]; inf where there is no gain."""
        with np.errstate(divide="ignore", invalid="ignore"):
            return np.asarray(self.output_v_rthz / self.gain, dtype=np.float64)


@dataclass(frozen=True, slots=True)
class NoiseTotal:
    """Noise at the output over a band."""

    band_hz: tuple[float, float]
    """The band [Hz]."""
    sources: tuple[NoiseSource, ...]
    """What makes it."""
    source_vrms: Real
    """What each makes alone [V rms], shape (k,)."""

    @property
    def output_vrms(self) -> float:
        """Everything together [V rms]."""
        return float(np.sqrt(np.sum(self.source_vrms**2)))


class OutputNoise:
    """The noise at the output of a circuit, around its operating point without a signal.

    Parameters
    ----------
    netlist : Netlist
        Checked circuit.
    temperature_k : float
        Temperature of the resistors [K].

    Raises
    ------
    CircuitError
        The circuit has no operating point.
    """

    def __init__(self, netlist: Netlist, *, temperature_k: float = TEMPERATURE_K) -> None:
        point = operating_point(netlist) if netlist.ports else None
        linear = small_signal(netlist, point)
        self._equations = nodal_equations(linear)
        self._pick = self._equations.incidence(linear.output_node, GND)
        ports = {p.designator: p for p in netlist.ports}
        entry = self._equations.incidence
        found: list[tuple[NoiseSource, Real]] = []
        thermal = 4.0 * BOLTZMANN_J_PER_K * temperature_k
        for branch in linear.branches:
            if branch.kind is not PartKind.RESISTOR:
                continue
            name, way = branch.designator, entry(branch.a, branch.b)
            port = ports.get(name)
            if point is not None and port is not None and isinstance(port.law, Junction):
                at = bias(port.law, point.volts[port.a] - point.volts[port.b])
                inside = 1.0 + at.junction_s * port.law.series_ohm
                shot = (shot_noise_a_rthz(at.crossing_a) / inside) ** 2
                series = thermal * port.law.series_ohm * at.conductance_s**2
                found += [(NoiseSource(name, "shot", shot), way), (NoiseSource(name, "thermal", series), way)]
            else:
                found.append((NoiseSource(name, "thermal", thermal / branch.value), way))
        for opamp in linear.opamps:
            name, model = opamp.designator, opamp.model
            difference = np.zeros_like(self._pick)
            difference[self._equations.opamp_currents[name]] = 1.0
            voltage = NoiseSource(name, "voltage", model.noise_v_rthz**2, model.noise_corner_hz)
            current = model.noise_a_rthz**2, model.noise_current_corner_hz
            found += [
                (voltage, difference),
                (NoiseSource(name, "current +", *current), entry(opamp.plus, GND)),
                (NoiseSource(name, "current -", *current), entry(opamp.minus, GND)),
            ]
        found = [(source, way) for source, way in found if source.white > 0.0 and way.any()]
        self.sources = tuple(source for source, _ in found)
        self._ways = np.array([way for _, way in found]).reshape(len(found), len(self._pick))

    def spectrum(self, frequency_hz: ArrayLike) -> NoiseSpectrum:
        """Noise at some frequencies above 0 Hz [Hz]."""
        f = np.atleast_1d(np.asarray(frequency_hz, dtype=np.float64))
        to_output = adjoint(self._equations, np.asarray(2j * np.pi * f, np.complex128), self._pick)
        gain = np.abs(to_output @ self._equations.drive)
        return NoiseSpectrum(f, self.sources, self._powers(f, to_output), gain)

    def total(self, low_hz: float = AUDIO_BAND_HZ[0], high_hz: float = AUDIO_BAND_HZ[1]) -> NoiseTotal:
        """Noise over a band, by Gauss-Legendre quadrature over the logarithm of frequency.

        Panels begin and end at the circuit's natural frequencies and are halved until they agree with their halves.

        Raises
        ------
        CircuitError
            It has no end: the circuit rings without loss.
        """
        edges = np.geomspace(low_hz, high_hz, 2 + int(_PANELS_A_DECADE * np.log10(high_hz / low_hz)))
        own = self._natural_frequencies_hz()
        edges = np.unique(np.concatenate([edges, own[(own > low_hz) & (own < high_hz)]]))
        low, high = edges[:-1], edges[1:]
        whole = self._integrals(low, high)
        power = np.zeros(len(self.sources))
        for _ in range(_MOST_HALVINGS):
            middle = np.sqrt(low * high)
            left, right = self._integrals(low, middle), self._integrals(middle, high)
            off = np.abs(left + right - whole).sum(axis=1)
            open_ = off > _AGREEMENT * (power.sum() + (left + right).sum())
            power += (left + right)[~open_].sum(axis=0)
            if not open_.any():
                return NoiseTotal((low_hz, high_hz), self.sources, np.sqrt(power))
            low, high = (np.concatenate([x[open_], y[open_]]) for x, y in ((low, middle), (middle, high)))
            whole = np.concatenate([left[open_], right[open_]])
        raise CircuitError(
            "the noise has no finite total: the circuit rings without loss",
            "give its inductors their winding resistance",
        )

    def _powers(self, f: Real, to_output: Complex) -> Real:
        """Power density of every source at the output [V^2/Hz], shape (f, k)."""
        white = np.array([source.white for source in self.sources])
        corner_hz = np.array([source.corner_hz for source in self.sources])
        made = white * (1.0 + corner_hz / f[:, None])
        return np.asarray(made * np.abs(to_output @ self._ways.T) ** 2, dtype=np.float64)

    def _integrals(self, low_hz: Real, high_hz: Real) -> Real:
        """Power over each of some panels [V^2], shape (panels, k)."""
        half = 0.5 * np.log(high_hz / low_hz)
        f = np.sqrt(low_hz * high_hz)[:, None] * np.exp(half[:, None] * _NODES)
        power = self.spectrum(f.ravel()).power_v2_per_hz.reshape(*f.shape, len(self.sources))
        return np.asarray(half[:, None] * np.einsum("pi,pik,i->pk", f, power, _WEIGHTS), dtype=np.float64)

    def _natural_frequencies_hz(self) -> Real:
        from scipy.linalg import eigvals

        poles = eigvals(-self._equations.static, self._equations.dynamic)
        return np.asarray(np.abs(poles[np.isfinite(poles)]) / (2.0 * np.pi), dtype=np.float64)
