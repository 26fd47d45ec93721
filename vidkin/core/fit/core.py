"""Which laws are fitted to what, which of them answers, and what is refused."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import numpy as np

from vidkin.core.fit import answers
from vidkin.core.fit.body import drag_of
from vidkin.core.fit.data import PLAIN_WOBBLE, Series, at_positions, binned, estimate_wobble, series_of, unrestful
from vidkin.core.fit.derive import Solved, curves, law_fit, solved
from vidkin.core.fit.laws import Drag, Form, Problem, flying_forms, standing_forms
from vidkin.core.fit.view import Rough, View, restlessness, rough_of, view_of
from vidkin.core.uncertainty import NoSolution, akaike_weights, numerical_jacobian, wobble_kernels
from vidkin.notices import Failure, failure
from vidkin.stages import Fit, Motion, Rep, Settings, Steps

_SEED: Final = 20260101
_LEAST_ROWS: Final = 12
_LEAST_WAY_M: Final = 3.0


@dataclass(frozen=True, slots=True, kw_only=True)
class _Fitted:
    """All laws that could be solved, best first, and why the others could not."""

    laws: tuple[Solved, ...]
    criteria: tuple[float, ...]
    weights: tuple[float, ...]
    refused: tuple[Failure, ...]


def fit_motion(motion: Motion, rep: Rep, *, steps: Steps | Failure, settings: Settings | None = None) -> Fit | Failure:
    """Fit every law to the measured positions.

    Parameters
    ----------
    motion : Motion
        Positions with independent and shared errors.
    rep : Rep
        Body, air, lane, and the splits asked for.
    steps : Steps or Failure
        For step rate and length at top speed.
    settings : Settings, optional

    Returns
    -------
    Fit or Failure
    """
    settings = settings or Settings()
    way = float(np.ptp(motion.smooth_x_m)) if motion.t_s.size else 0.0
    if motion.t_s.size < _LEAST_ROWS or way < _LEAST_WAY_M:
        return failure("too_little_run", metres=way, least=_LEAST_WAY_M, rows=motion.t_s.size)
    view = view_of(motion, rep.lane.start_x_m)
    drag, remarks = drag_of(rep.athlete, rep.air)
    rows = binned(motion)
    unrest = restlessness(rows.t_s, rows.x_m) if view.start == "standing" else np.ones(rows.t_s.size)
    kernels = unrestful(wobble_kernels(rows.t_s, rate_hz=motion.step_rate_hz), unrest)
    rough = rough_of(motion, view)
    series = series_of(at_positions(rows, rows.smooth_m), PLAIN_WOBBLE, kernels)
    # The wobble is sized on the residuals of the most flexible law; every law then meets the same covariance.
    probe = Problem(forms(view, rough, drag)[0], series)
    first = probe.solve()
    if isinstance(first, NoSolution):
        return failure("no_law_fits", why=first.reason)
    slopes = numerical_jacobian(lambda p: probe.predicted(probe.full(p)), first.parameters)
    smooth = probe.predicted(probe.full(first.parameters))
    rows = at_positions(rows, smooth)
    wobble = estimate_wobble(rows, rows.x_m - smooth, slopes[:, probe.decided_by_data], kernels)
    series = series_of(rows, wobble, kernels)
    fit = fit_series(series, view, rep, rough=rough, drag=drag, settings=settings)
    if not fit:
        return fit
    return answers.with_film(fit, motion, steps, remarks=remarks, level=settings.level)


def forms(view: View, rough: Rough, drag: Drag | Failure) -> list[Form]:
    """The laws that apply to a view."""
    if view.start == "standing":
        return standing_forms(np.array([rough.x0_m, rough.t0_s]), rough.v_end_mps, rough.tau_s, drag or None)
    return flying_forms(rough.x0_m, rough.t0_s, rough.v_start_mps)


def fit_series(
    series: Series, view: View, rep: Rep, *, rough: Rough, drag: Drag | Failure, settings: Settings
) -> Fit | Failure:
    """Every law of the view on one series; quantities, splits and curves from them."""
    fitted = _solve_all(series, forms(view, rough, drag))
    if not fitted.laws:
        return failure("no_law_fits", why=fitted.refused[0].reason if fitted.refused else "no law applies")
    by_name = {s.problem.form.name: s for s in fitted.laws}
    weights = dict(zip(by_name, fitted.weights, strict=True))
    answer = answers.quantities(by_name, weights, view, drag, level=settings.level)
    best = fitted.laws[0]
    return Fit(
        start=view.start,
        law=best.problem.form.name,
        quantities={q.name: q for q in answer.quantities},
        splits=answers.splits(by_name, weights, view, rep.splits_m, level=settings.level),
        laws={
            name: law_fit(s, c, w)
            for (name, s), c, w in zip(by_name.items(), fitted.criteria, fitted.weights, strict=True)
        },
        curves=curves(best, (view.first_s, view.last_s), drag or None, level=settings.level),
        refused=fitted.refused + answer.refused,
        notices=answer.notices,
    )


def _solve_all(series: Series, candidates: list[Form]) -> _Fitted:
    rng = np.random.default_rng(_SEED)
    done: list[tuple[float, Solved]] = []
    refused: list[Failure] = []
    for form in candidates:
        problem = Problem(form, series)
        solution = problem.solve()
        if isinstance(solution, NoSolution):
            refused.append(failure("law_not_solved", law=form.name, why=solution.reason))
            continue
        free = int(np.count_nonzero(problem.decided_by_data))
        # The covariance is known, so the criterion needs no small-sample term: few splits would else forbid a slope.
        done.append((solution.cost + 2 * free, solved(problem, solution, rng)))
    done.sort(key=lambda d: d[0])
    criteria = tuple(c for c, _ in done)
    weights = tuple(float(w) for w in akaike_weights(criteria)) if criteria else ()
    return _Fitted(laws=tuple(s for _, s in done), criteria=criteria, weights=weights, refused=tuple(refused))
