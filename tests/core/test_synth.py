"""The forward simulator: its law against closed forms, its body against tables, its pictures against its own truth."""

from __future__ import annotations

from dataclasses import replace

import cv2
import numpy as np
import pytest

from vidkin.constants import G_MPS2
from vidkin.core import optics, synth
from vidkin.core.synth import Film, body, film, gait, law, paint, picture
from vidkin.core.synth.lens import Lens
from vidkin.core.synth.shapes import shapes
from vidkin.errors import UsageError
from vidkin.stages import Air, Athlete, Frame

SIZE = (512, 288)
AIR = Air(temperature_c=20.0, pressure_hpa=1013.25, humidity_pct=50.0, wind_mps=0.0)


def camera(side: int = 1, *, x_m: float = 7.5, distance_m: float = 13.0) -> tuple[float, ...]:
    f = 0.5 * SIZE[0] / np.tan(np.radians(65) / 2)
    return (f, -0.05, 0.01, x_m, 0.61 - side * distance_m, 1.5, side * np.pi / 2 + 0.01, -0.03, 0.01)


def a_scene(**changes: object) -> synth.Scene:
    base = synth.Scene(camera=camera(), size_px=SIZE, rate_hz=120.0, duration_s=3.0, air=AIR, seed=5)
    return replace(base, **changes)  # type: ignore[arg-type]


@pytest.fixture(scope="module")
def scene() -> synth.Scene:
    return a_scene()


@pytest.fixture(scope="module")
def frames(scene: synth.Scene) -> list[Frame]:
    ready = Film(scene)
    return [ready.frame(i) for i in (0, 100, 250)]


# --- the law ------------------------------------------------------------------------------------


def test_law_without_drag_is_the_exponential() -> None:
    """v = V0 (1 - exp(-F0 t / V0)): Furusawa, Hill & Parkinson 1927 (references.md section 2.1, READ-2)."""
    runner = synth.Runner(drag_area_m2=0.0, F0_n_kg=7.5, V0_mps=9.0, first_movement_s=0.4)
    run = law.integrate(runner, AIR, start_x_m=0.0, until_s=6.0)
    t = np.linspace(0.4, 6.0, 50)
    tau, since = 9.0 / 7.5, t - 0.4
    assert run.v(t) == pytest.approx(9.0 * (1 - np.exp(-since / tau)), abs=1e-9)
    x = 9.0 * (since - tau * (1 - np.exp(-since / tau))) - runner.set_back_m
    assert run.x(t) == pytest.approx(x, abs=1e-9)


def test_law_with_drag_reproduces_a_published_race() -> None:
    """100 m in 9.431 s after the start, speed at infinity 12.175 m/s: Eur. J. Phys. 34 (2013) 1227.

    Outputs READ-2, gamma = 59.7 kg/s and sigma = 0.60 kg/m MEM, times CALC (references.md section 3).
    """
    mass, force, gamma, sigma = 86.0, 815.8, 59.7, 0.60
    area = 2 * sigma / law.moist_air_density(AIR)
    runner = synth.Runner(
        athlete=Athlete(label="A", mass_kg=mass, stature_m=1.95),
        F0_n_kg=force / mass,
        V0_mps=force / gamma,
        drag_area_m2=area,
        set_back_m=0.0,
        first_movement_s=0.0,
    )
    run = law.integrate(runner, AIR, start_x_m=0.0, until_s=60.0)
    assert float(run.v(np.array([60.0]))[0]) == pytest.approx(12.175, abs=0.001)
    t = np.linspace(9.3, 9.6, 3001)
    assert float(np.interp(100.0, run.x(t), t)) == pytest.approx(9.431, abs=0.005)


@pytest.mark.parametrize(
    ("air", "published"),
    [
        (Air(temperature_c=23.0, pressure_hpa=1013.25, humidity_pct=50.0), 1.1860848),
        (Air(temperature_c=20.0, pressure_hpa=800.0, humidity_pct=65.0), 0.9441589),
    ],
)
def test_density_equals_the_printed_values(air: Air, published: float) -> None:
    """IEC 61094-2:2009 Table F.1 (references.md section 5, READ-2)."""
    assert law.moist_air_density(air) == pytest.approx(published, rel=2e-6)


