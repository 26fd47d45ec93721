"""Following one runner in small films of known people: the point followed, the right person, and every refusal."""

from __future__ import annotations

from dataclasses import replace
from types import SimpleNamespace

import numpy as np
import pytest

from vidkin.core import optics, track
from vidkin.notices import Failure
from vidkin.stages import Frame, Lane, Track


def followed(film) -> Track:
    found = film.follow()
    assert isinstance(found, Track), found
    return found


def refused(film, code) -> Failure:
    answer = film.follow()
    assert isinstance(answer, Failure), answer.notices
    assert not answer
    assert (answer.stage, answer.code) == ("track", code)
    return answer


def remarks(found: Track) -> dict[str, str]:
    return {n.code: n.text for n in found.notices}


def misses(found: Track, film, who=0):
    """Tracked minus true column (N,) [px] of the person's middle, in frames where the body is whole."""
    x = np.array([film.people[who].x_m(t) for t in found.t_s[found.whole]])
    points = np.column_stack([x, np.full(x.size, film.people[who].y_m), np.full(x.size, 1.0)])
    return found.uv_px[found.whole, 0] - optics.project(film.p, points, film.size)[:, 0]


@pytest.fixture(scope="module")
def alone(world: SimpleNamespace):
    """One runner: still for half a second, then off, and out of the picture at the end."""
    runner = world.Person(x_m=world.running(0.5, 0.7), still_s=0.5)
    return world.SmallFilm(people=[runner], rate_hz=40, duration_s=3.0)


@pytest.fixture(scope="module")
def plain(alone) -> Track:
    return followed(alone)


# --- the point ----------------------------------------------------------------------------------


def test_the_middle_of_the_body_is_followed(alone, plain) -> None:
    miss = misses(plain, alone)
    assert np.abs(miss).max() < 1.0
    assert abs(miss.mean()) < 0.3
    assert miss.std() < 0.4
    # The runner's middle is between hip and chest; the legs' swing lifts it by a little.
    height = optics.to_plane(alone.p, plain.uv_px[plain.whole], alone.size, axis=1, value_m=0.61)[:, 2]
    assert np.all((height > 0.7) & (height < 1.25))


def test_rows_say_what_they_are(plain) -> None:
    assert plain.direction == 1
    assert plain.t_s == pytest.approx(plain.frame / 40)
    assert plain.frame[0] == 0  # the stillness before the start belongs to the pass
    assert np.all(np.diff(plain.frame) == 1)
    left, top, right, bottom = plain.box_px.T
    for point, low, high in ((plain.uv_px[:, 0], left, right), (plain.uv_px[:, 1], top, bottom)):
        assert np.all((point > low) & (point < high))
    # A person of 1.75 m at 9 m: about 96 px high, and narrower.
    assert np.median(bottom - top) == pytest.approx(96, abs=6)
    assert np.all(plain.area_px < (right - left + 1) * (bottom - top + 1))
    assert np.all(plain.low_uv_px[:, 0] <= plain.low_uv_px[:, 1])
    assert set(plain.low_t_s) <= set(plain.t_s[plain.whole])


def test_the_stated_noise_is_the_noise(alone, plain) -> None:
    """`cov_px2` against the scatter about a smooth path (third differences of a smooth path vanish)."""
    scatter = np.diff(misses(plain, alone), 3).std() / np.sqrt(20)
    assert 0.4 * scatter < np.sqrt(plain.cov_px2[0, 0, 0]) < 2.5 * scatter


def test_feet_and_legs_are_reported(alone, plain) -> None:
    """The lowest rows lie where the ground is, and the spread of the legs opens and closes at the step rate."""
    lowest = {t: plain.low_uv_px[plain.low_t_s == t, 2].max() for t in np.unique(plain.low_t_s)}
    ground = optics.project(alone.p, np.array([[5.0, 0.61, 0.0]]), alone.size)[0, 1]
    assert np.median(list(lowest.values())) == pytest.approx(ground, abs=6)
    moving = plain.t_s > 0.6
    spread = plain.spread_px[moving] - plain.spread_px[moving].mean()
    phase = 2 * np.pi * 4.0 * plain.t_s[moving]
    power = np.hypot(spread @ np.cos(phase), spread @ np.sin(phase)) * np.sqrt(2 / spread.size)
    assert power > 0.8 * np.linalg.norm(spread)


