"""The page: one file, nothing from outside, every text escaped, the numbers those of the analysis."""

from __future__ import annotations

import json
import re
from collections.abc import Callable
from dataclasses import replace
from html.parser import HTMLParser

import cv2
import numpy as np
import pytest

from vidkin.notices import FAILURES, Entry, Failure
from vidkin.report.markup import Markup, el, join, table
from vidkin.report.page import report_page
from vidkin.report.words import CAUTIONS, LUMPED, NAMES, interval_text, ordered, value_text
from vidkin.stages import Analysis, Camera, Fit

VOID = {"meta", "link", "img", "br"}
EVIL = "<script>window.hit=1</script>\"'&"


class Reader(HTMLParser):
    """Collects text by section, attributes that could fetch, and checks that tags are balanced."""

    def __init__(self) -> None:
        super().__init__()
        self.open: list[str] = []
        self.section = ""
        self.text: dict[str, str] = {}
        self.order: list[str] = []
        self.fetches: list[str] = []
        self.scripts: list[tuple[str, str]] = []
        self.tags: list[str] = []

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        given = {k: v or "" for k, v in attrs}
        self.tags.append(tag)
        if tag not in VOID:
            self.open.append(tag)
        if tag == "section":
            self.section = given["id"]
            self.order.append(self.section)
        if tag == "script":
            self.scripts.append((given.get("type", ""), ""))
        self.fetches += [v for k, v in given.items() if k in ("src", "href", "srcset", "action", "data", "poster")]

    def handle_endtag(self, tag: str) -> None:
        assert self.open.pop() == tag
        if tag == "section":
            self.section = ""

    def handle_data(self, data: str) -> None:
        if self.open and self.open[-1] == "script":
            kind, text = self.scripts[-1]
            self.scripts[-1] = (kind, text + data)
        elif self.open and self.open[-1] != "style":
            self.text[self.section] = self.text.get(self.section, "") + " " + data

    def said(self, section: str) -> str:
        return re.sub(r"\s+", " ", self.text[section].replace("\u00a0", " "))


def read(page: str) -> Reader:
    reader = Reader()
    reader.feed(page)
    reader.close()
    assert reader.open == []
    return reader


def png(width: int = 320, height: int = 180, *, noise: bool = False) -> bytes:
    rng = np.random.default_rng(0)
    shape = (height, width, 3)
    picture = rng.integers(0, 256, shape, dtype=np.uint8) if noise else np.full(shape, 80, np.uint8)
    return bytes(cv2.imencode(".png", picture)[1])


def test_every_variant_is_a_whole_page(any_analysis: Analysis) -> None:
    reader = read(report_page(any_analysis))
    assert reader.order == [
        "notices", "numbers", "speed", "splits", "steps", "force", "quantities", "calibration", "laws", "unanswered",
        "air", "settings", "cautions", "names",
    ]  # fmt: skip
    assert reader.tags.count("h1") == 1


def test_nothing_is_fetched(analysis: Analysis) -> None:
    page = report_page(analysis, overlay_png=png(), files=("tracked.mp4", "a b#1.csv"))
    assert not re.search(r"(?i)(src|href)\s*=\s*[\"']?\s*(https?:|//|ftp:|file:)", page)
    assert "http://" not in page
    assert "https://" not in page
    assert "@import" not in page
    assert "url(" not in page
    fetched = read(page).fetches
    assert all(f.startswith(("data:", "#", "./")) for f in fetched)
    assert "./a%20b%231.csv" in fetched
    assert "default-src 'none'" in page.replace("&#x27;", "'")


def test_user_text_is_escaped(analysis: Analysis) -> None:
    camera, fit = analysis.camera, analysis.fit
    assert isinstance(camera, Camera)
    assert isinstance(fit, Fit)
    refused = Failure(stage="fit", code=EVIL, reason=EVIL, hint=EVIL)
    law = replace(fit.laws[fit.law], name=EVIL, words=EVIL, parameters={EVIL: 1.0}, sd={})
    bad = replace(
        analysis,
        rep=replace(analysis.rep, clip=EVIL, athlete=replace(analysis.rep.athlete, label=EVIL)),
        camera=replace(camera, marks=tuple(replace(m, label=EVIL) for m in camera.marks)),
        fit=replace(
            fit,
            law=EVIL,
            laws={EVIL: law},
            refused=(refused,),
            quantities={EVIL: replace(fit.quantities["F0"], name=EVIL, unit=EVIL, method=EVIL)},
        ),
        provenance={EVIL: {EVIL: EVIL}},
        footage=replace(analysis.footage, name=EVIL),
    )
    page = report_page(bad, files=(EVIL,))
    assert "<script>window" not in page
    reader = read(page)
    ours = [s for kind, s in reader.scripts if not kind]
    assert len(ours) == 1
    for kind, script in reader.scripts:
        if kind == "application/json":
            json.loads(script)
    assert EVIL in reader.text[""]


