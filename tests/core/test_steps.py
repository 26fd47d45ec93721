"""Cadence, foot contacts and the runner's place in the lane, from tables of silhouettes made from known steps."""

from __future__ import annotations

from types import SimpleNamespace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from vidkin.core import optics
from vidkin.core.steps import cadence, find_steps
from vidkin.notices import Failure
from vidkin.stages import Lane, Steps, Track

FIXED = settings(derandomize=True, deadline=None, max_examples=25)
CONTACT_S = 0.11
#: Foot from heel to toe about the contact's middle [m].
FOOT_M = (-0.10, 0.14)


def uneven(rate_hz, duration_s, rng):
    """Frame times that stumble, as a phone's do: jitter of a fifth of a frame and a dropped frame now and then."""
    t = np.arange(round(rate_hz * duration_s)) / rate_hz
    t = t + rng.uniform(-0.1, 0.1, t.size) / rate_hz
    return t[rng.random(t.size) > 0.04]


def legs(t_s, rate_hz, rng, *, noise=0.05, trend=0.0):
    """Spread of the legs [px]: opens and closes once a step, with overtones, as wide as the runner is near."""
    phase = 2 * np.pi * rate_hz * t_s
    wave = 1 + 0.35 * np.cos(phase) + 0.08 * np.cos(2 * phase + 0.6)
    return 14 * (1 + trend * (t_s - t_s[0])) * wave * (1 + noise * rng.standard_normal(t_s.size))


# --- cadence ------------------------------------------------------------------------------------


@FIXED
@given(st.floats(1.7, 5.4), st.integers(0, 999), st.sampled_from([50.0, 60.0, 120.0]))
def test_cadence_is_found(rate_hz, seed, frames_hz):
    """From a walk to a sprint, on uneven times, five steps in view or more."""
    rng = np.random.default_rng(seed)
    t = 3.0 + uneven(frames_hz, 5.2 / rate_hz + 0.5, rng)
    found = cadence(t, legs(t, rate_hz, rng, trend=0.1))
    assert found is not None
    value, sd = found
    assert value == pytest.approx(rate_hz, rel=0.06)
    assert abs(value - rate_hz) < 4 * sd
    assert sd < 0.2 * rate_hz


def test_cadence_sd_is_no_smaller_than_the_scatter():
    """The stated sd against the scatter over 80 draws of noise and phase."""
    rng = np.random.default_rng(5)
    z = []
    for _ in range(80):
        rate = rng.uniform(3.6, 5.0)
        t = rng.uniform(0, 1) + uneven(60.0, 1.6, rng)
        value, sd = cadence(t, legs(t, rate, rng, noise=0.15))
        z.append((value - rate) / sd)
    # 95 % of 80: 70 or more, with a probability of 99.7 % (binomial: 76 +- 1.9).
    assert np.count_nonzero(np.abs(z) < 1.96) >= 70


@pytest.mark.parametrize("what", ["noise", "constant", "slow sway", "few frames", "short"])
def test_no_cadence_is_made_up(what):
    rng = np.random.default_rng(3)
    t = np.arange(0, {"few frames": 0.2, "short": 0.3}.get(what, 1.5), 1 / 60)
    spread = {
        "noise": 14 + 3 * rng.standard_normal(t.size),
        "constant": np.full(t.size, 14.0),
        "slow sway": 14 + 3 * np.sin(2 * np.pi * 0.4 * t),
    }.get(what, legs(t, 4.5, rng))
    assert cadence(t, spread) is None


# --- a pass with known contacts -----------------------------------------------------------------


