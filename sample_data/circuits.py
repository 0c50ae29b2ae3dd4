"""Element values of the sample devices in; scattering parameters, node voltages and limiting out.

Every device is a network of R, L, C and one transconductance between named nodes. It is solved by nodal analysis:
Y v = i at each frequency, with a 50 Ω source at port 1 and 50 Ω at port 2, then the other way round. With an
open-circuit source voltage of 2 V the incident wave is 1 V, so S11 = v1 − 1 and S21 = v2 (Pozar, *Microwave
Engineering*, 4th ed., sec. 4.3).

An inductor has a series resistance that gives its unloaded Q at 21.4 MHz. Transistors are unilateral: the few
femtofarads of feedback of a cascode are left out, so S12 of an amplifier is zero. An amplifier limits by Rapp's law,
at each frequency for itself: at its collector, where it swings little on the skirts, or at its base, ahead of the
tuned circuit and so at every frequency alike.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Final, Literal, TypeAlias

import numpy as np
from numpy.typing import NDArray

__all__ = [
    "CIRCUITS",
    "DESIGN_HZ",
    "REFERENCE_OHM",
    "Circuit",
    "ComplexArray",
    "Element",
    "FloatArray",
    "Limiter",
    "limiting",
    "scattering",
    "solve",
]

FloatArray: TypeAlias = NDArray[np.float64]
ComplexArray: TypeAlias = NDArray[np.complex128]

REFERENCE_OHM: Final = 50.0
DESIGN_HZ: Final = 21.4e6
GROUND: Final = "0"
PORTS: Final = ("in", "out")


@dataclass(frozen=True)
class Element:
    """One part between two nodes: R in ohm, L in H with its unloaded Q at 21.4 MHz, C in F.

    A transconductance G in siemens draws its current out of node `b` for a voltage from node `a` to ground, so that
    a resistor from `b` to ground makes an inverting amplifier of it.
    """

    kind: Literal["R", "L", "C", "G"]
    a: str
    b: str
    value: float
    unloaded_q: float = math.inf


@dataclass(frozen=True)
class Limiter:
    """Where and how an amplifier limits: node, its greatest rms voltage, and Rapp's smoothness p."""

    node: str
    saturation_volts: float
    smoothness: float


@dataclass(frozen=True)
class Circuit:
    """A device between its ports "in" and "out"."""

    elements: tuple[Element, ...]
    limiter: Limiter | None = None

    @property
    def nodes(self) -> tuple[str, ...]:
        """Every node but ground, the two ports first."""
        named = dict.fromkeys(PORTS)
        named.update(dict.fromkeys(node for e in self.elements for node in (e.a, e.b) if node != GROUND))
        return tuple(named)


def _single_tuned_amplifier(
    *, bias_ohm: float, gm: float, inductor: tuple[float, float], trimmer: float, tap: tuple[float, float]
) -> tuple[Element, ...]:
    """Return a cascode whose collector tank is tapped down to the output by two capacitors."""
    henry, unloaded_q = inductor
    upper, lower = tap
    return (
        Element("C", "in", "base", 10e-9),
        Element("R", "base", GROUND, bias_ohm),
        Element("R", "base", GROUND, 1.5e3),
        Element("C", "base", GROUND, 12e-12),
        Element("G", "base", "collector", gm),
        Element("R", "collector", GROUND, 15e3),
        Element("C", "collector", GROUND, 1.8e-12),
        Element("L", "collector", GROUND, henry, unloaded_q),
        Element("C", "collector", GROUND, trimmer),
        Element("C", "collector", "out", upper),
        Element("C", "out", GROUND, lower),
    )


