"""A sweep at the device's ports and what is asked of it in; every figure of the device out, by its key.

:func:`plan_figures` decides once, on the data as measured, which figures there are and how each is to be extracted.
:meth:`FigurePlan.extract` then takes the numbers from the sweep, or from any number of perturbed copies of it: it is
the one extraction, for values and for intervals alike. To add a figure: give it a unit in :mod:`benchtool.sheet`,
add it in :func:`plan_figures`, and say in the README what it is.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Final

import numpy as np

from benchtool.curves import Curve
from benchtool.figure_plan import Extractor, FigureBuilder, FigurePlan, SweepNoise, Traces
from benchtool.fitting import fit_curve
from benchtool.level_search import LevelSearch
from benchtool.match import stability, worst_return_loss
from benchtool.model import Bound, Figure, FloatArray, Kind, Sweep
from benchtool.phase import delay_variation, phase_linearity
from benchtool.response import LevelWidth, Passband, PassbandFigures, plan_level_width, plan_passband
from benchtool.sheet import TargetSpec
from benchtool.units import HALF_POWER_DB, to_db, wrap_degrees

__all__ = ["FigurePlan", "phase_toward", "plan_figures", "target_key"]

_REJECTION_REACH: Final = 0.02
"""Share of the distance to the peak over which the skirt is smoothed around a rejection point."""
_REJECTION_STEPS: Final = 3.0


_PARAMETERS: Final = (("S11", "S12"), ("S21", "S22"))


def _given(name: str) -> Extractor:
    return lambda _plan, _traces, found: found[name]


def plan_figures(
    sweep: Sweep,
    kind: Kind,
    design_hz: float | None,
    window_hz: tuple[float, float] | None,
    targets: Sequence[TargetSpec] = (),
) -> FigurePlan:
    """Return how the figures of one sweep at the device are to be extracted.

    Parameters
    ----------
    sweep : at the device's own ports; S21 must have been measured and the window must hold a sample
    kind : a filter reports insertion loss where others report gain
    design_hz : design frequency; None takes the peak
    targets : those whose figures have parameters add figures of their own

    Raises
    ------
    ValueError : the window holds no sample.
    """
    f, s21, noise = sweep.frequency_hz, sweep.s21, SweepNoise(sweep)
    passband = plan_passband(f, s21, window_hz, noise["S21"])
    peak = passband.figures(s21)
    peak_hz = float(peak.peak_frequency)
    at = design_hz if design_hz is not None else peak_hz
    design_curve, grid = passband.curve, passband.curve.grid_hz
    if not grid[0] <= at <= grid[-1]:
        reach = 0.1 * float(grid[-1] - grid[0])
        design_curve = fit_curve(f, sweep.s21, at - reach, at + reach, noise["S21"])

    def collect() -> FigureBuilder:
        build = FigureBuilder(sweep, kind, noise)
        build.uses("S21", passband.curve, design_curve)
        inside_sweep = not build.outside("the design frequency", at, at)
        _add_transmission(build, passband, peak, inside_sweep, design_curve, at)
        _add_match(build, passband, peak, at, inside_sweep)
        for target in targets:
            _add_target(build, passband, target, peak_hz)
        return build

    return FigurePlan(sweep, kind, at, passband, peak, design_curve, noise, collect)


def _add_transmission(
    build: FigureBuilder, band: Passband, figures: PassbandFigures, inside: bool, design_curve: Curve, at_hz: float
) -> None:
    at = {"at_hz": at_hz}
    headline = "insertion_loss" if build.kind == "filter" else "gain"
    build.add(headline, _given(headline) if inside else None, parameters=at)
    # At the end of the window the true peak lies beyond it: the figures are limits.
    low_end = float(figures.peak_frequency) <= band.search.low_hz
    peak_bound: Bound | None = None if band.peak_inside else ("at most" if low_end else "at least")
    build.add("peak_gain", _given("peak_gain"), None if band.peak_inside else "at least")
    build.add("peak_frequency", _given("peak_frequency"), peak_bound)
    both = band.lower_inside and band.upper_inside
    neither = not band.lower_inside and not band.upper_inside
    build.add("lower_edge", _given("lower_edge"), None if band.lower_inside else "at most")
    build.add("upper_edge", _given("upper_edge"), None if band.upper_inside else "at least")
    build.add("bandwidth", _given("bandwidth"), None if both else "at least")
    # f1 f2 falls with a lower edge that lies further down, and rises with an upper one further up.
    centre_bound: Bound | None = None if both else ("at least" if band.lower_inside else "at most")
    build.add("centre_frequency", None if neither else _given("centre_frequency"), centre_bound)
    build.add("loaded_q", _given("loaded_q"), None if both else "at most")
    aperture = {**at, "aperture_hz": _aperture(build, figures), "fitted_over_hz": design_curve.span_hz}
    build.add("group_delay", _given("group_delay") if inside else None, parameters=aperture)
    build.add("phase", _given("phase") if inside else None, parameters=at)


def _aperture(build: FigureBuilder, figures: PassbandFigures) -> float:
    """Return the aperture at which a delay curve of this sweep is best drawn, Hz.

    An aperture of x bandwidths reads a single-tuned delay low by x²/3 and has a noise that falls as 1/x; both
    together are least near x = (1.5 σφ)^(1/3), σφ being the phase noise of one sample in rad (closed form).
    """
    f = build.sweep.frequency_hz
    spacing = float(np.max(np.diff(f), initial=0.0))
    width = float(figures.bandwidth) if np.isfinite(figures.bandwidth) else float(f[-1] - f[0])
    noise = build.noise.get("S21")
    level = 10.0 ** (float(figures.peak_gain) / 20.0)
    phase_noise = 0.0 if noise is None else float(noise.sigma(np.array(level))) / level / np.sqrt(2.0)
    share = float(np.clip((1.5 * phase_noise) ** (1.0 / 3.0), 0.05, 0.25))
    return max(share * width, 2.0 * spacing)


def _add_match(build: FigureBuilder, band: Passband, edges: PassbandFigures, at_hz: float, inside: bool) -> None:
    if band.lower_inside and band.upper_inside and np.isfinite(edges.bandwidth):
        low, high = float(edges.lower_edge), float(edges.upper_edge)
        where: dict[str, float | tuple[float, float]] = {"band_hz": (low, high)}
    else:
        low = high = at_hz
        where = {"at_hz": at_hz}
    for figure, name in (("input_return_loss", "S11"), ("output_return_loss", "S22")):
        if name not in build.sweep.measured:
            continue
        if low == high and not inside:
            build.add(figure, None, parameters=where)
        elif low < high:
            build.add(figure, _worst(build, build.curve(name, low, high), name), parameters=where)
        else:
            build.add(figure, _at_point(build, name, at_hz), parameters=where)
    if "S12" in build.sweep.measured:
        extractor = _at_point(build, "S12", at_hz) if inside else None
        build.add("reverse_isolation", extractor, parameters={"at_hz": at_hz})
    if build.sweep.full and build.kind == "amplifier":
        for figure in ("stability_k", "stability_mu"):
            build.add(figure, _stability(build, figure, at_hz) if inside else None, parameters={"at_hz": at_hz})


def _worst(build: FigureBuilder, curve: Curve, parameter: str) -> Extractor:
    search = LevelSearch(curve, build.trace(parameter))
    return lambda _plan, traces, _found: worst_return_loss(search, traces[parameter])


def _stability(build: FigureBuilder, figure: str, at_hz: float) -> Extractor:
    """Return the extractor of K or µ at one frequency, from the smooth curves of all four parameters."""
    curves = {name: _curve_near(build, name, at_hz) for row in _PARAMETERS for name in row}

    def extract(_plan: FigurePlan, traces: Traces, _found: Mapping[str, FloatArray]) -> FloatArray:
        rows = [[curves[name].at(traces[name], at_hz)[0] for name in row] for row in _PARAMETERS]
        point = np.stack([np.stack(row, axis=-1) for row in rows], axis=-2)[..., None]
        found = stability(point)
        return np.asarray((found.k if figure == "stability_k" else found.mu)[..., 0])

    return extract


def _curve_near(build: FigureBuilder, parameter: str, at_hz: float) -> Curve:
    f = build.sweep.frequency_hz
    reach = max(0.02 * float(f[-1] - f[0]), _REJECTION_STEPS * float(np.max(np.diff(f), initial=0.0)))
    return build.curve(parameter, at_hz - reach, at_hz + reach)


def _at_point(build: FigureBuilder, parameter: str, at_hz: float) -> Extractor:
    """Return the extractor of −20 log10 of a parameter's magnitude at one frequency."""
    curve = _curve_near(build, parameter, at_hz)
    return lambda _plan, traces, _found: -to_db(curve.at(traces[parameter], at_hz)[0])


