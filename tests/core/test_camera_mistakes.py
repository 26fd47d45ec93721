# Marks that cannot be right are named and left out; clicks on lines and poles help; where one more mark helps.
from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from vidkin.core import optics
from vidkin.core.camera import best_next_mark, resect
from vidkin.stages import Array, Camera, CameraPrior, Lane, Mark, Sighting

SIZE = (1920, 1080)
TRUTH = np.array([1400.0, -0.03, 0.005, 12.0, -14.0, 1.5, np.pi / 2 + 0.03, -0.03, 0.01])
XS = (3.0, 6.5, 10.0, 14.0, 17.5, 21.0)


def sightings_of(points: Array, rng: np.random.Generator, *, sd_px: float = 0.7) -> Array:
    return optics.project(TRUTH, points, SIZE) + rng.normal(0, sd_px, (len(points), 2))


def marks_at(xs: tuple[float, ...], seed: int = 0, *, start: int = 0) -> tuple[Mark, ...]:
    rng = np.random.default_rng(seed)
    points = np.array([(x, y, 0.0) for x in xs for y in (0.0, 1.22)])
    uv = sightings_of(points, rng)
    return tuple(
        Mark(label=f"mark {i + start}", xyz_m=p, uv_px=c, sd_px=0.7)
        for i, (p, c) in enumerate(zip(points, uv, strict=True))
        if 0 < c[0] < SIZE[0] - 1
    )


def solved(marks: tuple[Mark, ...], **more: object) -> Camera:
    camera = resect(marks, SIZE, lane=Lane(), **more)  # type: ignore[arg-type]
    assert isinstance(camera, Camera), camera
    return camera


def left_out(camera: Camera) -> set[str]:
    return {m.label for m, used in zip(camera.marks, camera.used, strict=True) if not used}


@pytest.mark.parametrize("seed", range(6))
def test_good_marks_are_all_used(seed: int) -> None:
    camera = solved(marks_at(XS, seed))
    assert left_out(camera) == set()
    assert camera.notices == ()


@pytest.mark.parametrize("which", [0, 5, 11])
def test_a_click_in_the_wrong_place_is_named_and_left_out(which: int) -> None:
    marks = list(marks_at(XS))
    marks[which] = replace(marks[which], uv_px=marks[which].uv_px + np.array([12.0, -9.0]))
    camera = solved(tuple(marks))
    assert left_out(camera) == {f"mark {which}"}
    (said,) = camera.notices
    assert said.code == "mark_left_out"
    assert f"'mark {which}' disagrees with the other 11" in said.text
    # 15 px at 14 m and 1400 px focal length are about 15 cm.
    assert 10 < float(said.text.split(" by ")[1].split(" cm")[0]) < 25
    # The camera is that of the others, not an average with the mistake.
    others = solved(tuple(m for i, m in enumerate(marks) if i != which))
    assert np.allclose(camera.parameters, others.parameters, rtol=1e-5, atol=1e-5)


def test_a_tape_misread_by_a_metre_is_told_as_one() -> None:
    marks = list(marks_at(XS))
    marks[4] = replace(marks[4], xyz_m=marks[4].xyz_m + np.array([1.0, 0, 0]))
    camera = solved(tuple(marks))
    assert left_out(camera) == {"mark 4"}
    assert "a tape misread by 1 m?" in camera.notices[0].text


def test_two_swapped_marks_are_told_as_swapped() -> None:
    marks = list(marks_at(XS))
    marks[2], marks[6] = replace(marks[2], uv_px=marks[6].uv_px), replace(marks[6], uv_px=marks[2].uv_px)
    camera = solved(tuple(marks))
    assert left_out(camera) == {"mark 2", "mark 6"}
    assert [n.code for n in camera.notices] == ["marks_swapped"]
    assert "'mark 2' and 'mark 6' look swapped" in camera.notices[0].text


def test_six_marks_are_too_few_to_convict_one_but_it_is_not_silent() -> None:
    marks = list(marks_at((3.0, 12.0, 21.0)))
    marks[3] = replace(marks[3], uv_px=marks[3].uv_px + np.array([25.0, 10.0]))
    camera = solved(tuple(marks))
    assert left_out(camera) == set()
    assert "marks_disagree" in {n.code for n in camera.notices}