CIRCUITS: Final[Mapping[str, Circuit]] = {
    "first IF stage": Circuit(
        _single_tuned_amplifier(
            bias_ohm=62.0, gm=75e-3, inductor=(1.0e-6, 90.0), trimmer=17.5e-12, tap=(39e-12, 390e-12)
        ),
        Limiter("collector", saturation_volts=4.1, smoothness=1.5),
    ),
    "limiter stage": Circuit(
        _single_tuned_amplifier(
            bias_ohm=68.0, gm=0.28, inductor=(0.47e-6, 60.0), trimmer=21.4e-12, tap=(120e-12, 390e-12)
        ),
        Limiter("collector", saturation_volts=1.7, smoothness=3.0),
    ),
    "detector driver": Circuit(
        _single_tuned_amplifier(
            bias_ohm=56.0, gm=38.85e-3, inductor=(0.33e-6, 60.0), trimmer=15.9e-12, tap=(220e-12, 430e-12)
        ),
        Limiter("collector", saturation_volts=2.6, smoothness=2.0),
    ),
    "buffer amplifier": Circuit(
        _single_tuned_amplifier(
            bias_ohm=56.0, gm=30e-3, inductor=(0.33e-6, 60.0), trimmer=16.8e-12, tap=(220e-12, 430e-12)
        ),
        Limiter("collector", saturation_volts=2.6, smoothness=2.0),
    ),
    "second IF stage": Circuit(
        _single_tuned_amplifier(
            bias_ohm=62.0, gm=75e-3, inductor=(0.82e-6, 80.0), trimmer=23.1e-12, tap=(47e-12, 390e-12)
        ),
        Limiter("collector", saturation_volts=3.6, smoothness=1.8),
    ),
    "preamplifier": Circuit(
        _single_tuned_amplifier(
            bias_ohm=62.0, gm=50e-3, inductor=(0.47e-6, 60.0), trimmer=22.0e-12, tap=(120e-12, 390e-12)
        ),
        Limiter("base", saturation_volts=25e-3, smoothness=1.2),
    ),
    "mixer amplifier": Circuit(
        _single_tuned_amplifier(
            bias_ohm=62.0, gm=35e-3, inductor=(0.47e-6, 60.0), trimmer=22.0e-12, tap=(120e-12, 390e-12)
        ),
        Limiter("base", saturation_volts=30e-3, smoothness=1.2),
    ),
    "oscillator buffer": Circuit(
        _single_tuned_amplifier(
            bias_ohm=56.0, gm=45e-3, inductor=(0.47e-6, 60.0), trimmer=4.8e-12, tap=(150e-12, 390e-12)
        ),
        Limiter("collector", saturation_volts=4.0, smoothness=2.0),
    ),
    "third IF stage": Circuit(
        _single_tuned_amplifier(
            bias_ohm=62.0, gm=0.18, inductor=(0.33e-6, 60.0), trimmer=16.8e-12, tap=(220e-12, 430e-12)
        ),
        Limiter("collector", saturation_volts=7.0, smoothness=3.0),
    ),
    "narrow stage": Circuit(
        _single_tuned_amplifier(
            bias_ohm=68.0, gm=14e-3, inductor=(0.47e-6, 110.0), trimmer=64.0e-12, tap=(56e-12, 680e-12)
        ),
        Limiter("collector", saturation_volts=5.0, smoothness=2.0),
    ),
    "converter stage": Circuit(
        _single_tuned_amplifier(
            bias_ohm=62.0, gm=60e-3, inductor=(0.47e-6, 70.0), trimmer=34.5e-12, tap=(100e-12, 390e-12)
        ),
        Limiter("collector", saturation_volts=5.0, smoothness=2.0),
    ),
    # The same stage just after switching on: less current, and a tank that has yet to settle.
    "converter stage, cold": Circuit(
        _single_tuned_amplifier(
            bias_ohm=62.0, gm=54e-3, inductor=(0.47e-6, 70.0), trimmer=35.1e-12, tap=(100e-12, 390e-12)
        ),
        Limiter("collector", saturation_volts=5.0, smoothness=2.0),
    ),
    "post-mixer filter": Circuit(
        (
            Element("C", "in", "first", 20.8e-12),
            Element("L", "first", GROUND, 0.68e-6, 150.0),
            Element("C", "first", GROUND, 58.6e-12),
            Element("C", "first", "middle", 2.0e-12),
            Element("L", "middle", GROUND, 0.68e-6, 150.0),
            Element("C", "middle", GROUND, 77.3e-12),
            Element("C", "middle", "last", 2.0e-12),
            Element("L", "last", GROUND, 0.68e-6, 150.0),
            Element("C", "last", GROUND, 59.1e-12),
            Element("C", "last", "out", 20.8e-12),
        )
    ),
    "discriminator network": Circuit(
        (
            Element("R", "in", "feed", 33.0),
            Element("C", "feed", "tank", 10e-12),
            Element("L", "tank", GROUND, 0.22e-6, 100.0),
            Element("C", "tank", GROUND, 78.3e-12),
            Element("C", "tank", "tap", 220e-12),
            Element("C", "tap", GROUND, 620e-12),
            Element("R", "tap", "out", 4.7),
        )
    ),
}


