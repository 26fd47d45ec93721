"""Fitted laws -> quantities, splits and curves, each with its interval or the reason why there is none."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Final

import numpy as np
from scipy.stats import norm

from vidkin.constants import G_MPS2
from vidkin.core import models
from vidkin.core.fit.laws import Drag, Problem
from vidkin.core.uncertainty import Solution, draw, percentile_interval, profile_interval
from vidkin.stages import Array, Bools, Curves, LawFit, Quantity

DRAWS: Final = 500
_CURVE_STEP_S: Final = 0.01
_RATIO_FROM_S: Final = 0.3


@dataclass(frozen=True, slots=True, kw_only=True)
class Solved:
    """A problem, its solution and draws of all its parameters (n, P)."""

    problem: Problem
    solution: Solution
    draws: Array

    @property
    def q(self) -> Array:
        return self.problem.full(self.solution.parameters)

    @property
    def law(self) -> models.Law:
        law = self.problem.form.law(self.q)
        assert law is not None  # the solver keeps to the law's domain
        return law

    def value(self, name: str) -> float:
        """Natural value of a parameter."""
        return float(self.problem.form.natural(self.q)[self.problem.form.names.index(name)])


def solved(problem: Problem, solution: Solution, rng: np.random.Generator) -> Solved:
    """Attach parameter draws; those outside the law's domain are left out."""
    rows = np.array([problem.full(p) for p in draw(solution, DRAWS, rng)])
    good = np.array([problem.form.law(q) is not None for q in rows])
    return Solved(problem=problem, solution=solution, draws=rows[good])


def profiled(
    s: Solved, name: str, weights: dict[str, float], *, unit: str, level: float, log: bool = True, factor: float = 1.0
) -> Quantity:
    """A weighted sum of fitted parameters (of logarithms: a product) with its profile interval."""
    direction = s.problem.direction(weights)
    found = profile_interval(s.problem.residual, s.solution, direction, level=level)
    value = float(direction @ s.solution.parameters)
    ends = [value, found.low, found.high]
    value, low, high = (factor * float(np.exp(v)) if log else factor * v for v in ends)
    open_ends = " and ".join(w for w, o in (("low", found.low_open), ("high", found.high_open)) if o)
    return Quantity(
        name=name,
        value=value,
        low=None if open_ends else low,
        high=None if open_ends else high,
        unit=unit,
        method=found.method,
        level=level,
        why_no_interval=f"the data do not bound it at the {open_ends} end" if open_ends else "",
    )


def drawn(
    s: Solved, name: str, of: Callable[[models.Law, Array], float], *, unit: str, level: float, method: str = "draws"
) -> Quantity:
    """Any function of the law and its parameters, with a percentile interval over the draws."""
    form = s.problem.form
    values = np.array([_safe(of, form.law(q), q) for q in s.draws])
    values = values[np.isfinite(values)]
    value = of(s.law, s.q)
    if values.size < 0.9 * DRAWS:
        return Quantity(
            name=name,
            value=value,
            low=None,
            high=None,
            unit=unit,
            method=method,
            level=level,
            why_no_interval="it is not defined over the range that the fit leaves open",
        )
    found = percentile_interval(values, level=level)
    return Quantity(name=name, value=value, low=found.low, high=found.high, unit=unit, method=method, level=level)


def _safe(of: Callable[[models.Law, Array], float], law: models.Law | None, q: Array) -> float:
    try:
        return float("nan") if law is None else of(law, q)
    except ValueError:
        return float("nan")


@dataclass(frozen=True, slots=True, kw_only=True)
class Band:
    """Values (K,) with interval ends (K,); `held` (K,) False where the fit leaves a value undefined."""

    value: Array
    low: Array
    high: Array
    held: Bools


def mixed_band(
    laws: Mapping[str, Solved], weights: Mapping[str, float], of: Callable[[models.Law, Array], Array], *, level: float
) -> Band:
    """Any functions of the law: every law speaks in proportion to its Akaike weight, so doubt between laws widens."""
    first = next(iter(laws.values()))
    value = np.asarray(of(first.law, first.q))
    rows = []
    for key, s in laws.items():
        for q in s.draws[: round(weights[key] * len(s.draws))]:
            law = s.problem.form.law(q)
            try:
                rows.append(np.full(value.shape, np.nan) if law is None else np.asarray(of(law, q)))
            except ValueError:
                rows.append(np.full(value.shape, np.nan))
    table = np.array(rows)
    good = np.isfinite(table)
    held = good.mean(axis=0) >= 0.9
    ends = [percentile_interval(table[good[:, k], k], level=level) if held[k] else None for k in range(value.size)]
    return Band(
        value=value,
        low=np.array([v if e is None else e.low for v, e in zip(value, ends, strict=True)]),
        high=np.array([v if e is None else e.high for v, e in zip(value, ends, strict=True)]),
        held=held,
    )