def test_the_other_hurdle_event_is_recognised() -> None:
    """Marks of the 100 m hurdles (13.00 + k 8.50 m) typed with the places of the 110 m hurdles (13.72 + k 9.14 m)."""
    truth = TRUTH.copy()
    truth[3], truth[4] = 22.0, -20.0
    rng = np.random.default_rng(3)
    marks = []
    for k in range(3):
        for y in (0.0, 1.22):
            uv = optics.project(truth, np.array([[13.0 + 8.5 * k, y, 0.0]]), SIZE)[0] + rng.normal(0, 0.7, 2)
            marks.append(
                Mark(label=f"hurdle {k + 1}, y {y}", xyz_m=np.array([13.72 + 9.14 * k, y, 0.0]), uv_px=uv, sd_px=0.7)
            )
    for x, y in ((10.0, 0.0), (10.0, 1.22), (34.0, 0.0)):
        uv = optics.project(truth, np.array([[x, y, 0.0]]), SIZE)[0] + rng.normal(0, 0.7, 2)
        marks.append(Mark(label=f"cone {x} {y}", xyz_m=np.array([x, y, 0.0]), uv_px=uv, sd_px=0.7))
    found = resect(tuple(marks), SIZE, lane=Lane())
    assert isinstance(found, Camera)
    assert "other_layout" in {n.code for n in found.notices}
    text = next(n.text for n in found.notices if n.code == "other_layout")
    assert "110 m hurdles" in text.split("but")[0]
    assert "100 m hurdles" in text.split("but")[1]


def test_clicks_on_lines_and_poles_sharpen_the_camera() -> None:
    marks = marks_at((6.0, 12.0, 18.0))
    rng = np.random.default_rng(9)
    free_x = [
        Sighting(
            label=f"line {x}",
            free="x",
            xyz_m=np.array([0.0, y, 0.0]),
            sd_px=0.7,
            uv_px=sightings_of(np.array([[x, y, 0.0]]), rng)[0],
        )
        for x in (3.3, 9.1, 15.7, 20.2)
        for y in (0.0, 1.22)
    ]
    poles = [
        Sighting(
            label=f"pole {x}",
            free="z",
            xyz_m=np.array([x, 1.22, 0.0]),
            sd_px=0.7,
            uv_px=sightings_of(np.array([[x, 1.22, z]]), rng)[0],
        )
        for x, z in ((4.0, 1.1), (20.0, 0.6))
    ]
    plain, helped = solved(marks), solved(marks, sightings=(*free_x, *poles))
    assert helped.x_sd_m[:, 1].max() < 0.85 * plain.x_sd_m[:, 1].max()
    assert helped.sighting_error_px.shape == (10,)
    assert helped.sighting_error_px.max() < 4.0
    wrong = (helped.parameters - TRUTH) / np.sqrt(np.diag(helped.cov))
    assert np.all(np.abs(wrong) < 4), wrong


def test_a_sighting_outside_the_picture_is_refused() -> None:
    stray = Sighting(label="far line", free="x", xyz_m=np.array([0.0, 1.22, 0.0]), uv_px=np.array([2500.0, 500.0]))
    found = resect(marks_at(XS), SIZE, lane=Lane(), sightings=(stray,))
    assert not found
    assert found.code == "mark_outside"
    assert "'far line'" in found.reason


def test_a_taped_distance_counts_with_its_own_sd() -> None:
    marks = marks_at((6.0, 12.0, 18.0))
    loose = solved(marks, prior=CameraPrior(distance_m=14.61, distance_sd_m=0.5))
    tight = solved(marks, prior=CameraPrior(distance_m=14.61, distance_sd_m=0.02))
    assert np.sqrt(tight.cov[4, 4]) < 0.05 < np.sqrt(loose.cov[4, 4])


def test_one_more_mark_helps_most_where_the_lane_is_bare() -> None:
    camera = solved(marks_at((3.0, 5.0, 7.0)))
    advice = best_next_mark(camera, Lane())
    assert advice is not None
    assert advice.x_m > 14
    assert advice.worst_sd_after_m < 0.6 * advice.worst_sd_m
    assert advice.scale_sd_after < advice.scale_sd
    # What it promises is what a real mark there does.
    rng = np.random.default_rng(4)
    place = np.array([advice.x_m, advice.y_m, 0.0])
    more = Mark(label="one more", xyz_m=place, uv_px=sightings_of(place[None], rng)[0], sd_px=1.0)
    after = best_next_mark(solved((*camera.marks, more)), Lane())
    assert after is not None
    assert after.scale_sd == pytest.approx(advice.scale_sd_after, rel=0.25)
