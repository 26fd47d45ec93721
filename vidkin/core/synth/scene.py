"""What the forward simulator is told: the runner, the camera, the light, the place. No algorithm."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Literal, TypeAlias

from vidkin.errors import UsageError
from vidkin.stages import CAMERA_PARAMETERS, Air, Athlete, Lane

#: Linear-light reflectance of red, green, blue [-].
Colour: TypeAlias = tuple[float, float, float]


@dataclass(frozen=True, slots=True, kw_only=True)
class Outfit:
    """Reflectances of skin, hair and clothes, and how the clothes cover the body."""

    skin: Colour = (0.42, 0.25, 0.17)
    hair: Colour = (0.025, 0.018, 0.014)
    top: Colour = (0.55, 0.06, 0.05)
    shorts: Colour = (0.03, 0.03, 0.05)
    shoes: Colour = (0.70, 0.75, 0.12)
    sleeves: bool = False
    leg_cover: float = 0.45


@dataclass(frozen=True, slots=True, kw_only=True)
class Runner:
    """One sprinter: body, law of the run, place in the lane.

    Law, per kilogram: dv/dt = F0 (1 - v / V0) - k (v - w) |v - w|, k = rho CdA / (2 m), from `first_movement_s`
    on. F0 is the intercept at v = 0 and acts from the first instant: there is no ramp.

    `y_m` lateral position of the centre of mass. `start` "standing": crouched with hands down, still until
    `first_movement_s`, centre of mass `set_back_m` behind the start line. "flying": at t = 0 the centre of mass is at
    `entry_x_m` with `entry_mps`; the law holds from before the first frame and there is no first movement.
    `step_rate_hz` cadence at top speed, `wobble_mps` peak-to-peak within-step change of the centre of mass's
    speed at top speed, `lean_deg` the upright trunk's lean, `arm_swing` the arms' reach (1 usual). `sex` selects the
    segment table. `lead_left` the left foot is in front in the set position.
    """

    athlete: Athlete = field(default_factory=lambda: Athlete(label="A", mass_kg=72.0, stature_m=1.78))
    F0_n_kg: float = 7.6
    V0_mps: float = 10.0
    drag_area_m2: float = 0.45
    y_m: float = 0.61
    start: Literal["standing", "flying"] = "standing"
    first_movement_s: float = 0.7
    set_back_m: float = 0.28
    entry_x_m: float = 0.0
    entry_mps: float = 8.0
    step_rate_hz: float = 4.5
    wobble_mps: float = 0.2
    lean_deg: float = 8.0
    arm_swing: float = 1.0
    sex: Literal["F", "M"] = "M"
    lead_left: bool = True
    outfit: Outfit = field(default_factory=Outfit)

    def __post_init__(self) -> None:
        mass, stature = self.athlete.mass_kg, self.athlete.stature_m
        if mass is None or stature is None or mass <= 0 or stature <= 0:
            raise UsageError(
                f"Runner {self.athlete.label}: mass {mass} kg and stature {stature} m must both be above zero.",
                "State both: the simulator builds the body from them.",
            )
        if self.F0_n_kg <= 0 or self.V0_mps <= 0 or self.drag_area_m2 < 0:
            raise UsageError(
                f"Runner {self.athlete.label}: F0 {self.F0_n_kg} N/kg and V0 {self.V0_mps} m/s must be above zero, "
                f"drag area {self.drag_area_m2} m^2 must not be below zero.",
                "A sprinter has F0 near 6-9 N/kg, V0 near 8.5-11.5 m/s, drag area near 0.35-0.6 m^2.",
            )

    @property
    def mass_kg(self) -> float:
        """Body mass [kg]."""
        return float(self.athlete.mass_kg or 0.0)

    @property
    def stature_m(self) -> float:
        """Stature [m]."""
        return float(self.athlete.stature_m or 0.0)


@dataclass(frozen=True, slots=True, kw_only=True)
class Light:
    """Sun azimuth (0 = +x, 90 = +y: where the sun stands) and elevation; `overcast` 0 clear sky to 1 no sun at all.

    `flicker` relative sd of slow brightness changes between frames (thin cloud, exposure control).
    """

    azimuth_deg: float = 235.0
    elevation_deg: float = 48.0
    strength: float = 1.0
    overcast: float = 0.1
    flicker: float = 0.002


@dataclass(frozen=True, slots=True, kw_only=True)
class Sensor:
    """Exposure, readout and noise of the phone.

    `readout_s` time from the first to the last row of the picture. `shot` variance per unit of linear signal
    (full scale 1), `read` sd of the dark signal; `chroma` colour noise relative to luma noise;
    `blur_px` sd of the lens blur; `vignette` share of light lost in the corners.
    """

    exposure_s: float = 1 / 500
    readout_s: float = 0.008
    shot: float = 6e-5
    read: float = 0.0015
    chroma: float = 0.5
    blur_px: float = 0.55
    vignette: float = 0.18


@dataclass(frozen=True, slots=True, kw_only=True)
class Place:
    """Surface and surroundings: `surface` of the track, what stands behind, how far behind the lane [m].

    `lanes_far`, `lanes_near`: lanes beyond the runner's lane and on the camera's side of it.
    `contrast` of the surroundings' texture. `sway_px` rms movement of leaves in the picture.
    """

    surface: Literal["red", "blue", "grey", "grass"] = "red"
    backdrop: Literal["trees", "fence", "stand", "open"] = "trees"
    backdrop_m: float = 12.0
    lanes_far: int = 5
    lanes_near: int = 1
    contrast: float = 1.0
    sway_px: float = 0.3


@dataclass(frozen=True, slots=True, kw_only=True)
class Markers:
    """Known points: ticks every `tick_every_m` on both lines of the lane, cones every `cone_every_m` beside it.

    `tick_size_m` along and across the lane; `cone_height_m` (0: no cones).
    """

    tick_every_m: float = 5.0
    tick_size_m: tuple[float, float] = (0.08, 0.25)
    tick_colour: Colour = (0.80, 0.62, 0.05)
    cone_every_m: float = 10.0
    cone_height_m: float = 0.30


@dataclass(frozen=True, slots=True, kw_only=True)
class Scene:
    """One filmed rep, fully known.

    `camera` in the order of `stages.CAMERA_PARAMETERS`. `others`: runners beside the one measured.
    Frame i has t = i / rate_hz; what of the exposure that time means is said in `film`.
    """

    camera: tuple[float, ...]
    size_px: tuple[int, int] = (1920, 1080)
    rate_hz: float = 120.0
    duration_s: float = 4.0
    runner: Runner = field(default_factory=Runner)
    others: tuple[Runner, ...] = ()
    lane: Lane = field(default_factory=Lane)
    air: Air = field(
        default_factory=lambda: Air(temperature_c=20.0, pressure_hpa=1013.25, humidity_pct=50.0, wind_mps=0.0)
    )
    light: Light = field(default_factory=Light)
    sensor: Sensor = field(default_factory=Sensor)
    place: Place = field(default_factory=Place)
    markers: Markers = field(default_factory=Markers)
    seed: int = 0

    def __post_init__(self) -> None:
        if len(self.camera) != len(CAMERA_PARAMETERS):
            raise UsageError(
                f"Scene.camera has {len(self.camera)} numbers.",
                f"Give {len(CAMERA_PARAMETERS)}: {', '.join(CAMERA_PARAMETERS)}.",
            )
        w, h = self.size_px
        if w < 64 or h < 64 or w % 2 or h % 2:
            raise UsageError(f"Scene.size_px is {w}x{h}.", "Both sides must be even and at least 64 px.")
        if self.rate_hz <= 0 or self.duration_s * self.rate_hz < 1:
            raise UsageError(
                f"Scene: {self.duration_s} s at {self.rate_hz} frames/s holds no frame.",
                "Give a duration and a frame rate above zero.",
            )
        if self.air.temperature_c is None or self.air.pressure_hpa is None or self.air.humidity_pct is None:
            raise UsageError(
                f"Scene.air is incomplete: {self.air}.",
                "State temperature, pressure and humidity; wind may be left out.",
            )

    @property
    def frames(self) -> int:
        """Number of frames."""
        return round(self.duration_s * self.rate_hz)

    @property
    def side(self) -> int:
        """+1 where the camera stands on the runner's right (y below the lane), -1 on the left."""
        return 1 if self.camera[4] < self.lane.centre_y_m else -1
