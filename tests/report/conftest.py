"""A plausible complete Analysis built by hand, and variants in which stages could not answer.

An invented scenario: a runner leaves a standing start and passes a camera 14 m from the lane centre. Nothing here
runs a stage of the product, so the report is tested on its own.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pytest

from vidkin.core import optics
from vidkin.notices import Failure, Notice
from vidkin.stages import (
    Air,
    Analysis,
    Athlete,
    Camera,
    Curves,
    Fit,
    Footage,
    Frame,
    Lane,
    LawFit,
    Mark,
    Motion,
    Quantity,
    Rep,
    Settings,
    Split,
    Steps,
    Track,
)

SIZE_PX = (1920, 1080)
V_MAX, TAU, T0, MASS_KG, HALF_RHO_CDA = 9.2, 1.18, 0.55, 71.0, 0.27
PARAMETERS = np.array([1390.0, -0.06, 0.012, 9.6, -13.39, 1.62, np.pi / 2 + 0.02, -0.035, 0.008])
#: x, y, z [m] of the marks: both lines every five metres, and two poles.
MARKS_M = [(x, y, 0.0) for x in (0.0, 5.0, 10.0, 15.0, 18.0) for y in (0.0, 1.22)] + [
    (2.5, 1.22, 1.0),
    (12.5, 1.22, 1.0),
]


def make_camera(size_px: tuple[int, int] = SIZE_PX, *, noise_px: float = 0.7, seed: int = 3) -> Camera:
    """A camera with twelve marks and the errors that `noise_px` of clicking leaves."""
    rng = np.random.default_rng(seed)
    p = PARAMETERS.copy()
    p[0] *= size_px[0] / SIZE_PX[0]
    xyz = np.array(MARKS_M)
    model = optics.project(p, xyz, size_px)
    error = rng.normal(0.0, noise_px, model.shape)
    marks = tuple(
        Mark(label=f"{point[0]:g} m, {'near' if point[1] == 0 else 'far'} line", xyz_m=point, uv_px=uv)
        for point, uv in zip(xyz, model + error, strict=True)
    )
    depth = ((xyz - p[3:6]) @ optics.rotation(*p[6:9]).T)[:, 2]
    x = np.linspace(0.0, 20.0, 21)
    return Camera(
        width_px=size_px[0],
        height_px=size_px[1],
        parameters=p,
        cov=np.diag([9.0, 1e-5, 1e-5, 4e-4, 9e-4, 1e-4, 1e-7, 1e-7, 1e-7]),
        marks=marks,
        mark_uv_px=model,
        mark_error_px=error,
        mark_error_m=np.hypot(*error.T) * depth / p[0],
        x_sd_m=np.column_stack([x, 0.003 + 0.00006 * (x - 9.6) ** 2]),
        scale_sd=0.0006,
    )


def _curve(t_s: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Mono-exponential position, velocity, acceleration (Furusawa, Hill & Parkinson 1927), zero before the start."""
    u = np.maximum(t_s - T0, 0.0)
    decay = np.exp(-u / TAU)
    return V_MAX * (u - TAU * (1 - decay)), V_MAX * (1 - decay), np.where(t_s < T0, 0.0, V_MAX / TAU * decay)


def _time_at(distance_m: float) -> float:
    t = np.linspace(T0, T0 + 6, 60001)
    return float(np.interp(distance_m, _curve(t)[0], t) - T0)