def test_frames_cut_by_the_edge_are_kept_and_marked(alone, plain) -> None:
    """Only the runner leaves the picture: rows at the end are cut, and a notice counts them."""
    cut = int(np.count_nonzero(~plain.whole))
    assert cut > 0
    assert not plain.whole[-1]
    assert remarks(plain)["cut_by_edge"].startswith(f"{cut} frames")
    # No body that touches the picture's edge is called whole.
    assert plain.box_px[plain.whole][:, 2].max() <= alone.size[0] - 2


def test_progress_is_told_for_every_frame(alone) -> None:
    area, samples = track.sampler(alone.camera(), alone.lane)
    frames = list(alone.frames())[:40]
    for frame in frames:
        samples.add(frame)
    seen: list[int] = []
    track.follow(iter(frames), area, samples, progress=seen.append)
    assert seen == list(range(40))


# --- symmetries ---------------------------------------------------------------------------------


def test_seen_from_the_other_side_the_runner_goes_left(world: SimpleNamespace, alone) -> None:
    film = replace(alone, p=world.parameters(size=world.SMALL, side=-1, distance_m=9.0, x_m=5.0))
    found = followed(film)
    assert found.direction == -1
    assert np.abs(misses(found, film)).max() < 1.0
    assert found.uv_px[-1, 0] < found.uv_px[0, 0]


# --- light --------------------------------------------------------------------------------------


@pytest.mark.parametrize("change", [0.2, -0.15])
def test_exposure_drift_is_followed(alone, plain, change) -> None:
    film = replace(alone, gain=lambda t: 1 + change * t / 3.0)
    found = followed(film)
    assert found.t_s.size > 0.95 * plain.t_s.size
    assert np.abs(misses(found, film)).max() < 1.0


@pytest.mark.parametrize("sun_m", [1.2, -1.2])
def test_a_shadow_on_the_ground_does_not_pull(alone, plain, sun_m) -> None:
    """A shadow of two fifths of the light: left in, it pulls 3.6 px along and 4.5 px down on average."""
    film = replace(alone, people=[replace(alone.people[0], sun_m=sun_m)])
    found = followed(film)
    miss = misses(found, film)
    assert abs(miss.mean()) < 1.2
    assert np.abs(miss).max() < 4.5
    assert found.t_s.size > 0.95 * plain.t_s.size
    both = plain.whole & np.isin(plain.frame, found.frame[found.whole])
    same = found.whole & np.isin(found.frame, plain.frame[both])
    assert np.mean(found.uv_px[same, 1] - plain.uv_px[both, 1]) < 2.0


# --- background ---------------------------------------------------------------------------------


def test_a_long_stillness_is_not_learnt_as_background(world: SimpleNamespace, alone) -> None:
    """The runner stands for 60 % of the clip: a plain median would hold the runner's ghost."""
    runner = world.Person(x_m=world.running(2.4, 0.8), still_s=2.4)
    film = replace(alone, people=[runner], duration_s=4.0)
    found = followed(film)
    assert found.t_s[0] < 2.0
    assert found.t_s[-1] > 3.9
    assert np.all(np.diff(found.frame) == 1)
    assert np.abs(misses(found, film)).max() < 1.0


