"""How one sweep's figures are extracted: the plan that is made once and applied to any number of copies.

:class:`FigurePlan` holds what :mod:`benchtool.figures` decided; :class:`FigureBuilder` collects those decisions.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import Final, TypeAlias

import numpy as np

from benchtool.curves import Curve, Trace
from benchtool.fitting import fit_curve
from benchtool.model import Bound, ComplexArray, Figure, Finding, FloatArray, Kind, Sweep
from benchtool.noise import NoiseModel, estimate_noise
from benchtool.response import Passband, PassbandFigures
from benchtool.sheet import FIGURE_UNITS
from benchtool.units import format_si, to_db

__all__ = ["Extractor", "FigureBuilder", "FigurePlan", "SweepNoise", "Traces", "units_or_span"]

_FAR: Final = 50.0
"""A frequency this many times off is taken for a slip in its unit."""

Traces: TypeAlias = Mapping[str, Trace]
"""The traces of a sweep, or of copies of it, by the parameter: S11, S12, S21, S22."""
Extractor: TypeAlias = Callable[["FigurePlan", Traces, Mapping[str, FloatArray]], FloatArray]


class SweepNoise(Mapping[str, NoiseModel | None]):
    """Noise seen in each measured parameter of a sweep, found out when it is first asked for."""

    def __init__(self, sweep: Sweep) -> None:
        self._sweep = sweep
        self._seen: dict[str, NoiseModel | None] = {}

    def __getitem__(self, parameter: str) -> NoiseModel | None:
        if parameter not in self._sweep.measured:
            raise KeyError(parameter)
        if parameter not in self._seen:
            trace = self._sweep.s[int(parameter[1]) - 1, int(parameter[2]) - 1]
            self._seen[parameter] = estimate_noise(self._sweep.frequency_hz, trace)
        return self._seen[parameter]

    def __iter__(self) -> Iterator[str]:
        return iter(self._sweep.measured)

    def __len__(self) -> int:
        return len(self._sweep.measured)


@dataclass(frozen=True, eq=False)
class FigurePlan:
    """How the figures of one sweep are extracted.

    What lies beyond the passband is planned when it is first asked for, since most sweeps of a device serve to compare
    drives alone.
    """

    sweep: Sweep
    """The sweep that was planned on."""
    kind: Kind
    design_hz: float
    passband: Passband
    seen: PassbandFigures
    """Figures of that sweep."""
    design_curve: Curve
    noise: Mapping[str, NoiseModel | None]
    """Noise seen in each measured parameter."""
    collect: Callable[[], FigureBuilder]
    """Decides on all figures."""

    @cached_property
    def _built(self) -> FigureBuilder:
        return self.collect()

    @property
    def curves(self) -> Mapping[str, Sequence[Curve]]:
        """Every curve that an extractor takes its figure from, by the parameter."""
        return self._built.curves

    @property
    def entries(self) -> Sequence[Figure]:
        """The figures in the order they are shown, with their units and bounds but without values."""
        return self._built.entries

    @property
    def extractors(self) -> Mapping[str, Extractor | None]:
        """How each figure is extracted; None where it cannot be known, and one of `findings` says why."""
        return self._built.extractors

    @property
    def findings(self) -> Sequence[Finding]:
        """Doubts about the sweep that the planning came upon."""
        return self._built.findings

    def extract(self, s: ComplexArray | Traces) -> dict[str, FloatArray]:
        """Return each figure that can be known, (...,), from scattering parameters (..., 2, 2, n) at the device.

        In place of these, copies of the traces in use may be given in a form of their own. NaN stands where a copy does
        not show the figure (an edge that moved out of the sweep).
        """
        if isinstance(s, np.ndarray):
            traces: Traces = {f"S{i + 1}{j + 1}": s[..., i, j, :] for i in range(2) for j in range(2)}
        else:
            traces = s
        band = self.seen if s is self.sweep.s else self.passband.figures(traces["S21"])
        found = self._passband_figures(band)
        for key, extractor in self.extractors.items():
            if extractor is not None and key not in found:
                found[key] = extractor(self, traces, found)
        return {key: found[key] for key in self._known}

    @cached_property
    def _known(self) -> tuple[str, ...]:
        """Keys of the figures that can be known, in the order they are shown."""
        keys = [entry.key for entry in self.entries]
        return tuple(key for key in keys if self.extractors[key] is not None)

    def figures(self, s: ComplexArray) -> dict[str, Figure]:
        """Return the figures of one sweep, (2, 2, n), with values and bounds, without intervals."""
        values = self.extract(s)
        figures = {}
        for entry in self.entries:
            number = float(values[entry.key]) if entry.key in values else float("nan")
            value = number if np.isfinite(number) else None
            figures[entry.key] = Figure(
                entry.id,
                value,
                entry.unit,
                bound=entry.bound if value is not None else None,
                parameters=entry.parameters,
            )
        return figures

    def _passband_figures(self, found: PassbandFigures) -> dict[str, FloatArray]:
        band = self.passband
        lower = found.lower_edge if band.lower_inside else np.full_like(found.peak_gain, band.start_hz)
        upper = found.upper_edge if band.upper_inside else np.full_like(found.peak_gain, band.stop_hz)
        with np.errstate(divide="ignore", invalid="ignore"):
            centre = np.sqrt(lower * upper)
            loaded_q = centre / (upper - lower)
        gain, delay = self.design_curve.at(found.trace, self.design_hz)
        return {
            "gain": to_db(gain),
            "insertion_loss": -to_db(gain),
            "peak_gain": found.peak_gain,
            "peak_frequency": found.peak_frequency,
            "lower_edge": lower,
            "upper_edge": upper,
            "bandwidth": upper - lower,
            "centre_frequency": centre,
            "loaded_q": loaded_q,
            "group_delay": delay,
            "phase": np.degrees(np.angle(gain)),
        }


class FigureBuilder:
    """Collects the entries of a plan."""

    def __init__(self, sweep: Sweep, kind: Kind, noise: Mapping[str, NoiseModel | None]) -> None:
        self.sweep = sweep
        self.kind = kind
        self.noise = noise
        self.entries: list[Figure] = []
        self.extractors: dict[str, Extractor | None] = {}
        self.findings: list[Finding] = []
        self.curves: dict[str, list[Curve]] = {}

    def add(
        self,
        figure: str,
        extractor: Extractor | None,
        bound: Bound | None = None,
        parameters: Mapping[str, float | tuple[float, float]] | None = None,
    ) -> None:
        """Add a figure; an extractor of None means that it cannot be known. A figure that is there already stays."""
        entry = Figure(figure, None, FIGURE_UNITS[figure], bound=bound, parameters=parameters or {})
        if entry.key not in self.extractors:
            self.entries.append(entry)
            self.extractors[entry.key] = extractor

    def finding(self, code: str, message: str, advice: str) -> None:
        """Note a doubt about the sweep."""
        self.findings.append(Finding(code, "caution", f"{self.sweep.name}: {message}", advice, self.sweep.name))

    def outside(self, what: str, low_hz: float, high_hz: float) -> bool:
        """Whether a stretch is not in the sweep; then a finding says so."""
        f = self.sweep.frequency_hz
        if f[0] <= low_hz and high_hz <= f[-1]:
            return False
        asked = format_si(low_hz, "Hz", 6)
        if high_hz != low_hz:
            asked += f" to {format_si(high_hz, 'Hz', 6)}"
        self.finding(
            "outside-sweep",
            f"{what} is asked for at {asked}, but the sweep runs from {format_si(f[0], 'Hz', 6)} to "
            f"{format_si(f[-1], 'Hz', 6)}",
            units_or_span(float(np.sqrt(abs(low_hz * high_hz))), float(np.sqrt(f[0] * f[-1]))),
        )
        return True

    def trace(self, parameter: str) -> ComplexArray:
        """Return one scattering parameter of the sweep, (n,)."""
        trace: ComplexArray = self.sweep.s[int(parameter[1]) - 1, int(parameter[2]) - 1]
        return trace

    def curve(self, parameter: str, low_hz: float, high_hz: float) -> Curve:
        """Return the smooth curve of one scattering parameter, for an extractor to use."""
        trace = self.trace(parameter)
        curve = fit_curve(self.sweep.frequency_hz, trace, low_hz, high_hz, self.noise.get(parameter))
        self.uses(parameter, curve)
        return curve

    def uses(self, parameter: str, *curves: Curve) -> None:
        """Note that extractors use these curves of one scattering parameter."""
        self.curves.setdefault(parameter, []).extend(curves)


def units_or_span(asked_hz: float, swept_hz: float) -> str:
    """Return what to do about a frequency that is not in a sweep; far away, its unit is the likelier slip."""
    times = swept_hz / asked_hz if asked_hz > 0.0 and swept_hz > 0.0 else 1.0
    if 1.0 / _FAR < times < _FAR:
        return "sweep over that frequency, or change what is asked for"
    far = f"{max(times, 1.0 / times):.0f} times {'higher' if times > 1.0 else 'lower'}"
    return f'the sweep lies {far}: check the unit in the file\'s option line, and the one in the sheet ("10.7 MHz")'
