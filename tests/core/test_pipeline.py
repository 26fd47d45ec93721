"""The whole job on one small rendered rep, and what is not run after a stage that could not answer."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import replace

import numpy as np
import pytest

from vidkin.core import synth
from vidkin.core.pipeline import Scan, analyse
from vidkin.notices import Failure
from vidkin.stages import (
    Air,
    Analysis,
    Camera,
    Fit,
    Footage,
    Frame,
    Lane,
    Motion,
    Rep,
    Settings,
    Steps,
    Track,
)

SIZE = (640, 360)
RATE_HZ = 60.0


def small_scene() -> synth.Scene:
    """An invented rep: a start from rest, filmed from 12 m, 14 m of lane in view."""
    f = 0.5 * SIZE[0] / np.tan(np.radians(62) / 2)
    return synth.Scene(
        camera=(f, -0.04, 0.01, 5.6, -11.4, 1.6, np.pi / 2, -0.045, 0.005),
        size_px=SIZE,
        rate_hz=RATE_HZ,
        duration_s=2.8,
        runner=synth.Runner(first_movement_s=0.5, F0_n_kg=7.8, V0_mps=9.8),
        air=Air(temperature_c=18.0, pressure_hpa=1010.0, humidity_pct=60.0, wind_mps=0.0),
        sensor=synth.Sensor(exposure_s=1 / 800, readout_s=0.004),
        markers=synth.Markers(tick_every_m=2.5, cone_every_m=5.0),
        seed=4,
    )


class Rendered:
    """Frames kept in memory, handed out afresh as often as asked."""

    def __init__(self, frames: list[Frame]) -> None:
        self.frames = frames
        self.passes = 0

    def __call__(self) -> Iterator[Frame]:
        self.passes += 1
        return iter(self.frames)


@pytest.fixture(scope="module")
def scene() -> synth.Scene:
    return small_scene()


@pytest.fixture(scope="module")
def film(scene: synth.Scene) -> Rendered:
    return Rendered(list(synth.render(scene)))


@pytest.fixture(scope="module")
def footage(film: Rendered) -> Footage:
    return Footage(name="rep.mp4", width_px=SIZE[0], height_px=SIZE[1], t_s=np.array([f.t_s for f in film.frames]))


@pytest.fixture(scope="module")
def rep(scene: synth.Scene) -> Rep:
    return Rep(
        clip="rep.mp4",
        athlete=scene.runner.athlete,
        air=scene.air,
        lane=scene.lane,
        marks=synth.marks(scene, np.random.default_rng(2)),
        splits_m=(5.0, 10.0),
    )


def scanned(rep: Rep, film: Rendered) -> Scan:
    scan = Scan(rep)
    for frame in film():
        scan.visit(frame)
    return scan


@pytest.fixture(scope="module")
def told() -> list[tuple[str, int]]:
    return []


@pytest.fixture(scope="module")
def done(rep: Rep, film: Rendered, footage: Footage, told: list[tuple[str, int]]) -> Analysis:
    scan = scanned(rep, film)
    film.passes = 0
    return analyse(scan, footage, film, progress=lambda stage, count: told.append((stage, count)))


# --- the whole job ------------------------------------------------------------------------------


def test_an_analysis_holds_all_stages(done: Analysis, rep: Rep, footage: Footage, film: Rendered) -> None:
    kinds = ((done.camera, Camera), (done.track, Track), (done.steps, Steps), (done.motion, Motion), (done.fit, Fit))
    for stage, kind in kinds:
        assert isinstance(stage, kind), stage
    assert done.rep is rep
    assert done.footage is footage
    assert done.settings == Settings()
    assert done.stages == (footage, done.camera, done.track, done.steps, done.motion, done.fit)
    assert film.passes == 1  # after the scan, one more pass over the clip


def test_it_finds_the_truth(done: Analysis, scene: synth.Scene) -> None:
    """At 640 x 360 px and 60 frames a second, so with wide margins: top speed, splits, the lane's place of the body."""
    assert isinstance(done.fit, Fit)
    assert isinstance(done.motion, Motion)
    truth = synth.truth(scene)
    fit = done.fit
    assert fit.start == "standing"
    assert fit.quantities["top_speed"].value == pytest.approx(truth.quantities["top_speed"], rel=0.04)
    assert fit.quantities["first_movement"].value == pytest.approx(0.5, abs=0.06)
    for split in fit.splits:
        assert split.time_s == pytest.approx(truth.splits_s[split.distance_m], abs=0.06)
    x = np.interp(done.motion.t_s, truth.t_s, truth.x_m)
    assert np.sqrt(np.mean((done.motion.x_m - x) ** 2)) < 0.15


