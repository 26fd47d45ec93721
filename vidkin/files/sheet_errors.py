"""Turns a failed check of a sheet into one line: the key, the value seen, what is allowed, what was probably meant."""

from __future__ import annotations

import difflib
from collections.abc import Callable, Iterable, Mapping
from typing import Any, Final, get_args

from pydantic import BaseModel

_Guess = tuple[float, float, str, Callable[[float], float]]

#: A value out of range that would fit in another unit: lowest, highest, the unit's name, how to convert.
_GUESSES: Final[dict[str, tuple[_Guess, ...]]] = {
    "mass_kg": ((20_000, 200_000, "grams", lambda n: n / 1000), (200.001, 440, "pounds", lambda n: n * 0.45359237)),
    "stature_m": (
        (100, 250, "centimetres", lambda n: n / 100),
        (1000, 2500, "millimetres", lambda n: n / 1000),
        (3.3, 8.2, "feet", lambda n: n * 0.3048),
        (39.5, 98.5, "inches", lambda n: n * 0.0254),
    ),
    "temperature_c": (
        (243, 330, "kelvins", lambda n: n - 273.15),
        (55.001, 131, "degrees Fahrenheit", lambda n: (n - 32) / 1.8),
    ),
    "pressure_hpa": (
        (50_000, 110_000, "pascals", lambda n: n / 100),
        (50, 110, "kilopascals", lambda n: n * 10),
        (14.7, 32.5, "inches of mercury", lambda n: n * 33.8639),
        (0.5, 1.1, "bars", lambda n: n * 1000),
    ),
    "hfov_deg": ((0.08, 2.7, "radians", lambda n: n * 57.29578),),
    "height_m": ((50.001, 500, "centimetres", lambda n: n / 100),),
    "width_m": ((50, 1000, "centimetres", lambda n: n / 100),),
}

_UNITS: Final = {
    "kg": "kg",
    "m": "m",
    "c": "degrees Celsius",
    "hpa": "hPa",
    "pct": "%",
    "mps": "m/s",
    "deg": "degrees",
    "px": "px",
    "fps": "pictures per second",
}

_KINDS: Final = {
    "string_type": 'a text in "quotes"',
    "float_type": "a number without quotes, with a decimal point",
    "list_type": "a list",
    "model_type": "a table",
    "model_attributes_type": "a table",
    "finite_number": "a finite number",
}


def describe(error: Mapping[str, Any], data: Mapping[str, Any], top: type[BaseModel]) -> str:
    """One line for one pydantic error of the sheet `data`, whose schema is `top`."""
    place = tuple(error["loc"])
    name, kind, value = _spelt(place, data), str(error["type"]), error["input"]
    if kind == "extra_forbidden":
        return f"unknown key {name} = {_shown(value)}." + _meant(place, top)
    if kind == "missing":
        return f"{name} is missing."
    if kind in ("greater_than_equal", "less_than_equal"):
        low, high = _range(place, top)
        unit = _UNITS.get(str(_last_key(place)).rsplit("_", 1)[-1], "")
        allowed = f"allowed are {low:g} to {high:g} {unit}".rstrip()
        return f"{name} = {_shown(value)}: {allowed}." + _other_unit(_last_key(place), float(value))
    if kind == "value_error":
        return f"{name} {error['ctx']['error']}."
    wanted = _KINDS.get(kind, "")
    if place == ("mark",):
        wanted = "a list of tables: start each mark with [[mark]], in double brackets"
    return f"{name} = {_shown(value)} must be {wanted}." if wanted else f"{name} = {_shown(value)}: {error['msg']}."


def _last_key(place: Iterable[int | str]) -> str:
    return next((step for step in reversed(tuple(place)) if isinstance(step, str)), "")


def _spelt(place: tuple[int | str, ...], data: Mapping[str, Any]) -> str:
    """`athlete.mass_kg`, or `mark 3 ('10 m') u_px`."""
    if len(place) >= 2 and place[0] == "mark" and isinstance(place[1], int):
        entry = data["mark"][place[1]]
        label = entry.get("label") if isinstance(entry, dict) else None
        said = f"mark {place[1] + 1}" + (f" ('{label}')" if label else "")
        return f"{said}: {place[2]}" if len(place) > 2 else said
    return ".".join(f"[{step + 1}]" if isinstance(step, int) else step for step in place).replace(".[", "[")


def _shown(value: object) -> str:
    text = "true" if value is True else "false" if value is False else repr(value)
    return text if len(text) <= 60 else text[:57] + "..."


def _tables(top: type[BaseModel]) -> dict[str, type[BaseModel]]:
    """The schema of each table of the sheet; '' is the sheet's own level."""
    tables = {"": top}
    for key, field in top.model_fields.items():
        for kind in (field.annotation, *get_args(field.annotation)):
            if isinstance(kind, type) and issubclass(kind, BaseModel):
                tables[key] = kind
    return tables


def _meant(place: tuple[int | str, ...], top: type[BaseModel]) -> str:
    """What the writer of an unknown key probably meant."""
    tables = _tables(top)
    table, key = (str(place[0]) if len(place) > 1 else ""), str(place[-1])
    near = difflib.get_close_matches(key, tables[table].model_fields, 1, 0.6)
    if near:
        return f" Did you mean {near[0]}?"
    for other, schema in tables.items():
        if key in schema.model_fields:
            return f" It belongs {f'in [{other}]' if other else 'at the top of the sheet, before any table'}."
    stem = key.split("_")[0]
    same = [known for known in tables[table].model_fields if known.split("_")[0] == stem]
    if same:
        return f" Did you mean {same[0]}?"
    return f" Known keys here: {', '.join(tables[table].model_fields)}."


def _range(place: tuple[int | str, ...], top: type[BaseModel]) -> tuple[float, float]:
    """Lowest and highest value that the schema allows for a key."""
    keys = [step for step in place if isinstance(step, str)]
    field = _tables(top)[keys[0] if len(keys) > 1 else ""].model_fields[keys[-1]]
    inner = [part for kind in get_args(field.annotation) for part in getattr(kind, "__metadata__", ())]
    rules = [rule for part in inner for rule in getattr(part, "metadata", ())] + list(field.metadata)
    low = next(rule.ge for rule in rules if getattr(rule, "ge", None) is not None)
    return float(low), float(next(rule.le for rule in rules if getattr(rule, "le", None) is not None))


def _other_unit(key: str, value: float) -> str:
    for low, high, unit, convert in _GUESSES.get(key, ()):
        if low <= value <= high:
            return f" If that is in {unit}, write {convert(value):.4g}."
    return ""