def _admittance(element: Element, omega: FloatArray) -> ComplexArray:
    """Return the admittance of an R, L or C at each angular frequency."""
    if element.kind == "R":
        return np.full(omega.shape, 1.0 / element.value, dtype=np.complex128)
    if element.kind == "C":
        return np.asarray(1j * omega * element.value, dtype=np.complex128)
    series_ohm = 2.0 * math.pi * DESIGN_HZ * element.value / element.unloaded_q
    return np.asarray(1.0 / (series_ohm + 1j * omega * element.value), dtype=np.complex128)


def _nodal_matrix(circuit: Circuit, frequency_hz: FloatArray) -> ComplexArray:
    """Return the nodal admittances with 50 Ω across both ports, (n, nodes, nodes)."""
    index = {node: i for i, node in enumerate(circuit.nodes)}
    omega = 2.0 * np.pi * frequency_hz
    matrix = np.zeros((frequency_hz.size, len(index), len(index)), dtype=np.complex128)
    for element in circuit.elements:
        if element.kind == "G":
            matrix[:, index[element.b], index[element.a]] += element.value
            continue
        y = _admittance(element, omega)
        ends = [index[node] for node in (element.a, element.b) if node != GROUND]
        for end in ends:
            matrix[:, end, end] += y
        if len(ends) == len(PORTS):
            matrix[:, ends[0], ends[1]] -= y
            matrix[:, ends[1], ends[0]] -= y
    for port in PORTS:
        matrix[:, index[port], index[port]] += 1.0 / REFERENCE_OHM
    return matrix


def solve(circuit: Circuit, frequency_hz: FloatArray) -> dict[str, ComplexArray]:
    """Return every node voltage for an incident wave of 1 V at port 1, with port 2 matched; each (n,)."""
    matrix = _nodal_matrix(circuit, frequency_hz)
    current = np.zeros((len(circuit.nodes), 1), dtype=np.complex128)
    current[0, 0] = 2.0 / REFERENCE_OHM
    volts = np.linalg.solve(matrix, current)[..., 0]
    return {node: np.asarray(volts[:, i], dtype=np.complex128) for i, node in enumerate(circuit.nodes)}


def scattering(circuit: Circuit, frequency_hz: FloatArray) -> ComplexArray:
    """Return the small-signal scattering parameters in 50 Ω, (2, 2, n)."""
    matrix = _nodal_matrix(circuit, frequency_hz)
    currents = np.zeros((len(circuit.nodes), 2), dtype=np.complex128)
    currents[0, 0] = currents[1, 1] = 2.0 / REFERENCE_OHM
    ports = np.moveaxis(np.linalg.solve(matrix, currents)[:, :2, :], 0, -1)
    return np.asarray(ports - np.eye(2)[..., np.newaxis], dtype=np.complex128)


def limiting(circuit: Circuit, frequency_hz: FloatArray, incident_volts: FloatArray) -> FloatArray:
    """Return the factor, at most 1, by which S21 falls when the incident wave at port 1 has this rms voltage, (n,).

    Rapp's law for the fundamental: 1/(1 + (v/Vs)^2p)^(1/2p), with v the voltage of the limiting node in the linear
    circuit (C. Rapp, Proc. 2nd European Conf. on Satellite Communications, 1991).
    """
    if circuit.limiter is None:
        return np.ones_like(frequency_hz)
    limiter = circuit.limiter
    swing = np.abs(solve(circuit, frequency_hz)[limiter.node]) * incident_volts / limiter.saturation_volts
    power = 2.0 * limiter.smoothness
    return np.asarray((1.0 + swing**power) ** (-1.0 / power), dtype=np.float64)