def test_notices_come_first_and_severity_is_a_word(analysis: Analysis) -> None:
    reader = read(report_page(analysis))
    said = reader.said("notices")
    assert said.index("Warning") < said.index("Note")
    assert "The picture's edge cuts the body in 9 frames. Leave a metre of free picture" in said
    assert "1 question was refused: see what could not be answered ." in said
    assert "Serious" not in said


def test_a_failed_stage_is_serious_and_tells_what_to_do(variant: Callable[[str], Analysis]) -> None:
    said = read(report_page(variant("camera"))).said("notices")
    assert "Serious Camera could not answer. The camera could not be worked out from 4 marks. Add a mark" in said


def test_a_failure_is_as_grave_as_the_registry_says(
    monkeypatch: pytest.MonkeyPatch, variant: Callable[[str], Analysis]
) -> None:
    monkeypatch.setitem(FAILURES, "steps-test", Entry("steps", "warning", "text", "hint"))
    said = read(report_page(variant("steps"))).said("notices")
    assert "Warning Steps could not answer." in said
    assert "Serious" not in said


@pytest.mark.parametrize(
    ("name", "section", "words"),
    [
        ("camera", "calibration", "Not available. The camera could not be worked out from 4 marks."),
        ("track", "speed", "Not available. The track could not be worked out from 4 marks."),
        ("motion", "speed", "Not available. The motion could not be worked out from 4 marks."),
        ("fit", "numbers", "Not available. The fit could not be worked out from 4 marks."),
        ("fit", "speed", "No law is drawn. The fit could not be worked out from 4 marks."),
        ("fit", "speed", "No residuals. The fit could not be worked out from 4 marks."),
        ("fit", "quantities", "Not available. The fit could not be worked out from 4 marks."),
        ("fit", "laws", "Not available."),
        ("fit", "air", "Not available."),
        ("fit", "unanswered", "Fit The fit could not be worked out from 4 marks. Add a mark"),
        ("steps", "steps", "Not available. The steps could not be worked out from 4 marks."),
        ("unrun", "numbers", "The stage 'fit' was not run."),
        ("unrun", "unanswered", "Not run: Track, Steps, Motion, Fit."),
        ("bare", "splits", "No split can be given"),
        ("bare", "numbers", "a flying start: already moving when it came into view"),
        ("bare", "numbers", "no interval: the profile does not close upwards"),
        ("bare", "air", "Not given: air density, drag area, air drag, power into air drag."),
        ("bare", "air", "not stated"),
    ],
)
def test_what_is_missing_says_why(variant: Callable[[str], Analysis], name: str, section: str, words: str) -> None:
    assert words in read(report_page(variant(name))).said(section)


def test_an_empty_fit_and_a_quiet_analysis(analysis: Analysis) -> None:
    assert isinstance(analysis.fit, Fit)
    quiet = replace(
        analysis,
        footage=replace(analysis.footage, notices=()),
        track=replace(analysis.track, notices=()),  # type: ignore[type-var]
        fit=replace(analysis.fit, refused=(), quantities={}),
    )
    reader = read(report_page(quiet))
    assert "No check raised a notice." in reader.said("notices")
    assert "Every question that was asked has an answer." in reader.said("unanswered")
    assert "No quantity could be given." in reader.said("quantities")


def test_two_refused_questions_are_counted(analysis: Analysis) -> None:
    assert isinstance(analysis.fit, Fit)
    twice = replace(analysis, fit=replace(analysis.fit, refused=analysis.fit.refused * 2))
    assert "2 questions were refused" in read(report_page(twice)).said("notices")


def test_no_single_contact(analysis: Analysis) -> None:
    none = np.zeros(0)
    empty = replace(analysis.steps, on_s=none, off_s=none, x_m=none, lateral_source="lane centre")  # type: ignore[type-var]
    said = read(report_page(replace(analysis, steps=empty))).said("steps")
    assert "No single foot contact could be told apart." in said
    assert "the runner is taken to be on the lane centre, 0.66 m from the x axis" in said


def test_numbers_are_those_of_the_analysis(analysis: Analysis) -> None:
    reader = read(report_page(analysis))
    fit, camera = analysis.fit, analysis.camera
    assert isinstance(fit, Fit)
    assert isinstance(camera, Camera)
    every = reader.said("quantities")
    for q in ordered(fit.quantities):
        assert f"{value_text(q)} " in every
        assert interval_text(q) in every
    splits = reader.said("splits")
    for s in fit.splits:
        assert f"{s.distance_m:g} {s.time_s:.3f} {s.low_s:.3f} to {s.high_s:.3f}" in splits
    first, second = fit.splits[:2]
    mean = (second.distance_m - first.distance_m) / (second.time_s - first.time_s)
    assert f"5 to 10 {second.time_s - first.time_s:.3f} {mean:.2f}" in splits
    calibration = reader.said("calibration")
    for k, (mark, error, metres) in enumerate(
        zip(camera.marks, camera.mark_error_px, camera.mark_error_m, strict=True), start=1
    ):
        cells = " ".join(f"{e:.2f}".replace("-", "−") for e in error)
        assert f"{k} {mark.label}" in calibration
        assert f"{cells} {100 * metres:.2f}" in calibration
    assert "focal length 1390.0 px 3.0" in calibration
    assert "known to 0.06 % (one sd)" in calibration
    steps = reader.said("steps")
    assert "1 0.320 170 90 0.62 0.76 3.85" in steps
    assert "One frame lasts 8.3 ms" in steps
    laws = reader.said("laws")
    assert "mono-exponential (preferred)" in laws
    assert "v_max 9.20 ± 0.05" in laws
    assert "−2210.4 0.0 0.940" in laws
    assert "5.5 0.060" in laws
    assert "< 0.001" in laws
    numbers = reader.said("numbers")
    assert "Top speed 8.62 m/s 8.52 to 8.72" in numbers
    assert "Time to 15 m 2.690 s 2.678 to 2.702" in numbers