def mixed(
    laws: Mapping[str, Solved],
    weights: Mapping[str, float],
    name: str,
    of: Callable[[models.Law, Array], float],
    *,
    unit: str,
    level: float,
) -> Quantity:
    """As `drawn`, over all laws (`mixed_band`)."""
    band = mixed_band(laws, weights, lambda law, q: np.array([of(law, q)]), level=level)
    held = bool(band.held[0])
    return Quantity(
        name=name,
        value=float(band.value[0]),
        low=float(band.low[0]) if held else None,
        high=float(band.high[0]) if held else None,
        unit=unit,
        method="draws",
        level=level,
        why_no_interval="" if held else "it is not defined over the range that the fit leaves open",
    )


def ratio_of_force(
    drag: Drag, end_s: float
) -> tuple[Callable[[models.Law, Array], float], Callable[[models.Law, Array], float]]:
    """RF_max [%] at 0.3 s and D_RF [%/(m/s)] from 0.3 s to the end of view (Samozino et al. 2016)."""

    def share(law: models.Law, t: Array) -> tuple[Array, Array]:
        v = law.speed(t)
        relative = v - drag.wind_mps
        force = law.acceleration(t) + drag.k_drag * relative * np.abs(relative)
        return v, 100 * np.asarray(force / np.hypot(force, G_MPS2))

    def largest(law: models.Law, q: Array) -> float:  # noqa: ARG001 - one shape for every derived quantity
        return float(share(law, np.array([_RATIO_FROM_S]))[1][0])

    def decrease(law: models.Law, q: Array) -> float:
        v, ratio = share(law, np.arange(_RATIO_FROM_S, end_s - q[1], 0.02))
        return float(np.polyfit(v, ratio, 1)[0])

    return largest, decrease


def curves(s: Solved, span_s: tuple[float, float], drag: Drag | None, *, level: float) -> Curves:
    """The preferred law on an even clock from first movement (or the first row) to the end of view."""
    q = s.q
    t = np.arange(max(span_s[0], q[1]), span_s[1] + 1e-9, _CURVE_STEP_S)
    if t.size < 2:
        t = np.array([span_s[0], span_s[1]])
    law = s.law
    v, a = law.speed(t - q[1]), law.acceleration(t - q[1])
    speeds = np.array([p.speed(t - row[1]) for row in s.draws[:300] if (p := s.problem.form.law(row)) is not None])
    half = norm.ppf(0.5 + level / 2) * speeds.std(axis=0)
    drag_n_kg = np.zeros_like(t) if drag is None else drag.k_drag * (v - drag.wind_mps) * np.abs(v - drag.wind_mps)
    # Constant power has no finite force at rest: its first instant is left to the next one.
    a = np.where(np.isfinite(a), a, a[np.isfinite(a)][0] if np.any(np.isfinite(a)) else 0.0)
    return Curves(
        t_s=t,
        x_m=q[0] + law.position(t - q[1]),
        v_mps=v,
        v_low_mps=v - half,
        v_high_mps=v + half,
        a_mps2=a,
        force_n_kg=a + drag_n_kg,
        power_w_kg=(a + drag_n_kg) * v,
        drag_n=np.zeros(0) if drag is None else drag_n_kg * drag.mass_kg,
    )


def law_fit(s: Solved, criterion: float, weight: float) -> LawFit:
    """What is reported of one law."""
    problem, q = s.problem, s.q
    t = problem.series.t_s
    law, clock = s.law, t - q[1]
    names = problem.form.names
    natural = np.array([problem.form.natural(row) for row in s.draws])
    parameters = dict(zip(names, (float(v) for v in problem.form.natural(q)), strict=True))
    sd = dict(zip(names, (float(v) for v in natural.std(axis=0)), strict=True))
    free = problem.free
    for i, name in enumerate(("x0", "t0")):
        parameters[name] = float(q[i])
        if free[i]:
            sd[name] = float(s.draws[:, i].std())
    accelerations = law.acceleration(clock)
    return LawFit(
        name=problem.form.name,
        words=problem.form.words,
        parameters=parameters,
        sd=sd,
        criterion=criterion,
        weight=weight,
        t_s=t,
        x_m=q[0] + law.position(clock),
        v_mps=law.speed(clock),
        a_mps2=np.where(np.isfinite(accelerations), accelerations, 0.0),
        residual_m=problem.series.y - problem.predicted(q),
    )
