"""How results are put into words: names, numbers with their intervals, reasons why something is missing."""

from __future__ import annotations

import re
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from statistics import NormalDist
from typing import Any, Final

import numpy as np

from vidkin.notices import FAILURES, Failure, Severity, failure
from vidkin.stages import Analysis, Fit, Quantity, Split

SEVERITY: Final = {"serious": "Serious", "warning": "Warning", "info": "Note"}
STAGE: Final = {
    "footage": "Footage",
    "camera": "Camera",
    "track": "Track",
    "steps": "Steps",
    "motion": "Motion",
    "fit": "Fit",
    "report": "Report",
}


@dataclass(frozen=True, slots=True)
class Name:
    """A quantity's symbol, its short name and what it means."""

    symbol: str
    title: str
    meaning: str


#: The names of the house, in the order they are shown.
NAMES: Final[dict[str, Name]] = {
    "top_speed": Name("v_top", "Top speed", "highest step-averaged speed reached in view"),
    "top_speed_at": Name("x_top", "Place of top speed", "where along the lane top speed was reached"),
    "v_max": Name("v_max", "Limiting speed", "speed that the mono-exponential law nears"),
    "tau": Name("τ", "Time constant", "time constant of the mono-exponential law"),
    "F0": Name("F0", "Force at zero speed", "horizontal force at zero speed, from the force-velocity line"),
    "F0_absolute": Name("F0·m", "Force at zero speed", "F0 for the stated body mass"),
    "V0": Name("V0", "Speed at zero force", "speed at which the force-velocity line reaches zero force"),
    "P_max": Name("P_max", "Peak power", "peak horizontal power of the force-velocity line, F0·V0/4"),
    "P_max_absolute": Name("P_max·m", "Peak power", "P_max for the stated body mass"),
    "RF_max": Name("RF_max", "Greatest ratio of force", "greatest share of the ground force that points forward"),
    "D_RF": Name("D_RF", "Decrease of that ratio", "how the ratio of force falls with speed"),
    "Z": Name("Z", "Constant power", "constant power per mass of the constant-power law"),
    "k_drag": Name("k", "Drag constant", "drag constant of the constant-power law with drag, ρ·CdA/(2m)"),
    "drag_area": Name("CdA", "Drag area", "drag coefficient times frontal area"),
    "effective_drag_area": Name(
        "CdA_eff",
        "Effective drag area",
        "what the fitted drag constant would be as a drag area: lumped, not the air alone",
    ),
    "drag_force": Name("F_air", "Air drag", "air drag at top speed"),
    "drag_power_share": Name("–", "Power into air drag", "share of the power at top speed that goes into air drag"),
    "air_density": Name("ρ", "Air density", "density of the moist air"),
    "first_movement": Name("t0", "First movement", "clip time of first movement"),
    "step_rate": Name("f", "Step rate", "steps per second"),
    "step_length": Name("L", "Step length", "length of a step"),
}

LUMPED: Final = (
    "A drag constant fitted to speed alone lumps together everything that grows with speed: the air, but also the "
    "body's own losses (swinging limbs, braking at each foot contact). It is not an aerodynamic coefficient, and it "
    "must not be compared with one from a wind tunnel."
)

CAUTIONS: Final = (
    "All-out sprinting loads muscles, tendons and heart. Warm up fully; anyone with symptoms, a past injury or a doubt "
    "about their heart asks a doctor first. Stop at pain.",
    "Keep tripod, bags and people off the running line and its run-out; weigh the tripod down and watch its legs "
    "and cables.",
    "Film only people who agreed to it. For minors, ask a parent or guardian too, and say who will see the clip and "
    "how long it is kept.",
    "These numbers describe one filmed rep. They are no diagnosis and no measure of health or of readiness to "
    "return to sport.",
    "The rules of your track, club, school and country come first; decisions about training, injury and health belong "
    "to qualified, licensed people.",
)


def is_split(name: str) -> bool:
    """Whether a quantity's name is that of a split, shown with the splits."""
    return name.startswith("split_")


def ordered(quantities: Mapping[str, Quantity]) -> list[Quantity]:
    """Quantities in the house order, splits left out, unknown names last."""
    order = {name: k for k, name in enumerate(NAMES)}
    kept = [q for name, q in quantities.items() if not is_split(name)]
    return sorted(kept, key=lambda q: order.get(q.name, len(order)))


def name_of(name: str) -> Name:
    """Symbol and meaning; a name the house does not know speaks for itself."""
    return NAMES.get(name, Name(name, name.replace("_", " "), name.replace("_", " ")))