def test_notices_and_failures_are_those_of_the_stages(done: Analysis) -> None:
    stages = (done.footage, done.camera, done.track, done.steps, done.motion, done.fit)
    assert done.notices == tuple(n for s in stages for n in s.notices)  # type: ignore[union-attr]
    assert isinstance(done.fit, Fit)
    assert done.failures == done.fit.refused


def test_progress_names_the_stages(done: Analysis, told: list[tuple[str, int]], film: Rendered) -> None:
    assert done.fit
    counts = [count for stage, count in told if stage == "track"]
    assert counts == list(range(1, len(film.frames) + 1))
    assert told[-1][0] == "fit"


def test_settings_reach_the_stages(rep: Rep, film: Rendered, footage: Footage) -> None:
    settings = Settings(level=0.8, window_s=0.3)
    found = analyse(scanned(rep, film), footage, film, settings=settings)
    assert found.settings is settings
    assert isinstance(found.motion, Motion)
    assert isinstance(found.fit, Fit)
    assert found.motion.window_s == 0.3
    assert found.fit.quantities["top_speed"].level == 0.8


# --- stages that cannot answer ------------------------------------------------------------------


def not_run(found: Analysis, *names: str) -> None:
    for name in names:
        assert getattr(found, name) is None, name


def test_without_a_camera_nothing_is_run(rep: Rep, film: Rendered, footage: Footage) -> None:
    film.passes = 0
    scan = scanned(replace(rep, marks=rep.marks[:4]), film)
    found = analyse(scan, footage, film)
    assert isinstance(found.camera, Failure)
    assert found.camera.code == "too_few_marks"
    not_run(found, "track", "steps", "motion", "fit")
    assert found.failures == (found.camera,)
    assert found.stages == (footage, found.camera)
    assert film.passes == 1  # the clip is not read again
    assert scan.picture is film.frames[0]  # for the marker overlay


def test_without_a_lane_in_view_nothing_is_tracked(rep: Rep, film: Rendered, footage: Footage) -> None:
    film.passes = 0
    found = analyse(scanned(replace(rep, lane=Lane(centre_y_m=-30.0)), film), footage, film)
    assert isinstance(found.camera, Camera)
    assert isinstance(found.track, Failure)
    assert found.track.code == "lane_out_of_view"
    not_run(found, "steps", "motion", "fit")
    assert film.passes == 1


def test_without_a_track_the_rest_is_not_run(rep: Rep, film: Rendered, footage: Footage) -> None:
    """Only the frames before the start: a camera, but nobody who runs."""
    still = Rendered(film.frames[:20])
    found = analyse(scanned(rep, still), footage, still)
    assert isinstance(found.camera, Camera)
    assert isinstance(found.track, Failure)
    assert found.track.code == "nobody_runs"
    not_run(found, "steps", "motion", "fit")
    assert found.failures == (found.track,)


def test_without_a_motion_there_is_no_fit(rep: Rep, film: Rendered, footage: Footage) -> None:
    """A window longer than the pass: camera, track and steps stand and are still reported."""
    found = analyse(scanned(rep, film), footage, film, settings=Settings(window_s=30.0))
    assert isinstance(found.track, Track)
    assert isinstance(found.motion, Failure)
    assert found.motion.code == "shorter_than_window"
    not_run(found, "fit")
    assert found.failures == (found.motion,)


def test_a_scan_that_saw_nothing_is_a_mistake(rep: Rep, film: Rendered, footage: Footage) -> None:
    with pytest.raises(ValueError, match="seen no frame"):
        analyse(Scan(rep), footage, film)
