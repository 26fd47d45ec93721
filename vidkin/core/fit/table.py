"""Speed-time, distance-time and split tables of other instruments, through the same laws."""

from __future__ import annotations

from dataclasses import replace
from typing import Final

import numpy as np
from scipy.stats import norm
from scipy.stats import t as student

from vidkin.core.fit.body import drag_of
from vidkin.core.fit.core import fit_series, forms
from vidkin.core.fit.data import Series
from vidkin.core.fit.laws import Problem
from vidkin.core.fit.view import Rough, View
from vidkin.core.uncertainty import NoSolution
from vidkin.notices import Failure, failure, notice
from vidkin.stages import Array, Fit, Rep, Settings

_LEAST_ROWS: Final = 5
_LEAST_WAY_M: Final = 3.0
#: A table of more rows than this is a sampled curve, not a set of splits.
_SPLITS: Final = 15
#: A first reading below this share of the highest speed shows the start.
_START_SHARE: Final = 0.3
#: From rest, the mean speed of the first split stays below this share of the next.
_FIRST_SHARE: Final = 0.85
#: Steps to which times are read, coarsest first [s].
_TIME_STEPS_S: Final = (0.1, 0.01, 0.001)
_LEAST_SD: Final = {"position": 0.005, "speed": 0.005}


def fit_table(
    *, t_s: Array, x_m: Array | None, v_mps: Array | None, rep: Rep, settings: Settings | None = None
) -> Fit | Failure:
    """Fit every law to a table.

    Parameters
    ----------
    t_s : Array
        (N,) rising times [s].
    x_m, v_mps : Array or None
        (N,) positions from the start line [m], or speeds [m/s]; positions are fitted where both are given.
    rep : Rep
        Body, air, and the splits asked for.
    settings : Settings, optional

    Returns
    -------
    Fit or Failure
        Errors are taken as independent and alike, sized by the scatter about the best law (Student's factor for
        few rows). A table carries no calibration error: a notice says so.
    """
    settings = settings or Settings()
    y = x_m if x_m is not None else v_mps
    if y is None:
        raise ValueError("fit_table: give positions or speeds")
    kept = np.ones(t_s.size, bool) if x_m is None else ~((np.asarray(x_m) == 0) & (np.asarray(t_s) == 0))
    t, y = np.asarray(t_s, dtype=np.float64)[kept], np.asarray(y, dtype=np.float64)[kept]
    if t.size < _LEAST_ROWS:
        return failure("too_few_rows", rows=t.size, least=_LEAST_ROWS)
    way = float(np.ptp(y)) if x_m is not None else float(np.sum(0.5 * (y[1:] + y[:-1]) * np.diff(t)))
    if not way > _LEAST_WAY_M:
        return failure("too_little_run", metres=way, least=_LEAST_WAY_M, rows=t.size)
    view, rough = _speed_view(t, y, rep) if x_m is None else _position_view(t, y, rep)
    drag, remarks = drag_of(rep.athlete, rep.air)
    kind = "speed" if x_m is None else "position"
    plain = Series(
        kind="speed" if x_m is None else "position",
        t_s=t,
        y=y,
        cov=np.eye(t.size),
        fixed_origin=view.start == "standing" and t.size <= _SPLITS,
    )
    # A law without priors first: its scatter is the size of the errors.
    probe = Problem(next(f for f in forms(view, rough, drag) if not np.isfinite(f.prior_sd[:3]).any()), plain)
    first = probe.solve()
    if isinstance(first, NoSolution):
        return failure("no_law_fits", why=first.reason)
    dof = max(t.size - first.parameters.size, 1)
    miss = plain.y - probe.predicted(probe.full(first.parameters))
    level = 0.5 + settings.level / 2
    sd = float(np.sqrt(np.sum(miss**2) / dof)) * float(student.ppf(level, dof) / norm.ppf(level))
    series = Series(
        kind=plain.kind,
        t_s=t,
        y=y,
        cov=np.eye(t.size) * max(sd, _LEAST_SD[kind]) ** 2 + (_rounding(t, y) if kind == "position" else 0.0),
        fixed_origin=plain.fixed_origin,
    )
    fit = fit_series(series, view, rep, rough=rough, drag=drag, settings=settings)
    if not fit:
        return fit
    size = notice("table_errors", sd=sd, unit="m" if x_m is not None else "m/s")
    return replace(fit, notices=(*remarks, size, *fit.notices))


def _rounding(t_s: Array, x_m: Array) -> Array:
    """Covariance (N, N) [m^2] of times that were rounded, up or to the nearest: all by up to half a step together."""
    steps = [q for q in _TIME_STEPS_S if np.allclose(t_s / q, np.round(t_s / q), atol=1e-4)]
    if not steps:
        return np.zeros((t_s.size, t_s.size))
    v = np.gradient(x_m, t_s)
    return np.asarray((steps[0] / 2) ** 2 * np.outer(v, v) + np.diag((steps[0] * v) ** 2 / 12))


def _position_view(t: Array, x: Array, rep: Rep) -> tuple[View, Rough]:
    v = np.diff(x) / np.diff(t)
    if t.size <= _SPLITS:
        first = x[0] / t[0] if t[0] > 0 and x[0] > 0 else float("inf")
        standing = bool(first < _FIRST_SHARE * v[0])
        t0, x0 = (0.1, 0.0) if standing else (float(t[0]), float(x[0]))
    else:
        few = max(3, t.size // 50)
        early = float((x[few] - x[0]) / (t[few] - t[0]))
        standing = early < _START_SHARE * float(np.quantile(v, 0.9))
        moved = int(np.argmax(x > x[0] + 0.3))
        t0, x0 = (
            (max(float(t[moved]) - 0.3, float(t[0]) - 0.5), float(x[0])) if standing else (float(t[0]), float(x[0]))
        )
    v_end = max(float(np.quantile(v, 0.9)), 0.5)
    view = View(
        start="standing" if standing else "flying",
        first_s=t0 if standing else float(t[0]),
        last_s=float(t[-1]),
        first_m=0.0 if standing else float(x[0]),
        last_m=float(x[-1]),
        start_x_m=rep.lane.start_x_m,
    )
    return view, Rough(x0_m=x0, t0_s=t0, v_start_mps=max(float(v[0]), 0.5), v_end_mps=v_end, tau_s=1.2)


def _speed_view(t: Array, v: Array, rep: Rep) -> tuple[View, Rough]:
    top = max(float(np.quantile(v, 0.95)), 0.5)
    standing = bool(v[0] < _START_SHARE * top)
    way = np.concatenate([[0.0], np.cumsum(0.5 * (v[1:] + v[:-1]) * np.diff(t))])
    rise = int(np.argmax(v > 0.63 * top))
    t0 = float(t[int(np.argmax(v > 0.05 * top))]) - 0.05 if standing else float(t[0])
    view = View(
        start="standing" if standing else "flying",
        first_s=t0,
        last_s=float(t[-1]),
        first_m=0.0,
        last_m=float(way[-1]),
        start_x_m=rep.lane.start_x_m,
    )
    tau = float(np.clip(t[rise] - t0, 0.4, 3.0))
    return view, Rough(x0_m=0.0, t0_s=t0, v_start_mps=max(float(v[0]), 0.5), v_end_mps=top, tau_s=tau)
