"""Numbers, names and reasons in words."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import replace

import pytest
from hypothesis import given
from hypothesis import strategies as st

from vidkin.report import words
from vidkin.stages import Analysis, Fit, Quantity, Split


def quantity(value: float, low: float | None, high: float | None, why: str = "") -> Quantity:
    return Quantity(name="x", value=value, low=low, high=high, unit="m^2", method="+-25 %", why_no_interval=why)


@pytest.mark.parametrize(
    ("value", "low", "high", "shown", "interval"),
    [
        (9.1234, 9.05, 9.19, "9.12", "9.05 to 9.19"),
        (9.1234, 9.11, 9.14, "9.123", "9.110 to 9.140"),
        (561.6, 541.0, 581.5, "562", "541 to 582"),
        (-7.31, -7.72, -6.91, "−7.3", "−7.7 to −6.9"),
        (0.0051, 0.0043, 0.0059, "0.0051", "0.0043 to 0.0059"),
    ],
)
def test_the_interval_decides_the_decimals(value: float, low: float, high: float, shown: str, interval: str) -> None:
    q = quantity(value, low, high)
    assert words.value_text(q) == shown
    assert words.interval_text(q) == interval


@given(value=st.floats(-1e5, 1e5), half=st.floats(1e-6, 1e4))
def test_rounding_is_small_against_the_interval(value: float, half: float) -> None:
    q = quantity(value, value - half, value + half)
    shown = float(words.value_text(q).replace("−", "-"))
    last_place = min(1.0, half / 3)
    assert abs(shown - value) <= 0.5 * last_place * (1 + 1e-9) + 1e-9
    if half < 3:
        assert 10.0 ** -words.quantity_decimals(q) > half / 30.1


def test_without_an_interval_the_reason_stands() -> None:
    assert words.interval_text(quantity(1.2037, None, None, "weather not known")) == "no interval: weather not known"
    assert words.interval_text(quantity(1.2037, None, 2.0)) == "no interval: no reason was given"
    assert words.value_text(quantity(1.2037, None, None)) == "1.204"
    assert words.value_text(quantity(0.0, None, None)) == "0.00"


def test_minus_and_zero() -> None:
    assert words.number(-0.001, 2) == "0.00"
    assert words.number(-1.5, 1) == "−1.5"


def test_units_and_methods_are_printed_with_their_signs() -> None:
    q = quantity(1.0, 0.9, 1.1)
    assert words.unit_of(q) == "m²"
    assert words.method_of(q) == "±25 %"
    assert words.unit_of(replace(q, unit="-")) == ""


def test_numbers_are_tied_to_their_units() -> None:
    assert words.tied("known to 0.06 % and 20 m.") == "known to 0.06\u00a0% and 20\u00a0m."
    assert words.tied("3 marks, 5 of them") == "3 marks, 5 of them"


def test_half_width_factor() -> None:
    """Normal quantile of 95 %: 1.959964 (standard table; MEM, value from memory)."""
    assert words.half_width_factor(0.95) == pytest.approx(1.959964, abs=1e-6)


def test_names_in_house_order_and_unknown_ones_last(analysis: Analysis) -> None:
    assert isinstance(analysis.fit, Fit)
    q = dict(analysis.fit.quantities)
    extra = replace(q["tau"], name="stiffness")
    split = replace(q["tau"], name="split_10")
    names = [x.name for x in words.ordered({"stiffness": extra, "split_10": split, **q})]
    assert names[0] == "top_speed"
    assert names[-1] == "stiffness"
    assert "split_10" not in names
    assert words.name_of("new_thing").meaning == "new thing"
    assert words.law_title("new_law") == "new law"
    assert words.law_title("mono_exponential") == "mono-exponential"


def test_every_design_name_is_known() -> None:
    speed = {"top_speed", "top_speed_at", "v_max", "tau", "first_movement", "step_rate", "step_length"}
    force = {"F0", "V0", "P_max", "RF_max", "D_RF", "Z", "k_drag"}
    air = {"drag_area", "drag_force", "drag_power_share", "air_density"}
    assert speed | force | air <= set(words.NAMES)


def test_split_places_follow_the_narrowest() -> None:
    wide = Split(distance_m=10, time_s=1.9, low_s=1.8, high_s=2.0)
    narrow = Split(distance_m=20, time_s=3.1, low_s=3.095, high_s=3.105)
    assert words.split_places(()) == 2
    assert words.split_places((wide,)) == 2
    assert words.split_places((wide, narrow)) == 3


@pytest.mark.parametrize(
    ("name", "stage", "code"),
    [
        ("camera", "fit", "camera-test"),
        ("motion", "fit", "motion-test"),
        ("fit", "fit", "fit-test"),
        ("steps", "steps", "steps-test"),
        ("unrun", "motion", "not_run"),
    ],
)
def test_why_a_stage_is_missing(variant: Callable[[str], Analysis], name: str, stage: str, code: str) -> None:
    assert words.why_missing(variant(name), stage).code == code


def test_a_stage_that_was_not_run_says_so(variant: Callable[[str], Analysis]) -> None:
    reason = words.why_missing(variant("unrun"), "fit")
    assert reason.reason == "The stage 'fit' was not run."
    assert "vidkin analyse" in reason.hint


def test_time_counts_from_first_movement_where_known(variant: Callable[[str], Analysis]) -> None:
    zero, label = words.time_zero_s(variant("complete"))
    assert math.isclose(zero, 0.55)
    assert label == "time from first movement, s"
    assert words.time_zero_s(variant("bare")) == (0.0, "time in the clip, s")


def test_provenance_is_flattened() -> None:
    got = dict(words.flat({"a": {"b": 1, "c": {"d": "x"}}, "e": [1, 2]}))
    assert got == {"a.b": "1", "a.c.d": "x", "e": "1, 2"}
