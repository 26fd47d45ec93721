# Exports read back by the libraries that people use: pandas, scipy, json, pyarrow; CSVW metadata as its standard says.
from __future__ import annotations

import json
import re
import sys
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from scipy.io import loadmat, whosmat

from vidkin.errors import ExportError
from vidkin.files.exports import export
from vidkin.files.records import TABLES
from vidkin.files.store import write_analysis
from vidkin.notices import Failure
from vidkin.stages import Analysis


@pytest.fixture
def folder(tmp_path: Path, analysis: Analysis) -> Path:
    result = tmp_path / "rep 3"
    result.mkdir()
    write_analysis(analysis, result)
    return result


def test_csv_by_pandas(folder: Path, analysis: Analysis) -> None:
    files = export(folder, "csv", None)
    assert [f.name for f in files] == ["quantities.csv", "motion.csv", "splits.csv", "steps.csv", "csv-metadata.json"]
    assert {f.parent for f in files} == {folder / "export"}
    motion = pd.read_csv(files[1])
    assert list(motion) == list(TABLES["motion"])
    assert motion["x_m"].to_numpy() == pytest.approx(analysis.motion.x_m, rel=1e-9)
    quantities = pd.read_csv(files[0], index_col="name")
    assert quantities.loc["top_speed", ["value", "low", "high", "level"]].tolist() == [9.12, 9.05, 9.19, 0.95]
    assert quantities.loc["top_speed", "unit"] == "m/s"
    assert np.isnan(quantities.loc["k_drag", "low"])
    assert quantities.loc["k_drag", "why_no_interval"] == "not fitted"
    assert b"\r\n" in files[1].read_bytes()  # RFC 4180


def test_csvw_metadata_describe_the_files(folder: Path) -> None:
    # W3C "Metadata Vocabulary for Tabular Data" (2015): 5.3 table groups, 5.6 columns; "Model for Tabular Data and
    # Metadata on the Web" 5.3: csv-metadata.json beside the tables is found without a link. (MEM, from memory)
    files = export(folder, "csv", None)
    metadata = json.loads(files[-1].read_text(encoding="utf-8"))
    assert metadata["@context"][0] == "http://www.w3.org/ns/csvw"
    assert [t["url"] for t in metadata["tables"]] == [f.name for f in files[:-1]]
    for table in metadata["tables"]:
        frame = pd.read_csv(folder / "export" / table["url"])
        columns = table["tableSchema"]["columns"]
        assert [c["titles"] for c in columns] == list(frame)
        for column in columns:
            assert re.fullmatch(r"[A-Za-z0-9][\w.]*", column["name"])
            assert column["dc:description"]
            numeric = pd.api.types.is_numeric_dtype(frame[column["titles"]])
            assert column["datatype"] == ("double" if numeric else "string")
    units = {c["name"]: c.get("schema:unitText") for c in metadata["tables"][1]["tableSchema"]["columns"]}
    assert units == {
        "t_s": "s",
        "x_m": "m",
        "x_sd_m": "m",
        "v_mps": "m/s",
        "v_low_mps": "m/s",
        "v_high_mps": "m/s",
        "a_mps2": "m/s^2",
    }


def test_mat_by_scipy(folder: Path, analysis: Analysis) -> None:
    files = export(folder, "mat", None)
    assert files == [folder / "export" / "result.mat"]
    names = [name for name, _, _ in whosmat(files[0])]
    assert all(re.fullmatch(r"[A-Za-z]\w{0,62}", name) for name in names)
    data = loadmat(files[0], simplify_cells=True)
    assert data["motion"]["t_s"] == pytest.approx(analysis.motion.t_s, rel=1e-9)
    assert data["quantities"]["top_speed"]["value"] == 9.12
    assert data["quantities"]["k_drag"]["why_no_interval"] == "not fitted"
    assert data["splits"]["time_s"].tolist() == [1.4, 2.1]
    assert data["camera"]["cov"].shape == (9, 9)
    assert data["camera"]["parameters"]["f_px"] == 1
    assert data["camera"]["marks"][1]["label"] == "mark 1"
    assert data["laws"]["mono"]["parameters"]["v_max"] == 9.5
    assert data["notices"]["text"] == "Said 3."
    assert data["failures"]["code"] == "no_drag"
    assert data["provenance"]["inputs"]["a_mp4"] == "00ff"
    assert data["provenance"]["python_version"] == "3.11"
    assert data["provenance"]["nothing"].size == 0
    assert data["schema"] == "vidkin-summary-1"
    columns = loadmat(files[0])["motion"]["t_s"][0, 0]
    assert columns.shape == (7, 1)  # column vectors


def test_mat_names_that_would_clash_stay_apart(folder: Path) -> None:
    path = folder / "summary.json"
    summary = json.loads(path.read_text())
    long = "q" * 80
    summary["provenance"] = {
        "a.b": 1,
        "a-b": 2,
        "1st": 3,
        "": 4,
        "_x": 5,
        long + "1": 6,
        long + "2": 7,
        "mixed": [1, "b"],
    }
    path.write_text(json.dumps(summary))
    got = loadmat(export(folder, "mat", None)[0], simplify_cells=True)["provenance"]
    assert (got["a_b"], got["a_b_"], got["x_1st"], got["x_"], got["x__x"]) == (1, 2, 3, 4, 5)
    assert [v for k, v in got.items() if k.startswith("qqq")] == [6, 7]
    assert list(got["mixed"]) == [1, "b"]