def stride(
    world,
    p,
    *,
    rate_hz=4.5,
    speed_mps=8.5,
    y_m=0.61,
    rest_s=0.0,
    duration_s=1.7,
    frames_hz=120.0,
    row_error_px=0.0,
    seen=lambda _: True,
    flat_legs=False,
    seed=0,
):
    """A Track of a runner with known contacts, and those contacts (on, off, x).

    The lowest rows of a silhouette are the planted foot, or, between contacts, a foot that rushes by above the ground.
    `seen(n)` False: contact n leaves no row. `rest_s`: stillness before, both feet down.
    """
    rng = np.random.default_rng(seed)
    t = np.arange(round(frames_hz * (duration_s + rest_s))) / frames_hz
    moving = np.maximum(t - rest_s, 0.0)
    x = 0.5 + speed_mps * (moving - (0.4 * (1 - np.exp(-moving / 0.4)) if rest_s else 0.0))
    size = world.FULL_HD

    def pixel(x_m, z_m):
        point = np.column_stack([np.atleast_1d(x_m), np.full(np.size(x_m), y_m), np.full(np.size(x_m), z_m)])
        return optics.project(p, point, size)

    uv = pixel(x, 0.95)
    whole = np.all((uv > 40) & (uv < np.array(size) - 40), axis=1)
    on = rest_s + (np.arange(40) + 0.35) / rate_hz
    on = on[on + CONTACT_S < t[-1]]
    middle = np.interp(on + CONTACT_S / 2, t, x)
    lows = []
    for i, ti in enumerate(t):
        now = np.flatnonzero((on <= ti) & (ti < on + CONTACT_S))
        if ti < rest_s:
            feet = [(x[i] - 0.45, 0.0), (x[i] + 0.05, 0.0)]
        elif now.size:
            feet = [(middle[now[0]], 0.0)] if seen(now[0]) else []
        else:
            feet = [(x[i] + 0.5 * np.sin(2 * np.pi * rate_hz * ti), 0.09)]
        for foot, z in feet:
            ends = pixel(foot + np.array(FOOT_M), z)
            # Pixels whose centre lies on the foot; half a pixel of outline below the sole.
            row = np.round(ends[:, 1].mean() + 0.5 + row_error_px)
            lows.append((ti, *np.sort(np.round(ends[:, 0])), row, whole[i]))
    lows = np.array([low[:4] for low in lows if low[4]]).reshape(-1, 4)
    n = t.size
    spread = np.full(n, 14.0) + 0.5 * rng.standard_normal(n) if flat_legs else legs(t, rate_hz, rng)
    spread = np.where(t < rest_s, 14.0, spread)
    track = Track(
        frame=np.arange(n),
        t_s=t,
        uv_px=uv,
        cov_px2=np.tile(0.04 * np.eye(2), (n, 1, 1)),
        box_px=np.column_stack([uv - np.array([30, 70]), uv + np.array([30, 70])]),
        area_px=np.full(n, 4000.0),
        whole=whole,
        spread_px=spread,
        low_t_s=lows[:, 0],
        low_uv_px=lows[:, 1:],
        direction=1 if uv[-1, 0] > uv[0, 0] else -1,
    )
    inside = np.isin(np.round(on * frames_hz) / frames_hz, np.round(t[whole] * frames_hz) / frames_hz)
    return track, (on[inside], on[inside] + CONTACT_S, middle[inside])


def steps_of(world, p, *, lane=None, **how) -> tuple[Steps, tuple]:
    track, contacts = stride(world, p, **how)
    found = find_steps(track, world.known(p), lane or world.LANE)
    assert isinstance(found, Steps), found
    return found, contacts


def codes(found) -> dict[str, str]:
    return {n.code: n.text for n in found.notices}


@pytest.fixture(scope="module")
def p(world: SimpleNamespace):
    return world.parameters(distance_m=11.0, x_m=7.0, height_m=1.7)


@pytest.mark.parametrize(
    ("rate_hz", "speed_mps", "frames_hz"), [(4.5, 8.5, 120.0), (3.0, 4.0, 60.0), (4.8, 9.5, 240.0)]
)
@pytest.mark.parametrize("side", [1, -1])
def test_contacts_are_found(world: SimpleNamespace, rate_hz, speed_mps, frames_hz, side) -> None:
    """Touch-down, toe-off and place of each contact, from either side of the lane."""
    p = world.parameters(side=side, distance_m=11.0, x_m=7.0, height_m=1.7)
    found, (on, off, x) = steps_of(world, p, rate_hz=rate_hz, speed_mps=speed_mps, frames_hz=frames_hz)
    assert found.on_s.size >= 5
    assert abs(found.on_s.size - on.size) <= 1
    nearest = np.argmin(np.abs(found.on_s[:, None] - on), axis=1)
    assert np.all(np.diff(nearest) == 1)
    frame = 1 / frames_hz
    assert found.on_s == pytest.approx(on[nearest], abs=1.6 * frame)
    assert found.off_s == pytest.approx(off[nearest], abs=1.6 * frame)
    # The middle of the foot, which reaches 10 cm back and 14 cm ahead.
    assert found.x_m == pytest.approx(x[nearest] + 0.02, abs=0.04)
    assert found.step_rate_hz == pytest.approx(rate_hz, rel=0.015)
    assert abs(found.step_rate_hz - rate_hz) < 3 * found.step_rate_sd_hz
    assert found.step_rate_sd_hz < 0.05 * rate_hz
    assert "contacts_missed" not in codes(found)


def test_the_set_position_is_no_step(world: SimpleNamespace, p) -> None:
    """Feet that stand still for half a second before the start are left out."""
    found, (on, _, _) = steps_of(world, p, rest_s=0.6, duration_s=1.6)
    assert found.on_s[0] > 0.6
    assert found.on_s.size >= on.size - 2
    assert np.all(np.diff(found.on_s) > 0.5 / 4.5)


def test_missed_contacts_are_counted(world: SimpleNamespace, p) -> None:
    """Two of three contacts leave no trace: fewer are found, the notice gives both numbers, the rate stands."""
    found, (on, _, _) = steps_of(world, p, seen=lambda n: n % 3 == 0)
    text = codes(found)["contacts_missed"]
    assert text.startswith(f"{found.on_s.size} foot contacts")
    expected = int(text.split("about ")[1].split()[0])
    assert expected == pytest.approx(on.size, abs=2)
    assert found.step_rate_hz == pytest.approx(4.5, rel=0.05)