def target_key(target: TargetSpec) -> str:
    """Return the key of the figure that a target is about."""
    parameters = {
        name: given
        for name, given in (("at_hz", target.at_hz), ("over_hz", target.over_hz), ("between_db", target.between_db))
        if given is not None
    }
    return Figure(target.figure, None, "", parameters=parameters).key


_NEEDS: Final = {
    "input_return_loss": "S11",
    "output_return_loss": "S22",
    "reverse_isolation": "S12",
    "stability_k": "S12",
    "stability_mu": "S12",
}


def _add_target(build: FigureBuilder, band: Passband, target: TargetSpec, peak_hz: float) -> None:
    if target.at_hz is not None:
        _add_rejection(build, target.figure, target.at_hz, peak_hz)
    elif target.over_hz is not None:
        _add_over(build, target.figure, target.over_hz)
    elif target.between_db is not None:
        _add_shape_factor(build, band, target.figure, target.between_db)
    elif target.figure not in build.extractors:
        parameter = _NEEDS.get(target.figure)
        if parameter is not None:
            build.finding(
                "one-path",
                f"{target.figure} has a target, but {parameter} was not measured",
                "sweep the device turned end for end and name that file as `reversed`, or drop the target",
            )
        build.add(target.figure, None)


def _add_rejection(build: FigureBuilder, figure: str, at_hz: float, peak_hz: float) -> None:
    parameters = {"at_hz": at_hz}
    if build.outside(figure, at_hz, at_hz):
        build.add(figure, None, parameters=parameters)
        return
    steps = float(np.max(np.diff(build.sweep.frequency_hz), initial=0.0))
    reach = max(_REJECTION_REACH * abs(at_hz - peak_hz), _REJECTION_STEPS * steps)
    curve = build.curve("S21", at_hz - reach, at_hz + reach)

    def extract(_plan: FigurePlan, traces: Traces, found: Mapping[str, FloatArray]) -> FloatArray:
        return np.asarray(found["peak_gain"] - to_db(curve.at(traces["S21"], at_hz)[0]))

    build.add(figure, extract, parameters=parameters)