def test_a_tailwind_pushes_and_a_headwind_holds() -> None:
    runner = synth.Runner()
    t = np.array([4.0])
    speeds = [
        float(law.integrate(runner, replace(AIR, wind_mps=w), start_x_m=0, until_s=4.0).v(t)[0]) for w in (-2, 0, 2)
    ]
    assert speeds[0] < speeds[1] < speeds[2]


def test_flying_run_carries_on_backwards() -> None:
    runner = synth.Runner(start="flying", entry_x_m=12.0, entry_mps=8.5)
    run = law.integrate(runner, AIR, start_x_m=0.0, until_s=2.0)
    assert float(run.x(np.array([0.0]))[0]) == pytest.approx(12.0, abs=1e-9)
    assert float(run.v(np.array([0.0]))[0]) == pytest.approx(8.5, abs=1e-9)
    t = np.linspace(-0.5, 2.0, 26)
    slope = (run.x(t + 1e-5) - run.x(t - 1e-5)) / 2e-5
    assert slope == pytest.approx(run.v(t), abs=1e-6)


# --- the body -----------------------------------------------------------------------------------


@pytest.mark.parametrize("sex", ["F", "M"])
def test_masses_sum_to_one(sex: str) -> None:
    """de Leva 1996: head + trunk + 2 limbs = 99.99 % (F), 100.00 % (M) (references.md section 11, READ, CALC)."""
    table = body.SEGMENTS[sex]
    total = sum(mass * (1 if name in ("head", "trunk") else 2) for name, (mass, _) in table.items())
    assert total == pytest.approx(1.0, abs=2e-4)
    assert body.mass_weights(sex).sum() == pytest.approx(1.0, abs=1e-12)


@pytest.mark.parametrize(
    ("start", "stature", "speed", "rate"),
    [
        ("standing", 1.55, 8.5, 4.8),
        ("standing", 1.95, 11.5, 4.3),
        ("flying", 1.60, 11.5, 4.3),
        ("flying", 1.95, 9.0, 4.8),
    ],
)
def test_body_keeps_its_promises(start: str, stature: float, speed: float, rate: float) -> None:
    """Centre of mass on the path, bones of fixed length, feet at rest in contact and never under the ground."""
    runner = synth.Runner(
        athlete=Athlete(label="A", mass_kg=22 * stature**2, stature_m=stature),
        start=start,  # type: ignore[arg-type]
        V0_mps=speed,
        entry_mps=0.95 * speed,
        step_rate_hz=rate,
    )
    scene = a_scene(runner=runner, duration_s=2.5)
    _, contacts, route = film.plan(scene, runner)
    pose = film.poses(scene, runner)
    joints, t = pose.joints_m, pose.t_s
    centre = np.einsum("j,njk->nk", body.mass_weights(runner.sex), joints)
    assert np.abs(centre - route.com(t)).max() < 1e-6

    def at(name: str) -> np.ndarray:
        return joints[:, body.INDEX[name]]

    for side in "lr":
        for first, second, bone in (
            ("hip", "knee", "thigh"),
            ("knee", "ankle", "shank"),
            ("shoulder", "elbow", "upper_arm"),
            ("elbow", "wrist", "forearm"),
        ):
            length = np.linalg.norm(at(f"{first}_{side}") - at(f"{second}_{side}"), axis=1)
            assert np.abs(length - body.LENGTHS[bone] * stature).max() < 1e-6
        for i in np.flatnonzero(contacts.left == (side == "l")):
            down = (t >= contacts.on_s[i]) & (t <= contacts.off_s[i])
            if down.any():
                ball = at(f"ball_{side}")[down]
                assert np.abs(ball[:, :2] - [contacts.x_m[i], contacts.y_m[i]]).max() < 1e-3
                assert np.ptp(ball, axis=0).max() < 1e-3
        for name in ("ball", "toe", "heel", "fingers"):
            assert at(f"{name}_{side}")[:, 2].min() > 0
        # a knee never bends backwards: it stays in front of the line from hip to ankle
        line, knee = at(f"ankle_{side}") - at(f"hip_{side}"), at(f"knee_{side}") - at(f"hip_{side}")
        assert (line[:, 0] * knee[:, 2] - line[:, 2] * knee[:, 0]).min() > -1e-6