def test_a_parameter_without_sd_is_called_fixed(analysis: Analysis) -> None:
    assert isinstance(analysis.fit, Fit)
    law = replace(analysis.fit.laws[analysis.fit.law], sd={}, weight=1.0)
    said = read(report_page(replace(analysis, fit=replace(analysis.fit, laws={law.name: law})))).said("laws")
    assert "tau 1.18 (fixed)" in said
    assert "> 0.999" in said


def test_drag_says_where_its_area_comes_from_and_what_it_is_not(analysis: Analysis) -> None:
    said = read(report_page(analysis)).said("air")
    assert "Drag area, CdA: 0.45 m² (0.34 to 0.56)" in said
    assert "Source: body size (Arsac & Locatelli 2002), ±25 %." in said
    assert LUMPED in said
    assert "not an aerodynamic coefficient" in said
    assert "0.3 m/s" in said


def test_cautions_names_settings_and_provenance(analysis: Analysis) -> None:
    reader = read(report_page(replace(analysis, settings=replace(analysis.settings, window_s=0.4))))
    for caution in CAUTIONS:
        assert caution in reader.said("cautions")
    for word in ("Warm up", "doctor", "tripod", "minors", "no diagnosis", "rules of your track", "licensed"):
        assert word in reader.said("cautions")
    for name in NAMES:
        assert name in reader.said("names")
    assert "0.4 s, as set" in reader.said("settings")
    assert "inputs.clip_sha256 " + "9f2c" * 16 in reader.said("settings")


def test_slow_motion_is_told(analysis: Analysis) -> None:
    slow = replace(analysis, footage=replace(analysis.footage, slow_factor=8.0))
    assert "(slowed 8 times)" in read(report_page(slow)).said("")


def test_one_frame_has_no_rate(analysis: Analysis) -> None:
    still = replace(analysis, footage=replace(analysis.footage, t_s=[0.0]))
    assert "1 frames" in read(report_page(still)).said("")


def test_other_levels_are_marked(analysis: Analysis) -> None:
    assert isinstance(analysis.fit, Fit)
    q = dict(analysis.fit.quantities)
    q["F0"] = replace(q["F0"], level=0.9)
    said = read(report_page(replace(analysis, fit=replace(analysis.fit, quantities=q)))).said("quantities")
    assert "7.62 to 8.19 (90 %)" in said


def test_the_page_stays_small_even_for_a_noisy_4k_overlay(analysis: Analysis) -> None:
    assert len(report_page(analysis, overlay_png=png(3840, 2160, noise=True))) < 3_000_000


def test_the_overlay_is_in_the_page(analysis: Analysis) -> None:
    import base64

    page = report_page(analysis, overlay_png=png(1920, 1080))
    found = re.search(r'src="data:image/jpeg;base64,([^"]+)"', page)
    assert found is not None
    picture = cv2.imdecode(np.frombuffer(base64.b64decode(found.group(1)), np.uint8), cv2.IMREAD_COLOR)
    assert picture is not None
    assert picture.shape == (900, 1600, 3)
    assert np.abs(picture.astype(int) - 80).max() <= 2


@pytest.mark.parametrize("data", [b"", b"not a picture"])
def test_what_is_no_picture_is_refused(analysis: Analysis, data: bytes) -> None:
    with pytest.raises(ValueError, match=rf"report_page: overlay_png \({len(data)} bytes\) is not a picture"):
        report_page(analysis, overlay_png=data)


def test_the_same_analysis_gives_the_same_page(analysis: Analysis) -> None:
    assert report_page(analysis) == report_page(analysis)


def test_markup_escapes_what_is_not_markup() -> None:
    assert el("b", "<&>", Markup("<i>x</i>"), title='"a"') == '<b title="&quot;a&quot;">&lt;&amp;&gt;<i>x</i></b>'
    assert el("br") == "<br>"
    assert join([el("i", "a"), el("i", "b")]) == "<i>a</i><i>b</i>"
    made = table(("a", "b"), [("1", "<2>")], caption="c", numeric=(0,), wordy=(1,))
    assert '<td class="n">1</td><td class="w">&lt;2&gt;</td>' in made
