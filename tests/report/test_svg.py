"""Diagrams as SVG: ticks, paths, and the numbers that the pointer reads off."""

from __future__ import annotations

import json
import re
from xml.etree import ElementTree

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from vidkin.report import series, svg
from vidkin.stages import Analysis, Motion


def panel_of(analysis: Analysis) -> series.Panel:
    panels = series.speed_panels(analysis)
    assert isinstance(panels, tuple)
    return panels[0]


@given(low=st.floats(-1e4, 1e4), span=st.floats(1e-3, 1e5), most=st.integers(3, 10))
def test_ticks_are_few_round_and_inside(low: float, span: float, most: int) -> None:
    places, digits = svg.ticks(low, low + span, most=most)
    step = svg.nice_step(low, low + span, most=most)
    assert len(places) <= most + 1
    assert step / 10 ** np.floor(np.log10(step) + 1e-9) == pytest.approx(round(step / 10 ** np.floor(np.log10(step))))
    assert np.all(places >= low - 1e-6 * span)
    assert np.all(places <= low + span + 1e-6 * span)
    assert round(step, digits) == pytest.approx(step, rel=1e-9)


def test_the_drawing_is_well_formed_and_has_both_sizes(analysis: Analysis) -> None:
    root = ElementTree.fromstring(str(svg.figure(panel_of(analysis))))
    sizes = [s.attrib["viewBox"] for s in root.iter("svg")]
    assert sizes == ["0 0 720 300", "0 0 360 270"]
    words = {t.text for t in root.iter("text")}
    assert {"5 m", "10 m", "15 m", "speed, m/s", "time from first movement, s"} <= words


def test_the_curve_goes_through_the_measured_points(analysis: Analysis) -> None:
    """Undo the drawing's own scale, which stands in its data attributes and its grid."""
    panel = panel_of(analysis)
    root = ElementTree.fromstring(str(svg.figure(panel)))
    wide = next(root.iter("svg"))
    left, right, low, high = (float(wide.attrib[f"data-{k}"]) for k in ("left", "right", "low", "high"))
    labels = [t for t in wide.iter("text") if t.attrib.get("class") == "end"]
    y_px = np.array([float(t.attrib["y"]) for t in labels])
    y_value = np.array([float((t.text or "").replace("−", "-")) for t in labels])
    slope, offset = np.polyfit(y_px, y_value, 1)
    path = next(p.attrib["d"] for p in wide.iter("path") if p.attrib["class"] == "curve measured")
    points = np.array([[float(n) for n in pair.split()] for pair in path[1:].split("L")])
    x = low + (points[:, 0] - left) / (right - left) * (high - low)
    motion = analysis.motion
    assert isinstance(motion, Motion)
    expected = np.interp(x + 0.55, motion.t_s, motion.v_mps)
    assert np.abs(slope * points[:, 1] + offset - expected).max() < 0.05


def test_readings_rise_in_x_and_agree_with_the_panel(analysis: Analysis) -> None:
    panels = series.speed_panels(analysis)
    assert isinstance(panels, tuple)
    for panel in panels:
        text = re.search(r"<script[^>]*>(.*?)</script>", str(svg.figure(panel)))
        assert text is not None
        data = json.loads(text.group(1))
        assert data["x"] == panel.x_label
        for entry in data["series"]:
            x = np.array(entry["x"])
            assert np.all(np.diff(x) >= 0)
            assert len(x) <= 240
            line = next(p for p in panel.lines if p.label == entry["label"] and abs(p.x.max() - x.max()) < 1e-3)
            rising = np.concatenate([[True], np.diff(np.maximum.accumulate(line.x)) > 0])
            got = np.interp(line.x[rising], x, entry["y"])
            assert np.abs(got - line.y[rising]).max() < 0.06


def test_a_diagram_of_dots_has_nothing_to_read_off(analysis: Analysis) -> None:
    panel = series.residual_panel(analysis)
    assert isinstance(panel, series.Panel)
    drawn = str(svg.figure(panel))
    assert "readout" not in drawn
    assert "<script" not in drawn


def test_labels_cannot_break_out(analysis: Analysis) -> None:
    panel = panel_of(analysis)
    evil = "</script><script>alert(1)</script>"
    line = series.Line(role="law", label=evil, x=np.array([0.0, 1.0]), y=np.array([0.0, 1.0]), low=np.zeros(0),
                       high=np.zeros(0))  # fmt: skip
    drawn = str(svg.figure(series.Panel(key="k", title=evil, x_label="x", y_label="y", lines=(line,), note=evil)))
    assert "<script>alert" not in drawn
    assert drawn.count("<script") == 1
    assert json.loads(re.findall(r"<script[^>]*>(.*?)</script>", drawn)[0])["series"][0]["label"] == evil
    assert panel.key == "speed-time"


def test_split_texts_that_would_collide_are_left_out(analysis: Analysis) -> None:
    panel = panel_of(analysis)
    crowded = series.Panel(
        key="k",
        title="t",
        x_label="x",
        y_label="y",
        lines=panel.lines,
        ticks=((1.0, "10.00 m"), (1.01, "10.01 m"), (99.0, "outside")),
    )
    drawn = str(svg.figure(crowded))
    assert "10.00 m" in drawn
    assert "10.01 m" not in drawn
    assert "outside" not in drawn