def test_sprint_kinematics_are_plausible() -> None:
    """Cadence, contact and step length: references.md section 11 (top speed READ, weak; first steps MEM)."""
    scene = a_scene(duration_s=6.0)
    _, contacts, route = film.plan(scene, scene.runner)
    steps = slice(2, None)
    on, off, x = contacts.on_s[steps], contacts.off_s[steps], contacts.x_m[steps]
    assert 3.7 < 1 / (on[1] - on[0]) < 4.2
    assert 0.9 < x[1] - x[0] < 1.2
    assert 0.16 < (off - on)[0] < 0.20
    late = on > 4.0
    assert 0.09 < np.mean((off - on)[late]) < 0.12
    assert 4.4 < 1 / np.mean(np.diff(on[late])) < 4.6
    assert 1.9 < np.mean(np.diff(x[late])) < 2.4
    t = np.arange(4.5, 5.9, 0.002)
    swing = route.velocity(t)[:, 0] - np.polyval(np.polyfit(t, route.velocity(t)[:, 0], 2), t)
    assert 0.15 < np.ptp(swing) < 0.32
    height = route.com(t)[:, 2] / scene.runner.stature_m
    assert 0.55 < height.mean() < 0.60
    assert 0.02 < np.ptp(height) * scene.runner.stature_m < 0.07


def test_runner_is_still_before_the_first_movement() -> None:
    scene = a_scene()
    pose = film.poses(scene, scene.runner)
    before = pose.joints_m[pose.t_s < scene.runner.first_movement_s - 1e-9]
    assert np.ptp(before, axis=0).max() < 1e-9
    centre = film.plan(scene, scene.runner)[2].com(0.0)
    assert centre[0] == pytest.approx(-scene.runner.set_back_m, abs=1e-9)
    assert 0.58 < centre[2] < 0.70  # set position 0.60-0.66 m (references.md section 11, MEM)
    hands = [before[0, body.INDEX[f"fingers_{side}"]] for side in "lr"]
    assert all(0 <= hand[2] < 0.02 and -0.1 < hand[0] < 0 for hand in hands)


# --- the truth ----------------------------------------------------------------------------------


def test_truth_speed_is_the_derivative_of_position(scene: synth.Scene) -> None:
    known = synth.truth(scene)
    slope = np.gradient(known.x_m, known.t_s, edge_order=2)
    assert np.abs(slope - known.vx_mps)[5:-5].max() < 2e-3
    # over whole steps the wobble cancels: the law is the step average
    late = known.t_s > 1.6
    assert np.abs(known.x_m - known.law_x_m)[late].max() < 0.012
    assert np.mean((known.x_m - known.law_x_m)[late]) == pytest.approx(0, abs=0.003)


def test_truth_quantities_follow_from_the_law() -> None:
    scene = a_scene(air=replace(AIR, wind_mps=0.5))
    known, runner = synth.truth(scene), scene.runner
    q = known.quantities
    assert q["P_max"] == pytest.approx(runner.F0_n_kg * runner.V0_mps / 4)
    assert q["k_drag"] == pytest.approx(q["air_density"] * runner.drag_area_m2 / (2 * runner.mass_kg))
    inside = (known.t_s >= known.view_s[0]) & (known.t_s <= known.view_s[1])
    assert q["top_speed"] == pytest.approx(known.law_v_mps[inside].max(), abs=1e-3)
    assert q["top_speed_at"] == pytest.approx(known.law_x_m[inside].max(), abs=0.02)
    v = known.law_v_mps
    after = known.t_s >= runner.first_movement_s
    ode = runner.F0_n_kg * (1 - v / runner.V0_mps) - q["k_drag"] * (v - 0.5) * np.abs(v - 0.5)
    assert np.abs(known.law_a_mps2 - ode)[after].max() < 1e-9
    assert np.all(known.law_a_mps2[~after] == 0)
    start = float(q["RF_max"])
    v03 = float(np.interp(runner.first_movement_s + 0.3, known.t_s, v))
    force = runner.F0_n_kg * (1 - v03 / runner.V0_mps)
    assert start == pytest.approx(100 * force / np.hypot(force, G_MPS2), abs=0.01)
    for distance, time in known.splits_s.items():
        crossing = float(np.interp(distance, known.law_x_m, known.t_s))
        assert time == pytest.approx(crossing - runner.first_movement_s, abs=1e-4)
    assert list(known.splits_s) == [5.0, 10.0][: len(known.splits_s)]
    assert known.splits_s


