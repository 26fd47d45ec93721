"""Terminal tables: numbers as in the analysis, reasons where there are none, no markup from user text."""

from __future__ import annotations

import re
from collections.abc import Callable
from dataclasses import replace
from io import StringIO

import numpy as np
import pytest
from rich.console import Console, RenderableType

from vidkin.report import text
from vidkin.report.words import interval_text, value_text
from vidkin.stages import Analysis, Camera, Fit

TRUTH = {"top_speed": 8.60, "F0": 7.50, "air_density": 1.2, "step_length": 2.0}


def printed(item: RenderableType, width: int = 200) -> str:
    console = Console(width=width, record=True, file=StringIO(), color_system=None)
    console.print(item)
    return console.export_text()


def row(table: str, name: str) -> str:
    return next(line for line in table.splitlines()[1:] if line.split()[:1] == [name])


def test_summary_holds_every_quantity_and_split(analysis: Analysis) -> None:
    shown = printed(text.summary_table(analysis))
    assert isinstance(analysis.fit, Fit)
    for name, q in analysis.fit.quantities.items():
        line = row(shown, name)
        assert value_text(q) in line
        assert interval_text(q) in line
    assert re.search(r"2\.061\s+s\s+2\.049 to 2\.073", row(shown, "split_10"))


def test_every_variant_prints(any_analysis: Analysis) -> None:
    for item in (
        text.summary_table(any_analysis),
        text.demo_table(any_analysis, TRUTH, {10.0: 2.06}),
        text.notices_text(any_analysis),
        text.failures_text(any_analysis),
    ):
        assert printed(item).strip()


def test_a_missing_fit_gives_its_reason(variant: Callable[[str], Analysis]) -> None:
    for table in (text.summary_table(variant("motion")), text.demo_table(variant("motion"), TRUTH, {})):
        assert "The motion could not be worked out from 4 marks." in printed(table)


def test_marks_table_numbers(camera_of: Callable[..., Camera]) -> None:
    camera = camera_of()
    shown = printed(text.marks_table(camera))
    rms = np.sqrt(np.mean(np.sum(camera.mark_error_px**2, axis=1)))
    assert f"12 marks, rms {rms:.2f} px = {100 * np.sqrt(np.mean(camera.mark_error_m**2)):.2f} cm" in shown
    for k, (mark, metres) in enumerate(zip(camera.marks, camera.mark_error_m, strict=True), start=1):
        line = row(shown, str(k))
        assert mark.label in line
        assert line.split()[-1] == f"{100 * metres:.2f}"
    bare = replace(camera, marks=(), used=np.zeros(0, bool), mark_uv_px=np.zeros((0, 2)),
                   mark_error_px=np.zeros((0, 2)),
                   mark_error_m=np.zeros(0))  # fmt: skip
    assert "No marks" in printed(text.marks_table(bare))


def test_demo_table_compares(analysis: Analysis) -> None:
    shown = printed(text.demo_table(analysis, TRUTH, {5.0: 1.5, 10.0: 2.06, 15.0: 2.5, 20.0: 3.3}))
    assert row(shown, "top_speed").split()[-1] == "yes"
    assert "0.23 %" in row(shown, "top_speed")
    assert row(shown, "F0").split()[-1] == "NO"
    assert row(shown, "air_density").rstrip().endswith("no interval")
    assert "not answered" in row(shown, "step_length")
    assert row(shown, "split_10").split()[-1] == "yes"
    assert row(shown, "split_5").split()[-1] == "NO"
    assert row(shown, "split_15").split()[-1] == "NO"
    assert "not answered" in row(shown, "split_20")
    assert "tau" not in shown


def test_a_truth_of_zero_is_compared_by_difference(analysis: Analysis) -> None:
    shown = printed(text.demo_table(analysis, {"top_speed_at": 0.0}, {}))
    assert re.search(r"m\s+18\.9\s+NO", row(shown, "top_speed_at"))


def test_notices_come_with_the_word_for_their_severity(analysis: Analysis) -> None:
    shown = printed(text.notices_text(analysis))
    lines = shown.strip().splitlines()
    assert lines[0].startswith("Warning Track: The picture's edge cuts the body in 9 frames. Leave a metre")
    assert lines[1].startswith("Note Footage:")


def test_nothing_to_say_is_said(analysis: Analysis) -> None:
    assert isinstance(analysis.fit, Fit)
    assert isinstance(analysis.camera, Camera)
    quiet = replace(
        analysis,
        footage=replace(analysis.footage, notices=()),
        track=replace(analysis.track, notices=()),  # type: ignore[type-var]
        fit=replace(analysis.fit, refused=()),
    )
    assert printed(text.notices_text(quiet)).strip() == "No check raised a notice."
    assert printed(text.failures_text(quiet)).strip() == "Every question that was asked has an answer."


def test_failures_say_what_to_do(variant: Callable[[str], Analysis]) -> None:
    shown = printed(text.failures_text(variant("camera")))
    assert "Camera could not answer: The camera could not be worked out from 4 marks. Add a mark" in shown


@pytest.mark.parametrize("label", ["[red]x[/red]", "[/]", "[bold"])
def test_user_text_is_not_markup(analysis: Analysis, label: str) -> None:
    named = replace(analysis, rep=replace(analysis.rep, athlete=replace(analysis.rep.athlete, label=label)))
    assert label in printed(text.summary_table(named))
    camera = analysis.camera
    assert isinstance(camera, Camera)
    marks = (replace(camera.marks[0], label=label), *camera.marks[1:])
    assert label in printed(text.marks_table(replace(camera, marks=marks)))
