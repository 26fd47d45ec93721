"""The diagrams' numbers, and the still pictures made of them."""

from __future__ import annotations

import subprocess
import sys
from collections.abc import Callable
from dataclasses import replace

import cv2
import numpy as np
import pytest

from vidkin.notices import Failure
from vidkin.report import series
from vidkin.report.figures import figures, force_png, laws_png, residual_png, speed_png
from vidkin.stages import Analysis, Fit, Motion

MAKERS = [speed_png, residual_png, laws_png, force_png]


def only(lines: tuple[series.Line, ...], role: str) -> series.Line:
    found = [line for line in lines if line.role == role]
    assert len(found) == 1
    return found[0]


@pytest.mark.parametrize("make", MAKERS)
def test_pictures_are_png_of_a_sensible_size(analysis: Analysis, make: Callable[..., bytes | Failure]) -> None:
    png = make(analysis, dpi=100)
    assert isinstance(png, bytes)
    assert png.startswith(b"\x89PNG\r\n\x1a\n")
    picture = cv2.imdecode(np.frombuffer(png, np.uint8), cv2.IMREAD_COLOR)
    assert picture is not None
    assert picture.shape[0] == 390
    assert 800 <= picture.shape[1] <= 1300
    assert np.ptp(picture) > 150


@pytest.mark.parametrize(
    ("name", "made"),
    [
        ("complete", {"speed", "residuals", "laws", "force"}),
        ("fit", {"speed"}),
        ("motion", set()),
        ("camera", set()),
        ("unrun", set()),
    ],
)
def test_what_can_be_drawn_is_drawn(variant: Callable[[str], Analysis], name: str, made: set[str]) -> None:
    assert set(figures(variant(name), dpi=40)) == made


@pytest.mark.parametrize("make", MAKERS)
def test_what_cannot_be_drawn_says_why(variant: Callable[[str], Analysis], make: Callable[..., object]) -> None:
    answer = make(variant("camera"))
    assert isinstance(answer, Failure)
    assert answer.code == "camera-test"


def test_speed_panels_hold_the_measured_numbers(analysis: Analysis) -> None:
    panels = series.speed_panels(analysis)
    motion = analysis.motion
    assert isinstance(motion, Motion)
    assert not isinstance(panels, Failure)
    by_time, by_distance = panels
    measured = only(by_time.lines, "measured")
    inside = motion.inside
    assert np.array_equal(measured.x, motion.t_s[inside] - 0.55)
    assert np.array_equal(measured.y, motion.v_mps[inside])
    assert np.allclose(measured.high - measured.low, 2 * 1.959964 * motion.v_sd_mps[inside])
    assert np.array_equal(only(by_distance.lines, "measured").x, motion.smooth_x_m[inside])
    ends = [line for line in by_time.lines if line.role == "ends"]
    assert [line.x.size for line in ends] == [np.argmax(inside) + 1, np.argmax(inside[::-1]) + 1]
    assert [t for _, t in by_time.ticks] == ["5 m", "10 m", "15 m"]


def test_distance_counts_from_the_start_line(analysis: Analysis) -> None:
    moved = replace(analysis, rep=replace(analysis.rep, lane=replace(analysis.rep.lane, start_x_m=2.0)))
    for here, there in ((analysis, moved),):
        a, b = series.speed_panels(here), series.speed_panels(there)
        assert not isinstance(a, Failure)
        assert not isinstance(b, Failure)
        assert np.allclose(only(a[1].lines, "measured").x - 2.0, only(b[1].lines, "measured").x)
        assert np.allclose(only(a[1].lines, "law").x - 2.0, only(b[1].lines, "law").x)


def test_drag_power_is_drag_times_speed_per_mass(analysis: Analysis) -> None:
    panels = series.force_panels(analysis)
    assert not isinstance(panels, Failure)
    assert isinstance(analysis.fit, Fit)
    c = analysis.fit.curves
    assert np.allclose(only(panels[1].lines, "drag").y, c.drag_n * c.v_mps / 71.0)
    assert np.allclose(only(panels[1].lines, "total").y, c.power_w_kg)
    line = only(panels[0].lines, "second")
    assert (line.y[0], line.x[1]) == (7.91, 9.61)


def test_without_mass_or_air_the_drag_is_left_out_and_said(variant: Callable[[str], Analysis]) -> None:
    panels = series.force_panels(variant("bare"))
    assert not isinstance(panels, Failure)
    assert panels[0].note == "Air drag is not drawn: body mass or the weather is missing."
    assert all(line.role == "total" for panel in panels for line in panel.lines)


def test_a_force_line_in_newtons_is_not_drawn_per_kilogram(analysis: Analysis) -> None:
    assert isinstance(analysis.fit, Fit)
    q = dict(analysis.fit.quantities)
    q["F0"] = replace(q["F0"], unit="N", value=560.0)
    panels = series.force_panels(replace(analysis, fit=replace(analysis.fit, quantities=q)))
    assert not isinstance(panels, Failure)
    assert all(line.role != "second" for line in panels[0].lines)


def test_residuals_per_row_or_per_average(analysis: Analysis) -> None:
    fit = analysis.fit
    assert isinstance(fit, Fit)
    panel = series.residual_panel(analysis)
    assert isinstance(panel, series.Panel)
    law = fit.laws[fit.law]
    assert np.allclose(only(panel.lines, "dots").y, 100 * law.residual_m)
    averaged = replace(law, residual_m=0.01 * np.ones(law.t_s.size))
    few = series.residual_panel(replace(analysis, fit=replace(fit, laws={law.name: averaged})))
    assert isinstance(few, series.Panel)
    assert np.array_equal(only(few.lines, "dots").x, law.x_m)
    assert few.note == "Neighbouring frames were averaged for the fit; a dot is such an average."
    odd = series.residual_panel(replace(analysis, fit=replace(fit, laws={law.name: replace(law, residual_m=[0.1])})))
    assert isinstance(odd, series.Panel)
    assert odd.note == "The law 'mono-exponential' gives no residual for each measured position."


def test_laws_are_shown_as_differences_and_the_rest_is_named(analysis: Analysis) -> None:
    fit, motion = analysis.fit, analysis.motion
    assert isinstance(fit, Fit)
    assert isinstance(motion, Motion)
    panel = series.laws_panel(analysis)
    assert isinstance(panel, series.Panel)
    line = only(panel.lines, "law")
    t = line.x + 0.55
    law = fit.laws[fit.law]
    expected = np.interp(t, law.t_s, law.v_mps) - np.interp(t, motion.t_s, motion.v_mps)
    assert np.allclose(line.y, expected)
    many = {f"law{k}": replace(law, name=f"law{k}", criterion=float(k)) for k in range(6)}
    crowded = series.laws_panel(replace(analysis, fit=replace(fit, laws=many)))
    assert isinstance(crowded, series.Panel)
    assert crowded.note == "Not drawn: law4, law5."


def test_no_global_plotting_state_is_touched() -> None:
    code = "import sys, vidkin.report.figures; sys.exit('matplotlib.pyplot' in sys.modules)"
    assert subprocess.run([sys.executable, "-c", code], check=False).returncode == 0
