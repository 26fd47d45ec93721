"""Every dataclass that passes between stages. No algorithm lives here.

World axes (right-handed): x along the lane in running direction, from the origin of the sheet's marks;
y to the runner's left; z up. Metres, seconds. Pixels: u to the right, v down, and the CENTRE of the top
left pixel is (0, 0).
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass, field, fields
from typing import Any, Final, Literal, TypeAlias

import numpy as np
from numpy.typing import NDArray

from vidkin.notices import Failure, Notice

Array: TypeAlias = NDArray[np.float64]
Bools: TypeAlias = NDArray[np.bool_]
Ints: TypeAlias = NDArray[np.int64]
Plane: TypeAlias = NDArray[np.uint8] | NDArray[np.uint16]


def _checked(obj: object, name: str, shape: tuple[int | None, ...], *, finite: bool = True) -> Array:
    """Replace field `name` by a read-only float array after checking its shape and finiteness."""
    array = np.array(getattr(obj, name), dtype=np.float64)
    if array.ndim != len(shape) or any(s is not None and s != n for s, n in zip(shape, array.shape, strict=True)):
        raise ValueError(f"{type(obj).__name__}.{name}: shape {array.shape}, expected {shape}")
    if finite and not np.all(np.isfinite(array)):
        raise ValueError(f"{type(obj).__name__}.{name}: holds a value that is not finite")
    array.flags.writeable = False
    object.__setattr__(obj, name, array)
    return array


def _rising(obj: object, name: str) -> int:
    array = _checked(obj, name, (None,))
    if array.size > 1 and not np.all(np.diff(array) > 0):
        raise ValueError(f"{type(obj).__name__}.{name}: times do not rise")
    return int(array.size)


# --- what the user states -----------------------------------------------------------------------


@dataclass(frozen=True, slots=True, kw_only=True)
class Mark:
    """A known point of the world and where it is seen.

    `xyz_m` (3,) position [m]; `uv_px` (2,) sighting [px]; `sd_px` of the sighting; `sd_m` of the placement.
    """

    label: str
    xyz_m: Array
    uv_px: Array
    sd_px: float = 1.0
    sd_m: float = 0.01

    def __post_init__(self) -> None:
        _checked(self, "xyz_m", (3,))
        _checked(self, "uv_px", (2,))
        if self.sd_px <= 0 or self.sd_m < 0:
            raise ValueError(f"Mark {self.label}: sd_px {self.sd_px} must be > 0 and sd_m {self.sd_m} >= 0")


@dataclass(frozen=True, slots=True, kw_only=True)
class Sighting:
    """A click on something straight whose place along itself is not known: a lane line, a vertical pole.

    `xyz_m` (3,) any point of it [m]; it runs along axis `free`. `uv_px` (2,) the click [px], `sd_px` its sd across
    the line, `sd_m` the placement's.
    """

    label: str
    free: Literal["x", "z"]
    xyz_m: Array
    uv_px: Array
    sd_px: float = 1.0
    sd_m: float = 0.01

    def __post_init__(self) -> None:
        _checked(self, "xyz_m", (3,))
        _checked(self, "uv_px", (2,))
        if self.sd_px <= 0 or self.sd_m < 0:
            raise ValueError(f"Sighting {self.label}: sd_px {self.sd_px} must be > 0 and sd_m {self.sd_m} >= 0")


@dataclass(frozen=True, slots=True, kw_only=True)
class CameraPrior:
    """What is known of the camera before any mark; None is "not stated". Sds are of what is stated.

    `focal_rel_sd` relative sd of the focal length behind `hfov_deg`; `k1`, `k2` the lens's radial terms.
    """

    hfov_deg: float | None = None
    focal_rel_sd: float = 0.05
    height_m: float | None = None
    height_sd_m: float = 0.15
    distance_m: float | None = None
    distance_sd_m: float = 0.5
    k1: float = 0.0
    k1_sd: float = 0.1
    k2: float = 0.0
    k2_sd: float = 0.05


@dataclass(frozen=True, slots=True, kw_only=True)
class Lane:
    """The lane run in: `start_x_m` start line on the x axis, `centre_y_m` lane centre, `width_m`."""

    start_x_m: float = 0.0
    centre_y_m: float = 0.61
    width_m: float = 1.22


@dataclass(frozen=True, slots=True, kw_only=True)
class Athlete:
    label: str = "athlete"
    mass_kg: float | None = None
    stature_m: float | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Air:
    """Weather as stated; `pressure_hpa` is station pressure, not reduced to sea level."""

    temperature_c: float | None = None
    pressure_hpa: float | None = None
    altitude_m: float | None = None
    humidity_pct: float | None = None
    wind_mps: float | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Rep:
    """One filmed rep as the sheet states it (everything but the picture)."""

    clip: str
    capture_fps: float | None = None
    athlete: Athlete = field(default_factory=Athlete)
    air: Air = field(default_factory=Air)
    lane: Lane = field(default_factory=Lane)
    camera: CameraPrior = field(default_factory=CameraPrior)
    marks: tuple[Mark, ...] = ()
    sightings: tuple[Sighting, ...] = ()
    splits_m: tuple[float, ...] = ()


# --- footage ------------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True, kw_only=True)
class Frame:
    """One decoded picture, upright. Chroma planes keep the stream's own subsampling.

    `luma` (H, W), `chroma_u`, `chroma_v` (H/2, W/2 for 4:2:0), all uint8 (10-bit streams are shifted down).
    """

    index: int
    t_s: float
    luma: NDArray[np.uint8]
    chroma_u: NDArray[np.uint8]
    chroma_v: NDArray[np.uint8]


#: Call it to start a fresh pass over the clip.
FrameSource: TypeAlias = Callable[[], Iterator[Frame]]


@dataclass(frozen=True, slots=True, kw_only=True)
class Footage:
    """A clip's facts. `t_s` (N,) true time of each decoded frame from the first one [s].

    `slow_factor` is capture rate / stored rate (1 for real time); `t_s` is already divided by it.
    """

    name: str
    width_px: int
    height_px: int
    t_s: Array
    slow_factor: float = 1.0
    codec: str = ""
    bit_depth: int = 8
    rotation_deg: int = 0
    mirrored: bool = False
    notices: tuple[Notice, ...] = ()

    def __post_init__(self) -> None:
        if _rising(self, "t_s") < 1 or self.width_px < 2 or self.height_px < 2:
            raise ValueError(f"Footage {self.name}: no frames, or size {self.width_px}x{self.height_px}")

    @property
    def frame_rate_hz(self) -> float:
        """Median frame rate in real time [Hz]."""
        return float(1.0 / np.median(np.diff(self.t_s))) if self.t_s.size > 1 else 0.0


# --- camera -------------------------------------------------------------------------------------

#: Order of the camera parameters in every vector, covariance and Jacobian.
CAMERA_PARAMETERS: Final = ("f_px", "k1", "k2", "x_m", "y_m", "z_m", "yaw_rad", "pitch_rad", "roll_rad")


@dataclass(frozen=True, slots=True, kw_only=True)
class Camera:
    """A resected fixed camera: square pixels, axis through the picture's centre.

    `parameters` (9,) in the order of `CAMERA_PARAMETERS`; `cov` (9, 9) their covariance.
    Yaw is the azimuth of the optical axis in the x-y plane (0 = +x, pi/2 = +y), pitch is up, roll is
    clockwise about the axis as the photographer sees it.
    `mark_uv_px` (M, 2) where the model puts each mark; `mark_error_px` (M, 2) sighting minus model;
    `mark_error_m` (M,) the length of that error at the mark's distance, across the line of sight [m].
    `used` (M,) False for marks that disagree with the others and were left out; a notice names each.
    `sighting_error_px` (S,) distance of each of the `sightings` from the line that the model draws.
    `x_sd_m` (K, 2): columns lane x [m] and the sd of a position measured there [m], camera alone.
    `scale_sd` the relative sd of lane lengths in the marked stretch [-].
    """

    width_px: int
    height_px: int
    parameters: Array
    cov: Array
    marks: tuple[Mark, ...] = ()
    mark_uv_px: Array = field(default_factory=lambda: np.zeros((0, 2)))
    mark_error_px: Array = field(default_factory=lambda: np.zeros((0, 2)))
    mark_error_m: Array = field(default_factory=lambda: np.zeros(0))
    used: Bools = field(default_factory=lambda: np.zeros(0, dtype=bool))
    sightings: tuple[Sighting, ...] = ()
    sighting_error_px: Array = field(default_factory=lambda: np.zeros(0))
    x_sd_m: Array = field(default_factory=lambda: np.zeros((0, 2)))
    scale_sd: float = 0.0
    notices: tuple[Notice, ...] = ()

    def __post_init__(self) -> None:
        n, m = len(CAMERA_PARAMETERS), len(self.marks)
        used = np.array(self.used, dtype=np.bool_) if np.size(self.used) else np.ones(m, dtype=np.bool_)
        if used.shape != (m,):
            raise ValueError(f"Camera.used: shape {used.shape}, expected {(m,)}")
        used.flags.writeable = False
        object.__setattr__(self, "used", used)
        _checked(self, "sighting_error_px", (len(self.sightings),))
        p = _checked(self, "parameters", (n,))
        _checked(self, "cov", (n, n))
        _checked(self, "mark_uv_px", (m, 2))
        _checked(self, "mark_error_px", (m, 2))
        _checked(self, "mark_error_m", (m,))
        _checked(self, "x_sd_m", (None, 2))
        if p[0] <= 0:
            raise ValueError(f"Camera: focal length {p[0]} px must be positive")

    @property
    def hfov_deg(self) -> float:
        """Horizontal field of view, distortion left out [deg]."""
        return float(np.degrees(2 * np.arctan(0.5 * self.width_px / self.parameters[0])))

    @property
    def position_m(self) -> Array:
        """Projection centre (3,) [m]."""
        return self.parameters[3:6]


# --- track --------------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True, kw_only=True)
class Track:
    """The runner in pixels, one row for each frame in which the body was found.

    `frame` (N,) index into the footage, `t_s` (N,) [s], `uv_px` (N, 2) tracked point, `cov_px2` (N, 2, 2)
    its independent error, `box_px` (N, 4) left, top, right, bottom, `area_px` (N,), `whole` (N,) False where
    the picture's edge cuts the body: such rows are kept for the eye and used by no later stage.
    `low_t_s` (L,), `low_uv_px` (L, 3): the silhouette's ground-near runs, each with left u, right u, lowest v.
    `spread_px` (N,) horizontal spread of the legs.
    `direction` +1 if the runner moves towards larger u, -1 otherwise.
    """

    frame: Ints
    t_s: Array
    uv_px: Array
    cov_px2: Array
    box_px: Array
    area_px: Array
    whole: Bools
    spread_px: Array
    low_t_s: Array
    low_uv_px: Array
    direction: int
    notices: tuple[Notice, ...] = ()

    def __post_init__(self) -> None:
        n = _rising(self, "t_s")
        _checked(self, "uv_px", (n, 2))
        _checked(self, "cov_px2", (n, 2, 2))
        _checked(self, "box_px", (n, 4))
        _checked(self, "area_px", (n,))
        _checked(self, "spread_px", (n,))
        count = _checked(self, "low_t_s", (None,)).size
        _checked(self, "low_uv_px", (count, 3))
        for name, dtype in (("frame", np.int64), ("whole", np.bool_)):
            array = np.array(getattr(self, name), dtype=dtype)
            if array.shape != (n,):
                raise ValueError(f"Track.{name}: shape {array.shape}, expected {(n,)}")
            array.flags.writeable = False
            object.__setattr__(self, name, array)
        if self.direction not in (-1, 1):
            raise ValueError(f"Track.direction: {self.direction}, expected -1 or 1")


@dataclass(frozen=True, slots=True, kw_only=True)
class Steps:
    """Foot contacts and what follows from them.

    `on_s`, `off_s` (C,) touch-down and toe-off [s]; `x_m` (C,) foot position along the lane [m].
    `step_rate_hz`, `step_rate_sd_hz`: over the whole pass. `lateral_m`, `lateral_sd_m`: the runner's y.
    """

    on_s: Array
    off_s: Array
    x_m: Array
    step_rate_hz: float
    step_rate_sd_hz: float
    lateral_m: float
    lateral_sd_m: float
    lateral_source: Literal["lane centre", "feet"]
    notices: tuple[Notice, ...] = ()

    def __post_init__(self) -> None:
        n = _checked(self, "on_s", (None,)).size
        _checked(self, "off_s", (n,))
        _checked(self, "x_m", (n,))
        if self.step_rate_hz <= 0 or self.lateral_sd_m <= 0:
            raise ValueError(f"Steps: rate {self.step_rate_hz} Hz and lateral sd {self.lateral_sd_m} m must be > 0")


# --- motion -------------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True, kw_only=True)
class Motion:
    """The runner in metres.

    `t_s` (N,) clip time [s]; `x_m` (N,) measured position along the lane [m]; `z_m` (N,) its height [m];
    `x_sd_m` (N,) INDEPENDENT sd; `shared_m` (N, K) shared-error columns S, named by `shared_names`:
    cov(x) = diag(x_sd_m**2) + S S^T. `smooth_x_m`, `v_mps`, `a_mps2` (N,) Savitzky-Golay curves,
    `v_sd_mps`, `a_sd_mps2` (N,) their total sd. Rows whose window is not fully inside the pass are marked
    False in `inside` (N,): v and a there are one-sided and their sd says so.
    `window_s` the smoothing window [s], `step_rate_hz` what it was tied to.
    """

    t_s: Array
    x_m: Array
    z_m: Array
    x_sd_m: Array
    shared_m: Array
    shared_names: tuple[str, ...]
    smooth_x_m: Array
    v_mps: Array
    a_mps2: Array
    v_sd_mps: Array
    a_sd_mps2: Array
    inside: Bools
    window_s: float
    step_rate_hz: float
    notices: tuple[Notice, ...] = ()

    def __post_init__(self) -> None:
        n = _rising(self, "t_s")
        for name in ("x_m", "z_m", "x_sd_m", "smooth_x_m", "v_mps", "a_mps2", "v_sd_mps", "a_sd_mps2"):
            _checked(self, name, (n,))
        _checked(self, "shared_m", (n, len(self.shared_names)))
        inside = np.array(self.inside, dtype=np.bool_)
        if inside.shape != (n,):
            raise ValueError(f"Motion.inside: shape {inside.shape}, expected {(n,)}")
        inside.flags.writeable = False
        object.__setattr__(self, "inside", inside)


# --- fit ----------------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True, kw_only=True)
class Quantity:
    """A number with its interval. `low`/`high` None: no interval can be given, `why_no_interval` says why."""

    name: str
    value: float
    low: float | None
    high: float | None
    unit: str
    method: str
    level: float = 0.95
    why_no_interval: str = ""


@dataclass(frozen=True, slots=True, kw_only=True)
class Split:
    """Time from first movement to the centroid crossing start line + `distance_m`."""

    distance_m: float
    time_s: float
    low_s: float
    high_s: float


@dataclass(frozen=True, slots=True, kw_only=True)
class LawFit:
    """One sprint law fitted to the positions.

    `parameters` by name, `sd` by name; `criterion` the Akaike criterion (smaller is better),
    `weight` its Akaike weight; `t_s`, `x_m`, `v_mps`, `a_mps2` the fitted curve at the rows that were fitted (the
    motion's, averaged over short spans); `residual_m` measured minus fitted there (m/s for a table of speeds);
    `words` what the law assumes, in one line.
    """

    name: str
    words: str
    parameters: Mapping[str, float]
    sd: Mapping[str, float]
    criterion: float
    weight: float
    t_s: Array
    x_m: Array
    v_mps: Array
    a_mps2: Array
    residual_m: Array

    def __post_init__(self) -> None:
        n = _rising(self, "t_s")
        for name in ("x_m", "v_mps", "a_mps2"):
            _checked(self, name, (n,))
        _checked(self, "residual_m", (None,))


@dataclass(frozen=True, slots=True, kw_only=True)
class Curves:
    """Model curves for people: t, x, v, a, horizontal force, power, air drag, on one time base.

    `force_n_kg`, `power_w_kg` per kilogram, always given; `drag_n` (N,) or empty where mass or air is missing.
    `v_low_mps`, `v_high_mps` interval of the speed.
    """

    t_s: Array
    x_m: Array
    v_mps: Array
    v_low_mps: Array
    v_high_mps: Array
    a_mps2: Array
    force_n_kg: Array
    power_w_kg: Array
    drag_n: Array

    def __post_init__(self) -> None:
        n = _rising(self, "t_s")
        for name in ("x_m", "v_mps", "v_low_mps", "v_high_mps", "a_mps2", "force_n_kg", "power_w_kg"):
            _checked(self, name, (n,))
        _checked(self, "drag_n", (None,))


@dataclass(frozen=True, slots=True, kw_only=True)
class Fit:
    """What the power and drag fitting core says.

    `quantities` by name (design names); `splits`; `laws` by name with the preferred one in `law`;
    `curves` of the preferred law; `start` how the rep began; `refused` what could not be answered, each a Failure.
    """

    start: Literal["standing", "flying"]
    law: str
    quantities: Mapping[str, Quantity]
    splits: tuple[Split, ...]
    laws: Mapping[str, LawFit]
    curves: Curves
    refused: tuple[Failure, ...] = ()
    notices: tuple[Notice, ...] = ()


@dataclass(frozen=True, slots=True, kw_only=True)
class Settings:
    """Choices of the analysis that are not facts of the rep."""

    level: float = 0.95
    window_s: float | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Analysis:
    """All stages of one rep, the settings and the provenance. Stages after a Failure are None."""

    rep: Rep
    settings: Settings
    footage: Footage
    camera: Camera | Failure
    track: Track | Failure | None = None
    steps: Steps | Failure | None = None
    motion: Motion | Failure | None = None
    fit: Fit | Failure | None = None
    provenance: Mapping[str, Any] = field(default_factory=dict)

    @property
    def stages(self) -> tuple[object, ...]:
        """The five stages (and the steps) in order, those not run left out."""
        every = (self.footage, self.camera, self.track, self.steps, self.motion, self.fit)
        return tuple(s for s in every if s is not None)

    @property
    def failures(self) -> tuple[Failure, ...]:
        """Stages that could not answer, then single quantities that were refused."""
        whole = tuple(s for s in self.stages if isinstance(s, Failure))
        return whole + (self.fit.refused if isinstance(self.fit, Fit) else ())

    @property
    def notices(self) -> tuple[Notice, ...]:
        """Notices of all stages, in order."""
        return tuple(n for s in self.stages if not isinstance(s, Failure) for n in getattr(s, "notices", ()))


def field_names(stage: type) -> tuple[str, ...]:
    """Names of a stage's fields, in order."""
    return tuple(f.name for f in fields(stage))