def make_analysis() -> Analysis:
    """All stages answered."""
    rng = np.random.default_rng(11)
    fps = 120.0
    camera = make_camera()
    t = np.arange(0, 3.9, 1 / fps)
    x, v, a = _curve(t)
    z = 0.95 + 0.03 * np.sin(2 * np.pi * 4.2 * t)
    uv = optics.project(camera.parameters, np.column_stack([x, np.full_like(x, 0.61), z]), SIZE_PX)
    half_w, half_h = 34.0 + 8 * np.sin(2 * np.pi * 2.1 * t), 84.0
    box = np.column_stack([uv[:, 0] - half_w, uv[:, 1] - half_h, uv[:, 0] + half_w, uv[:, 1] + half_h])
    seen = uv[:, 0] < SIZE_PX[0] - 5
    whole = seen & (box[:, 2] < SIZE_PX[0] - 1)
    box[:, 2] = np.minimum(box[:, 2], SIZE_PX[0] - 1)
    n = int(seen.sum())
    on = T0 + np.array([0.32, 0.58, 0.82, 1.06, 1.30, 1.54, 1.77, 2.01, 2.24, 2.47])
    track = Track(
        frame=np.arange(n),
        t_s=t[seen],
        uv_px=uv[seen] + rng.normal(0, 0.6, (n, 2)),
        cov_px2=np.tile(np.eye(2) * 0.36, (n, 1, 1)),
        box_px=box[seen],
        area_px=np.full(n, 6200.0),
        whole=whole[seen],
        spread_px=half_w[seen],
        low_t_s=on,
        low_uv_px=np.column_stack([np.full(10, 500.0), np.full(10, 530.0), np.full(10, 700.0)]),
        direction=1,
    )
    steps = Steps(
        on_s=on,
        off_s=on + np.linspace(0.17, 0.105, 10),
        x_m=_curve(on)[0] + 0.25,
        step_rate_hz=4.21,
        step_rate_sd_hz=0.03,
        lateral_m=0.66,
        lateral_sd_m=0.04,
        lateral_source="feet",
    )
    tm, xm, vm, am = t[whole], x[whole], v[whole], a[whole]
    m = tm.size
    inside = (tm > tm[0] + 0.25) & (tm < tm[-1] - 0.25)
    wobble = 0.05 * np.sin(2 * np.pi * 4.2 * tm)
    motion = Motion(
        t_s=tm,
        x_m=xm + rng.normal(0, 0.006, m) + 0.03 * np.sin(2 * np.pi * 4.2 * tm),
        z_m=z[whole],
        x_sd_m=np.full(m, 0.006),
        shared_m=np.column_stack([0.003 + 0 * xm, 0.0006 * (xm - 9.6)]),
        shared_names=("camera position", "scale"),
        smooth_x_m=xm,
        v_mps=vm + wobble,
        a_mps2=am,
        v_sd_mps=np.where(inside, 0.06, 0.16),
        a_sd_mps2=np.where(inside, 0.4, 1.6),
        inside=inside,
        window_s=0.48,
        step_rate_hz=4.21,
    )
    return Analysis(
        rep=Rep(
            clip="rep3.mp4",
            athlete=Athlete(label="A", mass_kg=MASS_KG, stature_m=1.74),
            air=Air(temperature_c=18.0, pressure_hpa=1012.0, humidity_pct=55.0, wind_mps=0.3),
            lane=Lane(),
            marks=camera.marks,
            splits_m=(5.0, 10.0, 15.0),
        ),
        settings=Settings(),
        footage=Footage(
            name="rep3.mp4", width_px=1920, height_px=1080, t_s=t, codec="h264", bit_depth=8, notices=(NOTICES[0],)
        ),
        camera=camera,
        track=replace(track, notices=(NOTICES[1],)),
        steps=steps,
        motion=motion,
        fit=make_fit(motion),
        provenance={
            "vidkin": "0.1.0",
            "versions": {"numpy": np.__version__, "python": "3.11"},
            "inputs": {"clip_sha256": "9f2c" * 16, "sheet_sha256": "07ab" * 16},
        },
    )


NOTICES = (
    Notice(
        code="footage-test",
        stage="footage",
        severity="info",
        text="2 of 468 frames repeat the frame before.",
        hint="Nothing to do.",
    ),
    Notice(
        code="track-test",
        stage="track",
        severity="warning",
        text="The picture's edge cuts the body in 9 frames.",
        hint="Leave a metre of free picture at both ends.",
    ),
)