def test_flying_truth_has_no_first_movement_nor_splits() -> None:
    runner = synth.Runner(start="flying", entry_x_m=-2.0, entry_mps=9.0)
    known = synth.truth(a_scene(runner=runner, duration_s=2.5))
    assert "first_movement" not in known.quantities
    assert not known.splits_s
    assert 0 < known.view_s[0] < known.view_s[1] < 2.5


def test_runner_who_is_never_in_view_has_no_top_speed() -> None:
    runner = synth.Runner(start="flying", entry_x_m=60.0, entry_mps=9.0)
    known = synth.truth(a_scene(runner=runner, duration_s=0.5))
    assert known.view_s == (0.0, 0.0)
    assert "top_speed" not in known.quantities


# --- projection and marks -----------------------------------------------------------------------


def test_lens_is_the_common_projection(scene: synth.Scene) -> None:
    rng = np.random.default_rng(0)
    points = rng.uniform([-30, -30, -1], [40, 30, 4], (500, 3))
    expected = optics.project(np.array(scene.camera), points, SIZE)
    assert Lens(scene.camera, SIZE).project(points) == pytest.approx(expected, rel=1e-12, nan_ok=True)


def test_marks_lie_on_their_projection(scene: synth.Scene) -> None:
    exact = synth.marks(scene, np.random.default_rng(1), sd_px=0.0)
    assert len(exact) >= 8
    for mark in exact:
        assert mark.uv_px == pytest.approx(optics.project(np.array(scene.camera), mark.xyz_m, SIZE)[0], abs=1e-9)
    assert {float(m.xyz_m[1]) for m in exact} >= {0.0, 1.22}
    clicked = np.array([synth.marks(scene, np.random.default_rng(i)) for i in range(40)])
    errors = np.array([[m.uv_px - e.uv_px for m, e in zip(row, exact, strict=True)] for row in clicked])
    assert errors.std() == pytest.approx(0.7, rel=0.06)


def test_drawn_ticks_stand_where_the_optics_put_them() -> None:
    """Centre of the difference with and without a tick, against the projection of the tick's centre."""
    size = (1280, 720)
    near = (2 * camera()[0], *camera(distance_m=6.0, x_m=2.0)[1:])
    plain = synth.Place(contrast=0)  # the line's wear would weigh the tick's parts unevenly
    bare = a_scene(camera=near, size_px=size, place=plain, markers=synth.Markers(tick_every_m=0, cone_height_m=0))
    ticked = replace(bare, markers=synth.Markers(tick_every_m=5.0, cone_height_m=0, tick_size_m=(0.10, 0.04)))
    change = np.abs(synth.empty_picture(ticked) - synth.empty_picture(bare))[..., 2]
    for x, y in ((0.0, 0.0), (0.0, 1.22), (5.0, 0.0), (5.0, 1.22)):
        u, v = optics.project(np.array(near), np.array([[x, y, 0.0]]), size)[0]
        rows, columns = np.mgrid[round(v) - 9 : round(v) + 10, round(u) - 18 : round(u) + 19]
        weight = change[rows, columns]
        assert weight.sum() > 1.0
        assert (weight * columns).sum() / weight.sum() == pytest.approx(u, abs=0.12)
        assert (weight * rows).sum() / weight.sum() == pytest.approx(v, abs=0.12)


def test_without_ticks_the_start_line_is_marked(scene: synth.Scene) -> None:
    labels = [
        m.label for m in synth.marks(replace(scene, markers=synth.Markers(tick_every_m=0)), np.random.default_rng(0))
    ]
    assert {"start, near line", "start, far line"} <= set(labels)
    nothing = a_scene(camera=camera(x_m=500.0), markers=synth.Markers(cone_height_m=0))
    assert synth.marks(nothing, np.random.default_rng(0)) == ()


