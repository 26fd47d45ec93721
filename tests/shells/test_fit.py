"""`vidkin fit` on tables whose truth is known in closed form."""

from __future__ import annotations

import hashlib
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from vidkin.app import fit
from vidkin.stages import Fit

#: Furusawa, Hill & Parkinson 1927: v = v_max (1 - exp(-t / tau)).
V_MAX, TAU = 9.2, 1.18
BODY = ["--mass-kg", "71", "--stature-m", "1.74", "--temperature-c", "18", "--pressure-hpa", "1012"]


def _speed(t_s: np.ndarray) -> np.ndarray:
    return V_MAX * (1 - np.exp(-t_s / TAU))


def _position(t_s: np.ndarray) -> np.ndarray:
    return V_MAX * (t_s - TAU * (1 - np.exp(-t_s / TAU)))


@pytest.fixture
def splits(tmp_path: Path) -> Path:
    fine = np.linspace(0, 9, 90_001)
    rows = [f"{x};{np.interp(x, _position(fine), fine):.3f}".replace(".", ",") for x in range(5, 45, 5)]
    path = tmp_path / "splits.csv"
    path.write_text("distance (m);time (s)\n" + "\n".join(rows) + "\n", encoding="utf-8")
    return path


@pytest.fixture
def speeds(tmp_path: Path) -> Path:
    t_s = np.arange(0, 5.01, 0.1)
    noise = np.random.default_rng(5).normal(0, 0.05, t_s.size)
    rows = [f"{t:.2f},{v:.3f}" for t, v in zip(t_s, 3.6 * (_speed(t_s) + noise), strict=True)]
    path = tmp_path / "speeds.csv"
    path.write_text("time,speed\n" + "\n".join(rows) + "\n", encoding="utf-8")
    return path


def test_splits(vidkin: Any, splits: Path) -> None:
    said = vidkin("fit", splits, "--split", 20, "--split", 10, "--split", 10, "--json")
    assert (said.code, said.err) == (0, "")
    (result,) = said.record["results"]
    for name, truth in (("v_max", V_MAX), ("tau", TAU)):
        found = result["quantities"][name]
        assert found["value"] == pytest.approx(truth, rel=0.01)
        assert found["low"] <= truth <= found["high"]
    assert [split["distance_m"] for split in result["splits"]] == [10, 20]
    assert result["provenance"]["inputs"] == {
        "table": "splits.csv",
        "table_sha256": hashlib.sha256(splits.read_bytes()).hexdigest(),
    }
    assert "no_body_or_air" in {failure["code"] for failure in result["failures"]}
    assert "table_errors" in {notice["code"] for notice in result["notices"]}
    assert result["rows"] == 8
    assert len(result["curves"]["t_s"]) == len(result["curves"]["v_mps"]) > 20


def test_speeds_with_a_stated_unit(vidkin: Any, speeds: Path) -> None:
    said = vidkin("fit", speeds, "--unit", "v = km/h", *BODY, "--humidity-pct", 55, "--wind-mps", 0)
    assert (said.code, said.err) == (0, "")
    for words in ("v_max", "F0", "drag_force", "air_density", "split_10", "the run begins from rest"):
        assert words in said.out
    assert "speeds.csv: column 'time' states no unit: taken as s." in said.out


def test_without_the_unit_the_speeds_are_refused(vidkin: Any, speeds: Path) -> None:
    said = vidkin("fit", speeds)
    assert said.code == 2
    assert "nobody runs so fast" in said.err


def test_what_is_not_stated_is_said(vidkin: Any, splits: Path) -> None:
    said = vidkin("fit", splits, *BODY)
    assert said.code == 0
    text = " ".join(said.out.split())
    assert "Humidity is not stated" in text
    assert "Wind is not stated" in text
    assert "F0" in vidkin("fit", splits, *BODY[:-2], "--altitude-m", "10").out
    said = vidkin("fit", splits)
    assert "Force, power and drag need body and air" in " ".join(said.out.split())
    assert "F0" not in said.out


def test_too_few_rows(vidkin: Any, tmp_path: Path) -> None:
    path = tmp_path / "few.csv"
    path.write_text("distance,time_s\n5,1.35\n10,2.06\n15,2.69\n", encoding="utf-8")
    said = vidkin("fit", path)
    assert said.code == 6
    assert said.err.startswith("Error: Fit could not answer: ")
    assert "few.csv: column 'distance' states no unit: taken as m." in said.out
    said = vidkin("fit", path, "--json")
    assert said.code == said.record["exit_code"] == 6
    assert said.record["results"][0]["quantities"] == {}
    assert [failure["code"] for failure in said.record["results"][0]["failures"]] == ["too_few_rows"]


def test_a_level(vidkin: Any, speeds: Path) -> None:
    wide, narrow = (
        vidkin("fit", speeds, "--unit", "v=km/h", "--json", "--level", level).record["results"][0]["quantities"]["tau"]
        for level in (0.99, 0.6)
    )
    assert (wide["level"], narrow["level"]) == (0.99, 0.6)
    assert wide["low"] < narrow["low"] < narrow["high"] < wide["high"]


def test_a_run_already_under_way(vidkin: Any, tmp_path: Path) -> None:
    t_s = np.arange(1.5, 4.51, 0.1)
    rows = [f"{t:.2f},{v:.3f}" for t, v in zip(t_s, _speed(t_s), strict=True)]
    path = tmp_path / "late.csv"
    path.write_text("t_s,v_mps\n" + "\n".join(rows) + "\n", encoding="utf-8")
    said = vidkin("fit", path)
    assert said.code == 0
    assert "the run begins already moving when first seen." in said.out
    assert "need the start in view" in " ".join(said.out.split())


def test_a_table_that_is_none(vidkin: Any, tmp_path: Path) -> None:
    said = vidkin("fit", tmp_path / "none.csv")
    assert (said.code, said.err) == (2, f"Error: {tmp_path / 'none.csv'}: there is no such table.\nCheck the name.\n")


def test_as_a_function(splits: Path) -> None:
    done = fit(splits)
    assert isinstance(done.fit, Fit)
    assert done.fit.quantities["v_max"].value == pytest.approx(V_MAX, rel=0.01)
    assert done.exit_code == 0