@pytest.mark.parametrize("size_px", [(640, 360), (1920, 1080)])
def test_the_sampler_stays_small(size_px) -> None:
    """However long the clip: a few dozen frames, spread over all of it, of a bounded number of bytes."""
    w, h = size_px
    samples = track.Sampler(slice(0, h))
    luma, chroma = np.zeros((h, w), np.uint8), np.zeros((h // 2, w // 2), np.uint8)
    most = 0
    for i in range(1500):
        samples.add(Frame(index=i, t_s=i / 60, luma=luma, chroma_u=chroma, chroma_v=chroma))
        most = max(most, sum(p.nbytes for _, planes in samples.samples for p in planes))
    assert most < 150e6
    index = np.array([i for i, _ in samples.samples])
    assert 12 <= index.size <= 49
    assert len(set(np.diff(index))) == 1  # evenly
    assert index[0] == 0
    assert index[-1] >= 1500 - 2 * np.diff(index)[0]


def test_a_sample_does_not_change_with_the_readers_buffer() -> None:
    """A decoder may write the next picture where the last one was."""
    samples = track.Sampler(slice(0, 4))
    luma, chroma = np.full((4, 4), 7, np.uint8), np.full((2, 2), 9, np.uint8)
    samples.add(Frame(index=0, t_s=0.0, luma=luma, chroma_u=chroma, chroma_v=chroma))
    luma[:], chroma[:] = 0, 0
    planes = samples.samples[0][1]
    assert [int(p[0, 0]) for p in planes] == [7, 9, 9]


def test_other_chroma_sizes_are_brought_to_half(alone) -> None:
    """4:2:2 and 4:4:4 pictures give the same track as 4:2:0."""
    area, samples = track.sampler(alone.camera(), alone.lane)
    frames = [
        replace(
            frame,
            chroma_u=np.repeat(np.repeat(frame.chroma_u, 2, axis=0), 2, axis=1),
            chroma_v=np.repeat(np.repeat(frame.chroma_v, 2, axis=0), 2, axis=1),
        )
        for frame in alone.frames()
    ]
    for frame in frames:
        samples.add(frame)
    found = track.follow(iter(frames), area, samples)
    assert isinstance(found, Track)
    assert np.abs(misses(found, alone)).max() < 1.0


# --- others -------------------------------------------------------------------------------------


@pytest.mark.parametrize("lanes_away", [1, -1])
def test_a_faster_runner_in_the_next_lane_is_not_taken(world: SimpleNamespace, alone, lanes_away) -> None:
    other = world.Person(
        x_m=world.running(0.5, 2.6, speed_mps=6.5), still_s=0.5, y_m=0.61 + 1.22 * lanes_away, luma=205, tint=(110, 128)
    )
    film = replace(alone, people=[alone.people[0], other])
    found = followed(film)
    assert np.abs(misses(found, film)).max() < 1.5
    assert "1 other pass" in remarks(found)["others_run"]


def test_the_lane_that_is_declared_decides(world: SimpleNamespace, alone) -> None:
    """The same film with the other lane declared gives the other runner."""
    other = world.Person(x_m=world.running(0.5, 2.6), still_s=0.5, y_m=0.61 + 2.44, luma=205, tint=(110, 128))
    film = replace(alone, people=[alone.people[0], other], lane=Lane(centre_y_m=0.61 + 2.44))
    found = followed(film)
    assert np.abs(misses(found, film, who=1)).max() < 1.5
    assert "others_run" in remarks(found)


def test_somebody_who_walks_past_does_not_bend_the_track(world: SimpleNamespace, alone) -> None:
    """A walker against the running direction, nearer the camera: where the outlines join, frames are left out."""
    walker = world.Person(x_m=lambda t: 9 - 1.6 * t, y_m=-0.9, luma=70, tint=(135, 120))
    film = replace(alone, people=[alone.people[0], walker])
    found = followed(film)
    assert np.abs(misses(found, film)).max() < 2.5
    said = remarks(found)
    assert "bodies_merged" in said
    assert "others_run" not in said  # nobody else runs


# --- gaps ---------------------------------------------------------------------------------------


def test_a_post_before_the_runner_does_no_harm(alone, plain) -> None:
    film = replace(alone, post_px=(300, 316))
    found = followed(film)
    assert found.t_s.size > 0.95 * plain.t_s.size
    assert np.abs(misses(found, film)).max() < 2.0


def test_frames_without_the_runner_are_counted(alone) -> None:
    """Eight frames that show nobody: the track goes on behind the gap and says so."""
    film = replace(alone, blank=frozenset(range(60, 68)))
    found = followed(film)
    assert not set(range(60, 68)) & set(found.frame.tolist())
    assert {59, 68} <= set(found.frame.tolist())
    assert "not found in 8 of" in remarks(found)["frames_without_runner"]
    assert np.abs(misses(found, film)).max() < 1.0


def test_a_second_pass_in_the_lane_is_told(world: SimpleNamespace, alone) -> None:
    """Through the picture twice: one pass is taken, the other is named, and it is nobody else's."""
    runner = world.Person(x_m=lambda t: 6 * t - 1 if t < 2.2 else 6.5 * (t - 2.4) - 1)
    film = replace(alone, people=[runner], duration_s=4.6)
    found = followed(film)
    assert np.ptp(found.t_s) < 2.3
    assert np.abs(misses(found, film)).max() < 1.0
    said = remarks(found)
    assert f"{found.t_s[0]:.2f} s to {found.t_s[-1]:.2f} s" in said["several_passes"]
    assert "others_run" not in said


# --- refusals -----------------------------------------------------------------------------------


def test_lane_out_of_view(world: SimpleNamespace, alone) -> None:
    """A camera that looks up, or the other way."""
    for p in (
        world.parameters(size=world.SMALL, distance_m=9.0, x_m=5.0, pitch_deg=60.0),
        world.parameters(size=world.SMALL, distance_m=-9.0, x_m=5.0),
    ):
        answer = refused(replace(alone, p=p), "lane_out_of_view")
        assert "y = 0.61 m" in answer.reason
        assert "centre_y_m" in answer.hint


def test_too_few_frames(alone) -> None:
    answer = refused(replace(alone, duration_s=0.075), "too_few_frames")
    assert "has 3 frames" in answer.reason


@pytest.mark.parametrize("speed_px_s", [20, 190])
def test_camera_moves(alone, speed_px_s) -> None:
    """A picture that pans, slowly or fast, is refused, whoever runs in it."""
    film = replace(alone, pan_px=lambda t: min(speed_px_s * t, 190.0), duration_s=min(2.0, 190 / speed_px_s))
    answer = refused(film, "camera_moves")
    assert "tripod" in answer.hint


def test_nobody_runs(world: SimpleNamespace, alone) -> None:
    empty = replace(alone, people=[], duration_s=1.0)
    assert "No person" in refused(empty, "nobody_runs").reason
    waiting = world.Person(x_m=lambda t: 5 + 0.1 * np.sin(t), still_s=9.0)
    refused(replace(alone, people=[waiting], duration_s=1.5), "nobody_runs")


def test_only_backwards(world: SimpleNamespace, alone) -> None:
    """Somebody walks back, or the x axis points the wrong way."""
    film = replace(alone, people=[world.Person(x_m=lambda t: 9.5 - 3 * t)], duration_s=2.4)
    assert "x axis" in refused(film, "only_backwards").hint


def test_other_lane_only(alone) -> None:
    away = replace(alone.people[0], y_m=0.61 + 2.44)
    answer = refused(replace(alone, people=[away]), "other_lane_only")
    y = float(answer.reason.split("y = ")[1].split(" m")[0])
    assert y == pytest.approx(0.61 + 2.44, abs=0.6)
    assert "centre y = 0.61 m" in answer.reason


def test_never_whole(world: SimpleNamespace, alone) -> None:
    """So near that head and feet never fit together."""
    p = world.parameters(size=world.SMALL, distance_m=2.2, x_m=1.5, pitch_deg=0.0, height_m=1.0)
    film = replace(alone, p=p, people=[world.Person(x_m=lambda t: 3 * t - 0.8)], duration_s=1.5)
    answer = refused(film, "never_whole")
    assert "in 0 frames only" in answer.reason
    assert "farther away" in answer.hint