# --- pictures -----------------------------------------------------------------------------------


def test_frames_have_the_promised_shape(scene: synth.Scene, frames: list[Frame]) -> None:
    for frame in frames:
        assert frame.luma.shape == (288, 512)
        assert frame.chroma_u.shape == frame.chroma_v.shape == (144, 256)
        assert frame.luma.dtype == frame.chroma_u.dtype == frame.chroma_v.dtype == np.uint8
        assert frame.t_s == pytest.approx(frame.index / scene.rate_hz)
    assert scene.frames == 360


def test_the_same_scene_gives_the_same_frames(scene: synth.Scene) -> None:
    short = replace(scene, duration_s=2 / scene.rate_hz)
    first, again = list(synth.render(short)), list(synth.render(short))
    other = list(synth.render(replace(short, seed=6)))
    for a, b, c in zip(first, again, other, strict=True):
        assert np.array_equal(a.luma, b.luma)
        assert np.array_equal(a.chroma_u, b.chroma_u)
        assert not np.array_equal(a.luma, c.luma)


def silhouette(frame: Frame, empty: Frame) -> np.ndarray:
    change = np.abs(frame.luma.astype(float) - empty.luma) + np.abs(
        cv2.resize(frame.chroma_v.astype(float) - empty.chroma_v.astype(float), frame.luma.shape[::-1])
    )
    return np.asarray(cv2.GaussianBlur(change, (0, 0), 1.0) > 9)


@pytest.mark.parametrize("side", [1, -1])
def test_the_drawn_body_is_where_the_truth_is(side: int) -> None:
    """And the other side of the lane mirrors the direction in the picture, not the truth."""
    quiet = synth.Sensor(shot=0, read=0, readout_s=0)
    still = synth.Place(sway_px=0, contrast=0.4, surface="grey")
    scene = a_scene(
        camera=camera(side), sensor=quiet, place=still, light=synth.Light(overcast=1.0, flicker=0), duration_s=2.4
    )
    known = synth.truth(scene)
    stage = Film(scene)
    empty = Film(replace(scene, runner=replace(scene.runner, start="flying", entry_x_m=80.0))).frame(0)
    found = []
    for index in (60, 180, 230, 260):
        mask = silhouette(stage.frame(index), empty)
        v, u = np.nonzero(mask)
        found.append(u.mean())
        k = round(index / scene.rate_hz * 1000)
        centre = np.array([[known.x_m[k], known.y_m[k], known.z_m[k]]])
        expected = optics.project(np.array(scene.camera), centre, SIZE)[0]
        metre = scene.camera[0] / 13.0
        assert u.mean() == pytest.approx(expected[0], abs=0.22 * metre)
        assert v.mean() == pytest.approx(expected[1], abs=0.22 * metre)
        assert np.ptp(v) > 0.5 * scene.runner.stature_m * metre
    assert np.sign(found[-1] - found[0]) == side
    mirrored = synth.truth(replace(scene, camera=camera(-side)))
    assert mirrored.quantities["F0"] == known.quantities["F0"]
    assert np.array_equal(mirrored.x_m, known.x_m)


def test_a_shadow_falls_away_from_the_sun() -> None:
    sunny = synth.Light(azimuth_deg=250.0, elevation_deg=40.0, overcast=0.0, flicker=0)
    quiet = synth.Sensor(shot=0, read=0, readout_s=0)
    scene = a_scene(light=sunny, sensor=quiet, place=synth.Place(sway_px=0), duration_s=2.0)
    stage = Film(scene)
    frame = stage.frame(0)
    trunk = stage.actors[0].poses.joints_m[50, body.INDEX["chest"]]
    dark = trunk - trunk[2] / np.sin(np.radians(40)) * stage.light.to_sun
    lit_side = trunk + trunk[2] / np.sin(np.radians(40)) * stage.light.to_sun * np.array([1, 1, 0])
    lit_side[2] = 0

    def ratio(point: np.ndarray) -> float:
        u, v = (round(float(c)) for c in optics.project(np.array(scene.camera), point[None], SIZE)[0])
        bare = stage.empty.luma[v - 1 : v + 2, u - 2 : u + 3] / 64.0 - 16
        return float(np.mean(frame.luma[v - 1 : v + 2, u - 2 : u + 3] - 16.0) / bare.mean())

    assert ratio(dark) < 0.85
    assert ratio(lit_side) == pytest.approx(1.0, abs=0.03)


