"""Sprint laws as least-squares problems: parameters that may take any value, starts, priors, and back again."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Final

import numpy as np

from vidkin.core import models
from vidkin.core.fit.data import Series
from vidkin.core.uncertainty import NoSolution, Solution, solve, whitener
from vidkin.stages import Array

_WEAK_PRIOR: Final = 1.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Drag:
    """Air and body: `k_drag` rho CdA/(2 m) [1/m] and the relative sd of CdA; wind [m/s] and its sd."""

    k_drag: float
    rel_sd: float
    wind_mps: float
    wind_sd_mps: float
    density_kg_m3: float
    drag_area_m2: float
    mass_kg: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Form:
    """One law as a problem.

    `names` of the parameters after (x0, t0); all are logarithms unless in `straight`. `make` builds the law
    from their natural values. `prior_mean`, `prior_sd` (P,) on the fitted values, sd inf for none.
    """

    name: str
    words: str
    names: tuple[str, ...]
    make: Callable[[Array], models.Law]
    start: Array
    prior_mean: Array
    prior_sd: Array
    straight: tuple[str, ...] = ()
    fixed_t0: bool = False

    def natural(self, q: Array) -> Array:
        """Natural values of the parameters after (x0, t0)."""
        # Beyond e^+-60 no law means anything; unclipped, a wild step of the solver would overflow.
        return np.array(
            [v if n in self.straight else np.exp(np.clip(v, -60, 60)) for n, v in zip(self.names, q[2:], strict=True)]
        )

    def law(self, q: Array) -> models.Law | None:
        """The law at q, or None outside its domain."""
        try:
            return self.make(self.natural(q))
        except ValueError:
            return None

    def direction(self, name: str) -> Array:
        """Unit direction (P,) of a parameter, for profiles; "x0" and "t0" too."""
        return np.asarray(np.eye(2 + len(self.names))[("x0", "t0", *self.names).index(name)])


class Problem:
    """Whitened residuals of one form on one series: data rows first, then priors."""

    def __init__(self, form: Form, series: Series) -> None:
        self.form, self.series = form, series
        self._white = whitener(series.cov)
        self._root = self._white(np.eye(series.t_s.size))
        self._held = np.zeros(2 + len(form.names), bool)
        self._held[0] = series.kind == "speed" or series.fixed_origin
        self._held[1] = form.fixed_t0
        self._prior = np.isfinite(form.prior_sd) & ~self._held
        self.free = ~self._held
        #: Among the free parameters, those that the data decide: without a prior, or with a very weak one.
        self.decided_by_data = (form.prior_sd >= _WEAK_PRIOR)[self.free]

    def full(self, p: Array) -> Array:
        """All parameters from the free ones; a held one stays at its start."""
        q = self.form.start.copy()
        q[self.free] = p
        return q

    def predicted(self, q: Array) -> Array:
        law = self.form.law(q)
        if law is None:
            return np.full(self.series.t_s.size, np.nan)
        with np.errstate(all="ignore"):
            clock = self.series.t_s - q[1]
            return np.asarray(q[0] + law.position(clock) if self.series.kind == "position" else law.speed(clock))

    def residual(self, p: Array) -> Array:
        q = self.full(p)
        miss = self.series.y - self.predicted(q)
        if not np.all(np.isfinite(miss)):
            return np.full(self.series.t_s.size + int(np.count_nonzero(self._prior)), np.nan)
        prior = ((q - self.form.prior_mean) / self.form.prior_sd)[self._prior]
        return np.concatenate([self._root @ miss, prior])

    def solve(self, starts: tuple[Array, ...] = ()) -> Solution | NoSolution:
        return solve(
            self.residual,
            self.form.start[self.free],
            scale_by_residual=False,
            starts=tuple(s[self.free] for s in starts),
        )

    def direction(self, weights: dict[str, float]) -> Array:
        """Direction (P_free,) of a weighted sum of parameters."""
        return np.asarray(sum(w * self.form.direction(n) for n, w in weights.items()))[self.free]


def _padded(x0_t0: Array, rest: list[float]) -> Array:
    return np.concatenate([x0_t0, rest])


def standing_forms(x0_t0: Array, v_end: float, tau: float, drag: Drag | None) -> list[Form]:
    """Laws of a start from rest, started from rough values: speed at the end of view and a time constant."""
    v_max = 1.12 * v_end
    free = np.full(2, np.inf)
    forms = [
        Form(
            name=models.MonoExponential.name,
            words=models.MonoExponential.words,
            names=("v_max", "tau"),
            make=lambda p: models.MonoExponential(v_max=p[0], tau=p[1]),
            start=_padded(x0_t0, [np.log(v_max), np.log(tau)]),
            prior_mean=np.zeros(4),
            prior_sd=np.full(4, np.inf),
        ),
        Form(
            name=models.ConstantPower.name,
            words=models.ConstantPower.words,
            names=("Z",),
            make=lambda p: models.ConstantPower(Z=p[0]),
            start=_padded(x0_t0, [np.log(v_end**2 / 6)]),
            prior_mean=np.zeros(3),
            prior_sd=np.full(3, np.inf),
        ),
        Form(
            name=models.ConstantPowerDrag.name,
            words=models.ConstantPowerDrag.words,
            names=("Z", "k_drag"),
            make=lambda p: models.ConstantPowerDrag(Z=p[0], k_drag=p[1]),
            start=_padded(x0_t0, [np.log(v_end**2 / 5), np.log(0.02)]),
            # No more than "somewhere between a hundredth of the air's and a hundred times it".
            prior_mean=_padded(np.zeros(2), [0.0, np.log(0.01)]),
            prior_sd=_padded(free, [np.inf, 2.5]),
        ),
    ]
    if drag is not None:
        forms.insert(
            0,
            Form(
                name=models.ForceVelocity.name,
                words=models.ForceVelocity.words,
                names=("F0", "V0", "k_drag", "wind"),
                make=lambda p: models.ForceVelocity(F0=p[0], V0=p[1], k_drag=p[2], wind=p[3]),
                start=_padded(x0_t0, [np.log(v_max / tau), np.log(1.04 * v_max), np.log(drag.k_drag), drag.wind_mps]),
                prior_mean=_padded(np.zeros(4), [np.log(drag.k_drag), drag.wind_mps]),
                prior_sd=_padded(np.full(4, np.inf), [drag.rel_sd, drag.wind_sd_mps]),
                straight=("wind",),
            ),
        )
    return forms


def flying_forms(x0: float, t0: float, v0: float) -> list[Form]:
    """Laws of a section entered at speed: constant speed or acceleration, and a mono-exponential already under way."""
    origin = np.array([x0, t0])
    return [
        Form(
            name=models.ConstantAcceleration.name,
            words=models.ConstantAcceleration.words,
            names=("v0", "a"),
            make=lambda p: models.ConstantAcceleration(v0=p[0], a=p[1]),
            start=_padded(origin, [np.log(v0), 0.0]),
            prior_mean=np.zeros(4),
            prior_sd=_padded(np.full(3, np.inf), [6.0]),
            straight=("a",),
            fixed_t0=True,
        ),
        Form(
            name=models.MonoExponential.name,
            words=models.MonoExponential.words,
            names=("v_max", "tau", "v0"),
            make=lambda p: models.MonoExponential(v_max=p[0], tau=p[1], v0=p[2]),
            start=_padded(origin, [np.log(1.1 * v0), np.log(1.2), np.log(v0)]),
            # tau of sprinters is 0.8 to 2 s (references: 1.18-1.47 s group means); without the start in view the
            # data alone do not fix it.
            prior_mean=_padded(np.zeros(3), [np.log(1.25), 0.0]),
            prior_sd=_padded(np.full(3, np.inf), [0.3, np.inf]),
            fixed_t0=True,
        ),
        Form(
            name="constant_speed",
            words="Speed does not change over the stretch in view; it says nothing outside it.",
            names=("v0",),
            make=lambda p: models.ConstantAcceleration(v0=p[0], a=0.0),
            start=_padded(origin, [np.log(v0)]),
            prior_mean=np.zeros(3),
            prior_sd=np.full(3, np.inf),
            fixed_t0=True,
        ),
    ]