def make_fit(motion: Motion) -> Fit:
    """A fit whose numbers agree with one another."""
    t = np.linspace(T0, float(motion.t_s[-1]), 150)
    x, v, a = _curve(t)
    drag_n = HALF_RHO_CDA * (v - 0.3) * np.abs(v - 0.3)
    force = a + drag_n / MASS_KG
    curves = Curves(
        t_s=t,
        x_m=x,
        v_mps=v,
        v_low_mps=v - 0.06,
        v_high_mps=v + 0.06,
        a_mps2=a,
        force_n_kg=force,
        power_w_kg=force * v,
        drag_n=drag_n,
    )
    rows = np.maximum(motion.t_s, 0)
    law = LawFit(
        name="mono_exponential",
        words="speed nears a ceiling at a rate that falls in proportion to what is left; no fatigue",
        parameters={"v_max": V_MAX, "tau": TAU, "t0": T0},
        sd={"v_max": 0.05, "tau": 0.02, "t0": 0.01},
        criterion=-2210.4,
        weight=0.94,
        t_s=t,
        x_m=x,
        v_mps=v,
        a_mps2=a,
        residual_m=motion.x_m - _curve(rows)[0],
    )
    second = replace(
        law,
        name="constant_power_drag",
        words="every second the same net power goes into motion and drag",
        parameters={"Z": 15.2, "k_drag": 0.0051},
        sd={"Z": 0.4, "k_drag": 0.0004},
        criterion=-2204.9,
        weight=0.06,
        v_mps=v * 0.99 + 0.05,
        residual_m=law.residual_m + 0.04 * np.sin(motion.x_m),
    )
    third = replace(
        second, name="constant_power", words="every second the same power, no drag", criterion=-1890.0, weight=1e-70
    )
    q = {
        "top_speed": (8.62, 8.52, 8.72, "m/s", "profile"),
        "top_speed_at": (18.9, 18.2, 18.9, "m", "profile"),
        "v_max": (V_MAX, 9.10, 9.31, "m/s", "profile"),
        "tau": (TAU, 1.141, 1.222, "s", "profile"),
        "F0": (7.91, 7.62, 8.19, "N/kg", "profile"),
        "F0_absolute": (561.6, 541.0, 581.5, "N", "profile"),
        "P_max_absolute": (1349.0, 1306.4, 1398.7, "W", "profile"),
        "effective_drag_area": (1.81, 1.65, 1.97, "m^2", "profile, lumped"),
        "V0": (9.61, 9.42, 9.80, "m/s", "profile"),
        "P_max": (19.0, 18.4, 19.7, "W/kg", "profile"),
        "RF_max": (51.8, 50.6, 53.1, "%", "profile"),
        "D_RF": (-7.3, -7.7, -6.9, "%/(m/s)", "profile"),
        "Z": (15.2, 14.4, 16.0, "W/kg", "profile"),
        "k_drag": (0.0051, 0.0043, 0.0059, "1/m", "profile"),
        "drag_area": (0.447, 0.335, 0.559, "m^2", "body size (Arsac & Locatelli 2002), +-25 %"),
        "drag_force": (18.7, 14.0, 23.4, "N", "body size"),
        "drag_power_share": (24.1, 18.0, 30.2, "%", "body size"),
        "first_movement": (T0, 0.52, 0.58, "s", "profile"),
        "step_rate": (4.21, 4.15, 4.27, "Hz", "contacts"),
    }
    quantities = {
        name: Quantity(name=name, value=value, low=low, high=high, unit=unit, method=method)
        for name, (value, low, high, unit, method) in q.items()
    }
    quantities["air_density"] = Quantity(
        name="air_density",
        value=1.2037,
        low=None,
        high=None,
        unit="kg/m^3",
        method="CIPM-2007",
        why_no_interval="the sheet states no uncertainty of the weather",
    )
    return Fit(
        start="standing",
        law="mono_exponential",
        quantities=quantities,
        splits=tuple(
            Split(distance_m=d, time_s=_time_at(d), low_s=_time_at(d) - 0.012, high_s=_time_at(d) + 0.012)
            for d in (5.0, 10.0, 15.0)
        ),
        laws={f.name: f for f in (law, second, third)},
        curves=curves,
        refused=(
            Failure(
                stage="fit",
                code="fit-test-drag",
                reason="A drag area cannot be fitted: the runner covers only 18.9 m.",
                hint="Film at least 30 m with top speed in view.",
            ),
        ),
    )


def fail(stage: str) -> Failure:
    """A stage's failure."""
    return Failure(
        stage=stage,  # type: ignore[arg-type]
        code=f"{stage}-test",
        reason=f"The {stage} could not be worked out from 4 marks.",
        hint="Add a mark on the far line, near 15 m.",
    )


def make_variant(name: str) -> Analysis:
    """`complete`, or the stage that could not answer, or `bare` (a fit that says little)."""
    full = make_analysis()
    nothing = {"camera": None, "track": None, "steps": None, "motion": None, "fit": None}
    order = ("camera", "track", "steps", "motion", "fit")
    if name == "complete":
        return full
    if name == "steps":
        return replace(full, steps=fail("steps"))
    if name == "unrun":
        return replace(full, track=None, steps=None, motion=None, fit=None)
    if name == "bare":
        assert isinstance(full.fit, Fit)
        few = {k: q for k, q in full.fit.quantities.items() if k in ("top_speed", "top_speed_at")}
        few["top_speed"] = replace(
            few["top_speed"], low=None, high=None, why_no_interval="the profile does not close upwards"
        )
        fit = replace(
            full.fit,
            start="flying",
            quantities=few,
            splits=(),
            curves=replace(full.fit.curves, drag_n=np.zeros(0)),
        )
        rep = replace(full.rep, athlete=Athlete(), air=Air())
        return replace(full, rep=rep, fit=fit, steps=None, provenance={})
    gone = dict(nothing) if name == "camera" else {k: nothing[k] for k in order[order.index(name) :]}
    gone[name] = fail(name)
    return replace(full, **gone)


VARIANTS = ("complete", "camera", "track", "steps", "motion", "fit", "unrun", "bare")


@pytest.fixture
def analysis() -> Analysis:
    return make_analysis()


@pytest.fixture
def variant() -> Callable[[str], Analysis]:
    return make_variant


@pytest.fixture(params=VARIANTS)
def any_analysis(request: pytest.FixtureRequest) -> Analysis:
    return make_variant(request.param)


@pytest.fixture
def camera_of() -> Callable[..., Camera]:
    return make_camera


@pytest.fixture
def lane() -> Lane:
    return Lane()


@pytest.fixture
def frames_of() -> Callable[[Analysis, int], list[Frame]]:
    """The first `count` frames of an analysis' clip: a plain grey picture."""

    def build(analysis: Analysis, count: int) -> list[Frame]:
        w, h = analysis.footage.width_px, analysis.footage.height_px
        luma, chroma = np.full((h, w), 120, np.uint8), np.full((h // 2, w // 2), 128, np.uint8)
        return [
            Frame(index=i, t_s=float(analysis.footage.t_s[i]), luma=luma, chroma_u=chroma, chroma_v=chroma)
            for i in range(count)
        ]

    return build