def test_rows_are_exposed_one_after_another() -> None:
    """A joint in the middle row is seen at the frame's time, one lower down later by its share of the readout."""
    scene = a_scene(runner=synth.Runner(start="flying", entry_x_m=0.0, entry_mps=9.0), duration_s=1.5)
    lens = Lens(scene.camera, SIZE)
    actor = paint.Actor(poses=film.poses(scene, scene.runner), shapes=shapes(scene.runner))
    at_once = paint.joints_in_frame(lens, actor, np.zeros(1), t_s=0.8, readout_s=0.0)[0]
    rolling = paint.joints_in_frame(lens, actor, np.zeros(1), t_s=0.8, readout_s=0.020)[0]
    rows = lens.project(rolling)[:, 1]
    delay = 0.020 * (rows - 143.5) / 288
    k = body.INDEX["shoulder_mid"]
    assert rolling[k, 0] - at_once[k, 0] == pytest.approx(9.0 * delay[k], abs=0.003)
    assert at_once == pytest.approx(actor.poses.at(np.full(len(body.JOINTS), 0.8)), abs=1e-12)


def test_a_longer_exposure_blurs_the_moving_body(scene: synth.Scene) -> None:
    place = synth.Place(sway_px=0, contrast=0.3)

    def steepest(exposure_s: float) -> float:
        sensor = synth.Sensor(exposure_s=exposure_s, shot=0, read=0)
        runner = synth.Runner(start="flying", entry_x_m=0.0, entry_mps=9.5)
        stage = Film(replace(scene, runner=runner, sensor=sensor, place=place))
        (left, top, right, bottom), drawn = stage._runners(0.7) or pytest.fail("no runner drawn")
        change = (drawn.luma - stage.empty.luma[top:bottom, left:right]) / 64.0
        return float(np.sort(np.abs(np.diff(change, axis=1)).ravel())[-20:].mean())

    assert steepest(1 / 50) < 0.7 * steepest(1 / 4000)


def test_noise_has_the_stated_size() -> None:
    """Variance in linear light shot * signal + read^2, seen through the transfer curve (BT.709-6; MEM)."""
    sensor = synth.Sensor(shot=2e-4, read=0.002)
    noise = picture.Noise(sensor, SIZE, np.random.default_rng(3))
    for light in (0.02, 0.18, 0.6):
        flat = picture.planes(np.full((SIZE[1], SIZE[0], 3), light, np.float32))
        seen = noise.luma(flat.luma, noise.sd_map(flat.luma)).astype(float)
        slope = 219 * 0.45 * 1.099 * light**-0.55
        expected = np.hypot(slope * np.sqrt(2e-4 * light + 0.002**2), np.sqrt(1 / 12))
        assert seen.std() == pytest.approx(expected, rel=0.08)
        assert seen.mean() == pytest.approx(16 + 219 * (1.099 * light**0.45 - 0.099), abs=0.2)
        assert np.all(np.abs(flat.u / 64 - 128) < 0.1)


def test_colours_are_bt709_limited_range() -> None:
    """Pure red, green, blue: Y 63, 173, 32; Cb 102, 42, 240; Cr 240, 26, 118 (BT.709-6 8-bit; MEM)."""
    for k, (y, cb, cr) in enumerate(((63, 102, 240), (173, 42, 26), (32, 240, 118))):
        colour = np.zeros((4, 4, 3), np.float32)
        colour[..., k] = 1
        coded = picture.planes(colour)
        assert np.round(coded.luma[0, 0] / 64) == y
        assert np.round(coded.u[0, 0] / 64) == cb
        assert np.round(coded.v[0, 0] / 64) == cr


