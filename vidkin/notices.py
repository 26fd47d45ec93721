"""One registry of quality notices: code, stage, severity, one line, what to do.

Texts are templates; `notice(code, **values)` fills them in. Docs, report and JSON are generated from here.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final, Literal

Severity = Literal["info", "warning", "serious"]
StageName = Literal["footage", "camera", "track", "steps", "motion", "fit", "report"]


@dataclass(frozen=True, slots=True, kw_only=True)
class Notice:
    """One remark on quality; `code` is a key of `REGISTRY`."""

    code: str
    stage: StageName
    severity: Severity
    text: str
    hint: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Failure:
    """What a stage returns when it cannot answer. Falsy, and it says why and what to do."""

    stage: StageName
    code: str
    reason: str
    hint: str

    def __bool__(self) -> Literal[False]:
        return False


@dataclass(frozen=True, slots=True)
class Entry:
    """A registered notice or failure: `text` and `hint` are `str.format` templates."""

    stage: StageName
    severity: Severity
    text: str
    hint: str


REGISTRY: Final[dict[str, Entry]] = {
    # --- footage ---
    "several_tracks": Entry(
        "footage",
        "info",
        "The file holds {count} video tracks; number {number} ({width} x {height} px, {pictures} pictures) is used.",
        "Look at the first frame; if it is the wrong picture, save that track alone as a clip.",
    ),
    "slow_motion": Entry(
        "footage",
        "info",
        "Slow motion: filmed at {capture:g} pictures per second ({source}), stored at {stored:.2f}; "
        "all times are divided by {factor:.4g}.",
        "If the clip plays at natural speed, state capture_fps = {stored:.4g} in the sheet.",
    ),
    "slow_factor_not_whole": Entry(
        "footage",
        "warning",
        "The stated capture rate slows time by {factor:.4f}; phones slow it by whole numbers, here most likely {whole}.",
        "Unless the rate was measured, state capture_fps = {capture:.6g}.",
    ),
    "slow_motion_unknown": Entry(
        "footage",
        "serious",
        "The file carries a slow-motion record ({record}) but no single capture rate: parts of it may run slower than "
        "others. It is taken as if time ran evenly.",
        "Film in an ordinary mode of 60 to 240 pictures per second; if the whole clip is slow, state capture_fps.",
    ),
    "capture_tag_ignored": Entry(
        "footage",
        "warning",
        "The phone's capture-rate tag says '{tag}', but {stored:.2f} pictures per second are stored; the tag is not used "
        "and the clip is taken as real time.",
        "If the clip plays in slow motion, state capture_fps in the sheet.",
    ),
    "uneven_times": Entry(
        "footage",
        "warning",
        "{count} of {total} frame intervals are uneven; the longest lasts {gap_ms:.0f} ms, at {at_s:.3f} s "
        "(usual: {usual_ms:.1f} ms).",
        "The true times are used. More light and a fixed frame rate keep a phone from dropping frames.",
    ),
    "coarse_times": Entry(
        "footage",
        "warning",
        "The file rounds times to {tick_ms:.3g} ms at {usual_ms:.2f} ms between frames: about {cm:.1f} cm (one sd) at 10 m/s.",
        "Use the phone's own file, not a copy changed by another program.",
    ),
    "nominal_times": Entry(
        "footage",
        "warning",
        "This kind of file ({container}) keeps no time for each frame, only one rate, {rate:.2f} per second.",
        "Use the phone's own MP4 or MOV; a frame that the camera dropped cannot be seen here.",
    ),
    "frames_lost": Entry(
        "footage",
        "warning",
        "{lost} of {total} pictures are missing or damaged and were left out.",
        "Copy the clip from the phone again; the file is damaged or incomplete.",
    ),
    "ended_early": Entry(
        "footage",
        "warning",
        "The file announces {declared:.2f} s but its pictures end at {last:.2f} s.",
        "Copy the clip from the phone again; the file seems incomplete.",
    ),
    "times_missing": Entry(
        "footage",
        "warning",
        "{count} of {total} pictures carry no time and were left out.",
        "Use the phone's own file, not a copy changed by another program.",
    ),
    "times_not_rising": Entry(
        "footage",
        "warning",
        "{count} of {total} pictures repeat or go back in time and were left out.",
        "Use the phone's own file, not a copy changed by another program.",
    ),
    "interlaced": Entry(
        "footage",
        "warning",
        "The pictures are interlaced: each holds two half pictures of different times.",
        "Film in a progressive mode; every phone has one.",
    ),
    # --- camera ---
    "marks_disagree": Entry(
        "camera",
        "warning",
        "The marks do not agree within their stated error: rms {rms_px:.1f} px ({rms_cm:.1f} cm). The mark that stands "
        "out most is '{label}', {worst_cm:.1f} cm off.",
        "Look at the overlay; check that mark's place on the track and its click. Intervals were widened to match.",
    ),
    "mark_left_out": Entry(
        "camera",
        "warning",
        "Mark '{label}' disagrees with the other {others} by {cm:.0f} cm; it was left out.{looks}",
        "Check its coordinates and its click, or take it out of the sheet.",
    ),
    "marks_swapped": Entry(
        "camera",
        "warning",
        "Marks '{first}' and '{second}' look swapped: each fits at the other's click. Both were left out; the other "
        "{others} define the camera.",
        "Exchange their pixels in the sheet.",
    ),
    "other_layout": Entry(
        "camera",
        "serious",
        "The marks are given as {used}, but {better} fits them far better.",
        "Check which event's marks these are; the colours differ from place to place.",
    ),
    "scale_uncertain": Entry(
        "camera",
        "warning",
        "These marks leave the length of the lane uncertain by {percent:.1f} % (one sd).",
        "Add marks at both ends of the filmed stretch, on both lane lines.",
    ),
    # --- track ---
    "others_run": Entry(
        "track",
        "warning",
        "{count} other pass(es) of a person in the picture; the one nearest the declared lane was taken (y = {y:.2f} m).",
        "Watch tracked.mp4: is this the right runner? If not, correct [lane] centre_y_m.",
    ),
    "several_passes": Entry(
        "track",
        "info",
        "The lane is run more than once in this clip; the longest pass, {start:.2f} s to {end:.2f} s, was taken.",
        "Cut the clip to analyse another pass.",
    ),
    "bodies_merged": Entry(
        "track",
        "warning",
        "In {count} frames the runner's outline ran into another one; those frames were not used.",
        "Watch tracked.mp4 around the gap.",
    ),
    "frames_without_runner": Entry(
        "track",
        "warning",
        "The runner was not found in {count} of {total} frames of the pass.",
        "Watch tracked.mp4 around the gaps; clothing of another colour than the background helps.",
    ),
    "cut_by_edge": Entry(
        "track",
        "info",
        "{count} frames in which the picture's edge cuts the body were not used.",
        "Nothing to do.",
    ),
    # --- steps ---
    "contacts_missed": Entry(
        "steps",
        "info",
        "{found} foot contacts were seen where about {expected} are expected.",
        "Step times and lengths are incomplete; step rate and speed do not depend on it.",
    ),
    "off_centre": Entry(
        "steps",
        "info",
        "The feet say that the runner was {cm:+.0f} cm (sd {sd_cm:.0f} cm) from the lane's centre; metres were measured there.",
        "Check [lane] centre_y_m if that is not so.",
    ),
    # --- motion ---
    "beyond_marks": Entry(
        "motion",
        "warning",
        "The runner was measured up to {metres:.1f} m past the outermost mark; the error grows there.",
        "Place marks over the whole stretch that is run.",
    ),
    "plain_window": Entry(
        "motion",
        "info",
        "Without a step rhythm the smoothing window is {window:.2f} s.",
        "The speed curve may carry step ripple.",
    ),
    # --- fit ---
    "humidity_assumed": Entry(
        "fit",
        "info",
        "Humidity is not stated; {percent:.0f} % was used (it moves the air's density by less than 1 %).",
        "State [air] humidity_pct.",
    ),
    "wind_unknown": Entry(
        "fit",
        "warning",
        "Wind is not stated; still air within {sd:g} m/s (sd) was used.",
        "State [air] wind_mps (+ is a tailwind).",
    ),
    "lumped_drag": Entry(
        "fit",
        "warning",
        "Power and drag fitted together give an effective drag area of {area:.2f} m², {ratio:.1f} times that of the body "
        "in air ({body:.2f} m²): it lumps the body's own losses into the air and is not aerodynamic.",
        "For the air alone read drag_force, which comes from body size.",
    ),
    "table_errors": Entry(
        "fit",
        "info",
        "Errors of the table were sized by its scatter about the best law ({sd:.3f} {unit}); an error of scale or clock "
        "that all its rows share is not in the intervals.",
        "Check the instrument's own calibration.",
    ),
    "law_misses_curve": Entry(
        "fit",
        "warning",
        "The law '{law}' leaves the smoothed speed curve by up to {mps:.2f} m/s, more than their errors allow.",
        "Trust the curve where they part; look at the residuals.",
    ),
}

FAILURES: Final[dict[str, Entry]] = {
    # --- footage ---
    # --- camera ---
    "too_few_marks": Entry(
        "camera",
        "serious",
        "{count} marks given, at least {least} are needed.",
        "Add {missing} more on two lane lines, for example near {where}.",
    ),
    "short_stretch": Entry(
        "camera",
        "serious",
        "The marks cover only {stretch:.2f} m along the lane, at least {least:g} m are needed.",
        "Add marks farther along the lane, for example near x = {x:.0f} m, on both lane lines.",
    ),
    "one_line": Entry(
        "camera",
        "serious",
        "All but a few marks ({count}) lie on one line along the lane (y = {y:.2f} m): the camera's tilt and height stay free.",
        "Add at least two marks on another line, for example at y = {other:.2f} m, x = {x1:g} m and x = {x2:g} m.",
    ),
    "mark_outside": Entry(
        "camera",
        "serious",
        "Mark '{label}' at ({u:.1f}, {v:.1f}) px lies outside the picture of {width} x {height} px.",
        "Give its place in this clip's upright pixels, or leave it out.",
    ),
    "mirrored_marks": Entry(
        "camera",
        "serious",
        "No camera fits these marks (rms {rms_px:.0f} px, {rms_cm:.0f} cm), but one fits their mirror image.",
        "Check the sign of y (left of the runner is positive) and of x, and whether the clip was saved mirrored.",
    ),
    "no_camera": Entry(
        "camera",
        "serious",
        "No camera fits these marks: the best misses them by {rms_px:.0f} px ({rms_cm:.0f} cm) rms.",
        "Check that each mark has the right coordinates: two may be swapped, or the spacing may be another event's.",
    ),
    # --- track ---
    "lane_out_of_view": Entry(
        "track",
        "serious",
        "The lane at y = {y:.2f} m is not in the picture that the marks define.",
        "Check [lane] centre_y_m and the y of the marks (left of the runner is positive).",
    ),
    "too_few_frames": Entry(
        "track",
        "serious",
        "The clip has {count} frames; at least {least} are needed to tell runner from background.",
        "Use a longer clip of the same scene.",
    ),
    "camera_moves": Entry(
        "track",
        "serious",
        "{percent:.0f} % of the background's texture moves in the course of the clip: the camera pans, zooms or is held by "
        "hand.",
        "Only a camera that stands still on a tripod can be measured from.",
    ),
    "only_backwards": Entry(
        "track",
        "serious",
        "Somebody moves down the lane, towards smaller x, but nobody up the lane.",
        "The x axis of the marks must point in running direction; check the signs.",
    ),
    "nobody_runs": Entry(
        "track",
        "serious",
        "No person was found moving up the lane.",
        "Check the lane's place in the overlay, and that the runner stands out from the background.",
    ),
    "other_lane_only": Entry(
        "track",
        "serious",
        "The only runner found is near y = {y:.2f} m, outside the declared lane (centre y = {centre:.2f} m).",
        "Correct [lane] centre_y_m, or the y of the marks.",
    ),
    "never_whole": Entry(
        "track",
        "serious",
        "The whole body is in the picture in {count} frames only; at least {least} are needed.",
        "Film from farther away, or turn the camera so that head and feet stay in the picture.",
    ),
    # --- steps ---
    "no_step_rhythm": Entry(
        "steps",
        "warning",
        "No step rhythm was found in {seconds:.2f} s of motion.",
        "Step rate and length are left out; film at least three steps, with the legs clear of the background.",
    ),
    # --- motion ---
    "rays_miss": Entry(
        "motion",
        "serious",
        "In {count} frames the line of sight does not meet the lane: the lens model ends before it.",
        "Add marks near the picture's left and right edge, so that the lens is known there.",
    ),
    "too_short": Entry(
        "motion",
        "serious",
        "The runner is whole in {count} frames only; at least {least} are needed.",
        "Film from farther away or at a higher frame rate.",
    ),
    "shorter_than_window": Entry(
        "motion",
        "serious",
        "The pass lasts {seconds:.2f} s, less than the smoothing window of {window:.2f} s (two steps).",
        "Film from farther away, so that at least two steps are in view.",
    ),
    # --- fit ---
    "no_body_or_air": Entry(
        "fit",
        "warning",
        "Force, power and drag need body and air; missing: {missing}.",
        "State them in the sheet.",
    ),
    "too_little_run": Entry(
        "fit",
        "serious",
        "{metres:.1f} m of running in {rows} rows; at least {least:g} m are needed for a law.",
        "Film a longer stretch.",
    ),
    "too_few_rows": Entry(
        "fit",
        "serious",
        "The table has {rows} usable rows; at least {least} are needed.",
        "Add splits or readings.",
    ),
    "no_law_fits": Entry(
        "fit",
        "serious",
        "No sprint law could be fitted: {why}.",
        "Look at motion.csv and tracked.mp4: is this one runner's whole pass?",
    ),
    "law_not_solved": Entry(
        "fit",
        "warning",
        "The law '{law}' could not be fitted: {why}.",
        "A longer stretch in view gives it more to hold on to.",
    ),
    "start_not_seen": Entry(
        "fit",
        "warning",
        "The runner is already moving when first seen; {names} need the start in view.",
        "Film the start, with a moment of stillness before it.",
    ),
    "plateau_not_seen": Entry(
        "fit",
        "warning",
        "{names} refused: the run in view ends at {percent:.0f} % of V0, at least {least:.0f} % is needed.",
        "Film farther from the lane, so that more of the run is in view.",
    ),
    "drag_not_fitted": Entry(
        "fit",
        "warning",
        "Z and k_drag (power and drag fitted together) refused: {why}.",
        "Film a longer stretch; drag_force from body size does not need it.",
    ),
    "no_steps": Entry(
        "fit",
        "warning",
        "step_rate and step_length refused: {why}",
        "Film at least three steps with the legs clear of the background.",
    ),
    # --- report ---
    "not_run": Entry(
        "report",
        "serious",
        "The stage '{stage}' was not run.",
        "Run the whole job ('vidkin analyse') on this sheet.",
    ),
}


def notice(code: str, **values: object) -> Notice:
    """Make the notice `code`; raises KeyError for an unregistered code or a missing value."""
    e = REGISTRY[code]
    return Notice(
        code=code, stage=e.stage, severity=e.severity, text=e.text.format(**values), hint=e.hint.format(**values)
    )


def failure(code: str, **values: object) -> Failure:
    """Make the failure `code`; raises KeyError for an unregistered code or a missing value."""
    e = FAILURES[code]
    return Failure(stage=e.stage, code=code, reason=e.text.format(**values), hint=e.hint.format(**values))