def test_a_track_without_feet_still_has_a_cadence(world: SimpleNamespace, p) -> None:
    """Grass to the ankles: no ground-near rows at all; the legs' spread gives the rate, the lane its centre."""
    track, _ = stride(world, p)
    bare = Track(
        **{name: getattr(track, name) for name in Track.__slots__ if not name.startswith("low_")},
        low_t_s=np.zeros(0),
        low_uv_px=np.zeros((0, 3)),
    )
    found = find_steps(bare, world.known(p), world.LANE)
    assert isinstance(found, Steps)
    assert found.on_s.size == 0
    assert found.step_rate_hz == pytest.approx(4.5, rel=0.05)
    assert found.lateral_source == "lane centre"
    assert found.lateral_m == world.LANE.centre_y_m
    assert "contacts_missed" in codes(found)


def test_no_step_rhythm(world: SimpleNamespace, p) -> None:
    """Legs that do not open and close: a Failure that says for how long, and what to film."""
    track, _ = stride(world, p, flat_legs=True)
    answer = find_steps(track, world.known(p), world.LANE)
    assert isinstance(answer, Failure)
    assert not answer
    assert (answer.stage, answer.code) == ("steps", "no_step_rhythm")
    seconds = float(answer.reason.split("in ")[1].split(" s")[0])
    assert seconds == pytest.approx(np.ptp(track.t_s[track.whole]), abs=0.15)
    assert "three steps" in answer.hint


# --- the runner's place across the lane ---------------------------------------------------------


def test_feet_correct_the_place_in_the_lane(world: SimpleNamespace, p) -> None:
    """Runners 20 cm off either way: the feet say so, and within the stated sd."""
    for off in (-0.2, 0.0, 0.2):
        found, _ = steps_of(world, p, y_m=0.61 + off)
        assert found.lateral_source == "feet"
        assert abs(found.lateral_m - 0.61 - off) < 2 * found.lateral_sd_m
        assert abs(found.lateral_m - 0.61 - off) < 0.12
        assert found.lateral_sd_m < 0.13


def test_off_centre_is_told(world: SimpleNamespace) -> None:
    """Near and high up, where a row is worth 4 cm, half a metre off is sure."""
    p = world.parameters(distance_m=8.0, x_m=5.0, height_m=2.2, hfov_deg=72.0)
    found, _ = steps_of(world, p, y_m=0.61 + 0.45)
    text = codes(found)["off_centre"]
    cm = 100 * (found.lateral_m - 0.61)
    assert cm > 25
    assert f"{cm:+.0f} cm" in text
    assert f"sd {100 * found.lateral_sd_m:.0f} cm" in text
    assert "off_centre" not in codes(steps_of(world, p, y_m=0.61)[0])


def test_from_far_away_the_lane_is_trusted(world: SimpleNamespace) -> None:
    """At 25 m and eye height a row is worth a quarter of a metre: the feet hardly count."""
    p = world.parameters(distance_m=25.0, x_m=7.0, height_m=1.2, hfov_deg=60.0)
    found, _ = steps_of(world, p, y_m=0.61 + 0.2, duration_s=2.4)
    assert found.lateral_sd_m > 0.1
    assert abs(found.lateral_m - 0.61) < 0.1
    assert abs(found.lateral_m - 0.81) < 2 * found.lateral_sd_m


def test_a_lane_elsewhere_moves_everything_along(world: SimpleNamespace) -> None:
    """The same geometry one lane over gives the same contacts and the same distance from the lane's centre."""
    p = world.parameters(distance_m=11.0, x_m=7.0, height_m=1.7)
    shifted = p + 2.44 * np.eye(9)[4]
    here, _ = steps_of(world, p, y_m=0.71)
    there, _ = steps_of(world, shifted, y_m=0.71 + 2.44, lane=Lane(centre_y_m=0.61 + 2.44))
    assert there.lateral_m - 2.44 == pytest.approx(here.lateral_m, abs=1e-6)
    assert there.x_m == pytest.approx(here.x_m, abs=1e-6)


def test_lateral_intervals_cover(world: SimpleNamespace) -> None:
    """60 runners drawn from the lane's own spread, rows read with 1.2 px of common error, cameras near and far."""
    rng = np.random.default_rng(11)
    inside = 0
    for n in range(60):
        p = world.parameters(
            side=int(rng.choice([-1, 1])), distance_m=rng.uniform(8, 20), x_m=6.0, height_m=rng.uniform(1.2, 2.5)
        )
        y = 0.61 + 0.15 * rng.standard_normal()
        found, _ = steps_of(world, p, y_m=y, row_error_px=1.2 * rng.standard_normal(), seed=n, duration_s=1.3)
        inside += abs(found.lateral_m - y) < 1.96 * found.lateral_sd_m
    # 95 % of 60: 53 or more with a probability of 99 % (binomial: 57 +- 1.7).
    assert inside >= 53