def test_json_is_one_document(folder: Path, analysis: Analysis) -> None:
    files = export(folder, "json", None)
    document = json.loads(files[0].read_text(encoding="utf-8"), parse_constant=pytest.fail)
    assert document["schema"] == "vidkin-export-1"
    assert document["summary"] == json.loads((folder / "summary.json").read_text(encoding="utf-8"))
    assert document["camera"] == json.loads((folder / "camera.json").read_text(encoding="utf-8"))
    motion = document["tables"]["motion"]
    assert motion["columns"]["v_mps"] == pytest.approx(analysis.motion.v_mps, rel=1e-9)
    assert motion["units"]["a_mps2"] == "m/s^2"


def test_parquet_by_pyarrow_and_pandas(folder: Path, analysis: Analysis) -> None:
    pytest.importorskip("pyarrow", reason="the extra vidkin[parquet] is not installed")
    from pyarrow import parquet

    files = export(folder, "parquet", None)
    assert [f.name for f in files] == ["quantities.parquet", "motion.parquet", "splits.parquet", "steps.parquet"]
    table = parquet.read_table(files[1])
    assert table.column_names == list(TABLES["motion"])
    assert table["x_m"].to_numpy() == pytest.approx(analysis.motion.x_m, rel=1e-9)
    assert table.schema.field("a_mps2").metadata[b"unit"] == b"m/s^2"
    assert table.schema.field("x_sd_m").metadata[b"description"].startswith(b"standard deviation")
    assert json.loads(table.schema.metadata[b"vidkin-summary"])["law"] == "mono"
    quantities = pd.read_parquet(files[0]).set_index("name")
    assert quantities.loc["top_speed", "value"] == 9.12
    assert quantities.loc["k_drag", "unit"] == "1/m"


def test_parquet_without_its_library(folder: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setitem(sys.modules, "pyarrow", None)
    with pytest.raises(ExportError, match="needs the package pyarrow, which is not installed") as caught:
        export(folder, "parquet", None)
    assert caught.value.hint == 'Run: pip install "vidkin[parquet]"'
    assert not (folder / "export").exists()


def test_a_short_result_exports_what_it_has(tmp_path: Path, analysis: Analysis) -> None:
    import dataclasses

    failed = Failure(stage="camera", code="few", reason="2 marks", hint="add some")
    write_analysis(dataclasses.replace(analysis, camera=failed, steps=None, motion=None, fit=None), tmp_path)
    assert [f.name for f in export(tmp_path, "csv", tmp_path / "c")] == ["quantities.csv", "csv-metadata.json"]
    assert pd.read_csv(tmp_path / "c" / "quantities.csv").empty
    data = loadmat(export(tmp_path, "mat", None)[0], simplify_cells=True)
    assert data["failures"]["code"] == "few"
    assert json.loads(export(tmp_path, "json", None)[0].read_text())["camera"] is None


def test_where_it_is_written(folder: Path, tmp_path: Path) -> None:
    assert export(folder, "mat", tmp_path / "x" / "mine.mat") == [tmp_path / "x" / "mine.mat"]
    assert export(folder, "json", tmp_path / "x") == [tmp_path / "x" / "result.json"]
    assert export(folder, "csv", tmp_path / "y")[0] == tmp_path / "y" / "quantities.csv"
    assert sorted(p.name for p in (tmp_path / "x").iterdir()) == ["mine.mat", "result.json"]
    before = (tmp_path / "x" / "mine.mat").stat().st_mtime_ns
    export(folder, "mat", tmp_path / "x" / "mine.mat")  # again: replaced
    assert (tmp_path / "x" / "mine.mat").stat().st_mtime_ns >= before


def test_what_cannot_be_exported(folder: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    with pytest.raises(ExportError, match="no format 'xlsx'") as caught:
        export(folder, "xlsx", None)  # type: ignore[arg-type]
    assert caught.value.hint == "Formats: csv, mat, json, parquet."
    with pytest.raises(ExportError, match=r"x\.csv does not fit --format csv") as caught:
        export(folder, "csv", tmp_path / "x.csv")
    assert caught.value.hint == "Format csv needs a folder: it writes several files."
    with pytest.raises(ExportError, match=r"x\.json does not fit --format mat") as caught:
        export(folder, "mat", tmp_path / "x.json")
    assert caught.value.hint == "Format mat needs a file that ends in .mat, or a folder."
    (tmp_path / "file").touch()
    with pytest.raises(ExportError, match="file is a file; csv needs a folder"):
        export(folder, "csv", tmp_path / "file")
    with pytest.raises(ExportError, match="is not there; a result folder is needed"):
        export(tmp_path / "none", "csv", None)
    with pytest.raises(ExportError, match="cannot be written: "):
        export(folder, "csv", tmp_path / "file" / "below")

    def full(self: Path, *_: object, **__: object) -> None:
        self.touch()
        raise OSError(28, "No space left on device", str(self))

    monkeypatch.setattr(Path, "write_text", full)
    with pytest.raises(ExportError, match="No space left on device"):
        export(folder, "json", tmp_path / "z")
    assert list((tmp_path / "z").iterdir()) == []