def test_a_second_runner_is_drawn_behind(scene: synth.Scene) -> None:
    second = replace(scene.runner, y_m=0.61 + 1.22, first_movement_s=0.9)
    quiet = replace(scene, sensor=synth.Sensor(shot=0, read=0), place=synth.Place(sway_px=0))
    alone, both = Film(quiet), Film(replace(quiet, others=(second,)))
    change = np.abs(alone.frame(170).luma.astype(int) - both.frame(170).luma)
    assert np.count_nonzero(change > 10) > 150
    # the nearer runner's own pixels stay
    actor = alone.actors[0]
    chest = actor.poses.at(np.full(len(body.JOINTS), 170 / 120))[body.INDEX["chest"]]
    u, v = np.round(optics.project(np.array(scene.camera), chest[None], SIZE)[0]).astype(int)
    assert change[v, u] <= 2


@pytest.mark.parametrize(
    ("surface", "backdrop"), [("red", "trees"), ("blue", "fence"), ("grey", "stand"), ("grass", "open")]
)
def test_every_place_can_be_drawn(surface: str, backdrop: str) -> None:
    place = synth.Place(surface=surface, backdrop=backdrop)  # type: ignore[arg-type]
    f = 0.5 * 160 / np.tan(np.radians(65) / 2)
    light = synth.empty_picture(a_scene(size_px=(160, 90), camera=(f, *camera()[1:]), place=place))
    assert np.isfinite(light).all()
    assert light.min() >= 0
    assert 0.05 < light.mean() < 0.6
    assert light.std() > 0.02


# --- random scenes ------------------------------------------------------------------------------


def test_random_scenes_are_fit_to_analyse() -> None:
    sides, starts = set(), set()
    for seed in range(5):
        scene = synth.random_scene(np.random.default_rng(seed))
        runner = scene.runner
        known = synth.truth(scene)
        sides.add(scene.side)
        starts.add(runner.start)
        assert 1.55 <= runner.stature_m <= 1.95
        assert 6 <= runner.F0_n_kg <= 9
        assert 8.5 <= runner.V0_mps <= 11.5
        assert 8 <= abs(scene.camera[4] - scene.lane.centre_y_m) <= 25
        assert known.view_s[1] - known.view_s[0] > 0.8
        assert len(synth.marks(scene, np.random.default_rng(0))) >= 8
        if runner.start == "standing":
            assert known.view_s[0] == 0.0
            assert 0.3 <= runner.first_movement_s <= 1.0
    assert sides == {-1, 1}
    assert starts == {"standing", "flying"}


def test_random_scene_takes_overrides() -> None:
    scene = synth.random_scene(np.random.default_rng(0), size_px=(1280, 720), rate_hz=60.0)
    assert scene.size_px == (1280, 720)
    assert scene.rate_hz == 60.0
    assert synth.random_scene(np.random.default_rng(0), size_px=(1280, 720), rate_hz=60.0) == scene


# --- errors -------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("change", "words"),
    [
        ({"camera": (1000.0, 0.0)}, "has 2 numbers"),
        ({"size_px": (641, 360)}, "641x360"),
        ({"rate_hz": 0.0}, "0.0 frames/s"),
        ({"air": Air(temperature_c=20.0)}, "incomplete"),
    ],
)
def test_a_scene_that_cannot_be_says_why(change: dict[str, object], words: str) -> None:
    with pytest.raises(UsageError, match=words):
        a_scene(**change)


@pytest.mark.parametrize(
    ("change", "words"),
    [({"athlete": Athlete(label="Z", mass_kg=70.0)}, "stature None m"), ({"F0_n_kg": 0.0}, "F0 0.0 N/kg")],
)
def test_a_runner_that_cannot_be_says_why(change: dict[str, object], words: str) -> None:
    with pytest.raises(UsageError, match=words):
        replace(synth.Runner(), **change)  # type: ignore[arg-type]


def test_smooth_step_has_flat_ends() -> None:
    x = np.linspace(-0.5, 1.5, 201)
    y = gait.smooth_step(x)
    assert y[0] == 0
    assert y[-1] == 1
    assert np.all(np.diff(y) >= 0)