def decimals(value: float, half_width: float | None) -> int:
    """Decimals worth printing: the interval's half width keeps one digit, two where the first is 1 or 2.

    Without an interval: four significant digits.
    """
    if half_width is None or half_width <= 0:
        size = abs(value)
        return int(np.clip(3 - np.floor(np.log10(size)), 0, 8)) if size > 0 else 2
    return int(np.clip(-np.floor(np.log10(half_width / 3)), 0, 8))


def quantity_decimals(q: Quantity) -> int:
    """Decimals of a quantity, from its own interval."""
    return decimals(q.value, None if q.low is None or q.high is None else (q.high - q.low) / 2)


def number(value: float, places: int) -> str:
    """A number with a true minus sign, never a negative zero."""
    text = f"{value:.{places}f}"
    if float(text) == 0:
        text = text.lstrip("-")
    return text.replace("-", "−")


def value_text(q: Quantity) -> str:
    """The value without its unit."""
    return number(q.value, quantity_decimals(q))


def interval_text(q: Quantity) -> str:
    """`low to high`, or why there is none."""
    if q.low is None or q.high is None:
        return f"no interval: {q.why_no_interval or 'no reason was given'}"
    places = quantity_decimals(q)
    return f"{number(q.low, places)} to {number(q.high, places)}"


def tied(text: str) -> str:
    """The text with numbers tied to their units, so that no line breaks between them."""
    return re.sub(r"(?<=\d) (?=(?:%|°|px|ms|cm|kg|Hz|[msNW])(?:[^\w]|$))", "\u00a0", text)


def unit_of(q: Quantity) -> str:
    """The unit as printed."""
    return "" if q.unit in ("", "-", "–", "1") else q.unit.replace("^2", "²").replace("^3", "³")


def method_of(q: Quantity) -> str:
    """The method as printed."""
    return q.method.replace("+-", "±")


#: Laws by the name the fit gives them.
LAWS: Final = {
    "mono_exponential": "mono-exponential",
    "force_velocity": "force-velocity with air drag",
    "constant_power_drag": "constant power with drag",
    "constant_power": "constant power",
    "constant_acceleration": "constant acceleration",
}


def law_title(name: str) -> str:
    """A law's name as printed; one that is not known speaks for itself."""
    return LAWS.get(name, name.replace("_", " "))


def split_places(splits: tuple[Split, ...]) -> int:
    """Decimals of split times: as many as the narrowest interval deserves, at least two."""
    return max([2, *(decimals(s.time_s, (s.high_s - s.low_s) / 2) for s in splits)])


def half_width_factor(level: float) -> float:
    """Half width of a normal interval of `level`, in standard deviations [-]."""
    return NormalDist().inv_cdf(0.5 + level / 2)


def failure_severity(f: Failure) -> Severity:
    """How grave a failure is, by the registry; one that is not registered is serious."""
    return FAILURES[f.code].severity if f.code in FAILURES else "serious"


def why_missing(analysis: Analysis, stage: str) -> Failure:
    """Why a stage has no answer: its own failure, that of a stage before it, or that it was not run."""
    order = ("camera", "track", "steps", "motion", "fit")
    own = getattr(analysis, stage)
    if isinstance(own, Failure):
        return own
    for name in order[: order.index(stage)][::-1]:
        earlier = getattr(analysis, name)
        if isinstance(earlier, Failure):
            return earlier
    return failure("not_run", stage=stage)


def first_movement_s(analysis: Analysis) -> float | None:
    """Clip time of first movement [s], where the fit found a start."""
    if isinstance(analysis.fit, Fit) and "first_movement" in analysis.fit.quantities:
        return analysis.fit.quantities["first_movement"].value
    return None


def time_zero_s(analysis: Analysis) -> tuple[float, str]:
    """Where the time axis starts in clip time [s], and what to call it."""
    start = first_movement_s(analysis)
    return (0.0, "time in the clip, s") if start is None else (start, "time from first movement, s")


def flat(mapping: Mapping[str, Any], prefix: str = "") -> Iterator[tuple[str, str]]:
    """Nested provenance as dotted keys and text values."""
    for key, value in mapping.items():
        name = f"{prefix}{key}"
        if isinstance(value, Mapping):
            yield from flat(value, f"{name}.")
        elif isinstance(value, (list, tuple)):
            yield name, ", ".join(str(v) for v in value)
        else:
            yield name, str(value)
