# True time from stored time stamps: rates, slow motion, what is said of uneven and coarse times.
from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from vidkin.errors import UsageError
from vidkin.files.clock import capture_tag, evenness, slow_record, slowness, stored_rate_hz


def test_the_stored_rate_ignores_gaps_and_rounding() -> None:
    even = np.arange(60) / 59.94
    assert stored_rate_hz(even) == pytest.approx(59.94)
    assert stored_rate_hz(np.delete(even, [7, 8, 30])) == pytest.approx(59.94)
    assert stored_rate_hz(np.array([0, 0.01, 0.03, 0.1, 0.11, 0.4, 0.41])) == pytest.approx(1 / 0.015)  # no usual one
    assert stored_rate_hz(np.round(np.arange(31) / 30, 3)) == pytest.approx(30, rel=2e-3)  # 33, 33, 34 ms
    assert 1 / np.median(np.diff(np.round(np.arange(31) / 30, 3))) == pytest.approx(30.30, abs=0.01)


@pytest.mark.parametrize(
    ("stored", "capture", "factor"),
    [
        (30.0, 240.0, 8.0),
        (29.97, 120.0, 120 / 29.97),
        (60.0, 60.0, 1.0),
        (60.0, 59.94, 1.0),
        (59.94, 60.0, 1.0),
        (120.0, 119.0, 1.0),
    ],
)
def test_a_stated_rate_is_taken_at_its_word(stored: float, capture: float, factor: float) -> None:
    assert slowness(stored, capture_fps=capture, tag="960", record=None).factor == pytest.approx(factor, rel=1e-12)


def test_a_stated_rate_that_gives_no_whole_factor() -> None:
    slow = slowness(29.97, capture_fps=240.0, tag=None, record=None)
    assert [n.code for n in slow.notices] == ["slow_motion", "slow_factor_not_whole"]
    assert "slows time by 8.0080; phones slow it by whole numbers, here most likely 8" in slow.notices[1].text
    assert slow.notices[1].hint == "Unless the rate was measured, state capture_fps = 239.76."
    assert [n.code for n in slowness(30.0, capture_fps=240.0, tag=None, record=None).notices] == ["slow_motion"]


def test_a_stated_rate_below_the_stored_one() -> None:
    with pytest.raises(UsageError, match=r"capture_fps = 30 is below the 60\.00 pictures per second stored"):
        slowness(60.0, capture_fps=30.0, tag=None, record=None)


@pytest.mark.parametrize(
    ("stored", "tag", "factor", "codes"),
    [
        (29.97, "240.000000", 8.0, ["slow_motion"]),  # whole: the phone stretches sensor time by 8
        (30.0, "120", 4.0, ["slow_motion"]),
        (30.0, "100", 100 / 30, ["slow_motion"]),
        (29.98, "30.000000", 1.0, []),
        (240.0, "240", 1.0, []),
        (24.1, "30.000000", 1.0, ["capture_tag_ignored"]),  # dim light: fewer frames, but real time
        (60.0, "30.000000", 1.0, ["capture_tag_ignored"]),
        (30.0, "fast", 1.0, ["capture_tag_ignored"]),
        (30.0, "0", 1.0, ["capture_tag_ignored"]),
        (30.0, "nan", 1.0, ["capture_tag_ignored"]),
    ],
)
def test_the_phones_tag(stored: float, tag: str, factor: float, codes: list[str]) -> None:
    slow = slowness(stored, capture_fps=None, tag=tag, record=None)
    assert slow.factor == pytest.approx(factor, rel=1e-12)
    assert [n.code for n in slow.notices] == codes
    if codes == ["capture_tag_ignored"]:
        assert f"tag says '{tag}', but {stored:.2f} pictures per second are stored" in slow.notices[0].text


def test_the_tag_is_found_by_its_ending() -> None:
    assert capture_tag({"com.android.capture.fps": "240.000000", "title": "x"}) == "240.000000"
    assert capture_tag({"title": "x"}) is None


def test_a_record_of_slow_stretches(tmp_path: Path) -> None:
    path = tmp_path / "a.mp4"
    path.write_bytes(b"x" * 100_000 + b"Super_SlowMotion_Edit_Data2985:10898" + b"SEFT")
    assert slow_record(path) == "Super_SlowMotion"
    slow = slowness(30.0, capture_fps=None, tag=None, record=slow_record(path))
    assert [n.code for n in slow.notices] == ["slow_motion_unknown"]
    assert "slow-motion record (Super_SlowMotion) but no single capture rate" in slow.notices[0].text
    assert slowness(30.0, capture_fps=120.0, tag=None, record="Super_SlowMotion").factor == 4
    path.write_bytes(b"SlowMotion_Data88:8" + b"SEFT")
    assert slow_record(path) == "SlowMotion_Data"
    with_tag = slowness(30.0, capture_fps=None, tag="240", record="SlowMotion_Data")
    assert [n.code for n in with_tag.notices] == ["slow_motion"]  # the tag holds for the whole file
    path.write_bytes(b"SlowMotion_Data" + b"x" * 70_000)
    assert slow_record(path) is None


def test_uneven_and_coarse_times() -> None:
    t = np.arange(50) / 100
    assert evenness(t, tick_s=1e-5) == ()
    assert evenness(t, tick_s=1e-3) == ()  # a coarse clock that happens to fit
    t[20:] += 0.03
    said = evenness(t, tick_s=1e-5)
    assert [n.code for n in said] == ["uneven_times"]
    assert "1 of 49 frame intervals are uneven; the longest lasts 40 ms, at 0.190 s (usual: 10.0 ms)" in said[0].text
    coarse = evenness(np.round(np.arange(100) / 240, 3), tick_s=1e-3)
    assert [n.code for n in coarse] == ["coarse_times"]
    assert "rounds times to 1 ms at 4.00 ms between frames: about 0.3 cm (one sd) at 10 m/s" in coarse[0].text
    # a uniform rounding error of one tick has sd tick / sqrt(12)
    errors = np.random.default_rng(1).uniform(-0.5e-3, 0.5e-3, 100_000)
    assert 1000 * errors.std() == pytest.approx(0.289, abs=0.002)