def _add_over(build: FigureBuilder, figure: str, over_hz: tuple[float, float]) -> None:
    parameters = {"over_hz": over_hz}
    if build.outside(figure, *over_hz):
        build.add(figure, None, parameters=parameters)
        return
    curve = build.curve("S21", *over_hz)

    def ripple(_plan: FigurePlan, traces: Traces, _found: Mapping[str, FloatArray]) -> FloatArray:
        level = curve.level_on_grid(traces["S21"])
        return np.asarray(np.max(level, axis=-1) - np.min(level, axis=-1))

    extractors: dict[str, Extractor] = {
        "ripple": ripple,
        "delay_variation": lambda _plan, traces, _found: delay_variation(curve, traces["S21"]),
        "phase_linearity": lambda _plan, traces, _found: phase_linearity(curve, traces["S21"]),
    }
    build.add(figure, extractors[figure], parameters=parameters)


def _add_shape_factor(build: FigureBuilder, band: Passband, figure: str, between_db: tuple[float, float]) -> None:
    parameters = {"between_db": between_db}
    f, s21 = build.sweep.frequency_hz, build.sweep.s21
    # "60 to 3 dB" means the half-power point, not 3.000 dB.
    depths = sorted((HALF_POWER_DB if depth == 3 else depth for depth in between_db), reverse=True)
    widths = [plan_level_width(f, s21, band, depth, build.noise.get("S21")) for depth in depths]
    outer, inner = widths
    if outer is None or inner is None:
        lost = depths[0] if outer is None else depths[1]
        build.finding(
            "edge-outside-sweep",
            f"the response does not fall {lost:.4g} dB below its peak on both sides within the sweep, so the shape "
            "factor cannot be known",
            "sweep wider, or take the added pads out so that the skirt clears the noise",
        )
        build.add(figure, None, parameters=parameters)
        return
    build.uses("S21", outer.lower, outer.upper, inner.lower, inner.upper)
    build.add(figure, _ratio(outer, inner), parameters=parameters)


def _ratio(outer: LevelWidth, inner: LevelWidth) -> Extractor:
    def extract(_plan: FigurePlan, traces: Traces, found: Mapping[str, FloatArray]) -> FloatArray:
        s21, peak = traces["S21"], found["peak_gain"]
        return np.asarray(outer.width(s21, peak) / inner.width(s21, peak))

    return extract


def phase_toward(phase_deg: float, low: float | None, high: float | None) -> float:
    """Return the phase turned by whole circles to where it is nearest a target's middle."""
    limits = [limit for limit in (low, high) if limit is not None]
    if not limits:
        return phase_deg
    middle = sum(limits) / len(limits)
    return middle + wrap_degrees(phase_deg - middle)
