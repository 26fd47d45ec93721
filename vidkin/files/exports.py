"""Exports a result folder for other programs: CSV with CSVW metadata, MAT, JSON, Parquet."""

from __future__ import annotations

import json
import re
import secrets
from collections.abc import Callable, Mapping
from importlib import import_module
from pathlib import Path
from typing import Any, Final, Literal, get_args

import numpy as np
import pandas as pd
from scipy.io import savemat

from vidkin.errors import ExportError
from vidkin.files.records import TABLES, plain
from vidkin.files.store import Result, cannot_write, read_result

Format = Literal["csv", "mat", "json", "parquet"]
_Write = Callable[[Path], object]

#: Columns of the quantities' table: (CSVW datatype, unit, meaning).
_QUANTITIES: Final = {
    "name": ("string", "", "name of the quantity"),
    "value": ("double", "", "its value, in `unit`"),
    "low": ("double", "", "lower end of its interval; empty where none can be given"),
    "high": ("double", "", "upper end of its interval; empty where none can be given"),
    "level": ("double", "1", "coverage of the interval"),
    "unit": ("string", "", "unit of value, low and high"),
    "method": ("string", "", "how value and interval were obtained"),
    "why_no_interval": ("string", "", "why there is no interval, where there is none"),
}
_SINGLE_FILE: Final = ("mat", "json")
_MAT_NAME_LENGTH: Final = 63  # longest variable or field name in a level 5 MAT file


def export(folder: Path, fmt: Format, out: Path | None) -> list[Path]:
    """Write a result in another format.

    Parameters
    ----------
    folder : Path
        A result folder.
    fmt : {"csv", "mat", "json", "parquet"}
        csv and parquet: one file for each table; mat and json: one file.
    out : Path or None
        A folder, or for mat and json a file of that ending; None: the folder `export` in the result folder.

    Returns
    -------
    list of Path
        The files written.

    Raises
    ------
    ExportError
        If the result cannot be read, the format's library is missing or `out` cannot be written.
    """
    if fmt not in get_args(Format):
        raise ExportError(f"There is no format '{fmt}'.", f"Formats: {', '.join(get_args(Format))}.")
    result = read_result(folder)
    place, name = _place(result, fmt, out)
    writers: dict[str, Callable[[Result, str], dict[str, _Write]]] = {
        "csv": _csv,
        "mat": _mat,
        "json": _json,
        "parquet": _parquet,
    }
    files = writers[fmt](result, name)
    try:
        place.mkdir(parents=True, exist_ok=True)
        for file, write in files.items():
            _write_whole(place / file, write)
    except OSError as error:
        raise cannot_write(place, error) from error
    return [place / file for file in files]


def _place(result: Result, fmt: str, out: Path | None) -> tuple[Path, str]:
    """Folder to write into, and the name of a single file."""
    if out is None:
        return result.folder / "export", f"result.{fmt}"
    out = Path(out)
    ending = out.suffix.lower().lstrip(".")
    if fmt in _SINGLE_FILE and ending == fmt and not out.is_dir():
        return out.parent, out.name
    if ending in get_args(Format):
        kind = (
            f"a file that ends in .{fmt}, or a folder" if fmt in _SINGLE_FILE else "a folder: it writes several files"
        )
        raise ExportError(f"{out} does not fit --format {fmt}.", f"Format {fmt} needs {kind}.")
    if out.exists() and not out.is_dir():
        raise ExportError(f"{out} is a file; {fmt} needs a folder.", "Name another folder with --out.")
    return out, f"result.{fmt}"


def _write_whole(path: Path, write: _Write) -> None:
    """Write beside the place and move in, so that a half file never stands there."""
    part = path.with_name(f".{secrets.token_hex(4)}{path.suffix}")
    try:
        write(part)
        part.replace(path)
    finally:
        part.unlink(missing_ok=True)


def _quantity_table(result: Result) -> pd.DataFrame:
    rows = [{"name": name, **quantity} for name, quantity in result.summary["quantities"].items()]
    table = pd.DataFrame(rows, columns=list(_QUANTITIES))
    numbers = {key: "float64" for key, (kind, _, _) in _QUANTITIES.items() if kind == "double"}
    texts = [key for key, (kind, _, _) in _QUANTITIES.items() if kind == "string"]
    table[texts] = table[texts].fillna("")
    return table.astype(numbers)


# --- CSV ------------------------------------------------------------------------------------------


def _csv(result: Result, _: str) -> dict[str, _Write]:
    tables = {"quantities": _quantity_table(result), **result.tables}
    files: dict[str, _Write] = {f"{name}.csv": _csv_writer(table) for name, table in tables.items()}
    metadata = json.dumps(_csvw(result, list(tables)), indent=1, ensure_ascii=False)
    return files | {"csv-metadata.json": lambda path: path.write_text(metadata + "\n", encoding="utf-8")}


def _csv_writer(table: pd.DataFrame) -> _Write:
    return lambda path: table.to_csv(path, index=False, float_format="%.10g", lineterminator="\r\n")


def _csvw(result: Result, names: list[str]) -> dict[str, Any]:
    """W3C CSVW metadata (Metadata Vocabulary for Tabular Data, 2015); units as schema.org unitText."""
    columns = {"quantities": _QUANTITIES} | {
        table: {key: ("double", unit, words) for key, (unit, words) in entries.items()}
        for table, entries in TABLES.items()
    }
    return {
        "@context": ["http://www.w3.org/ns/csvw", {"@language": "en"}],
        "dc:title": f"Sprint analysis {result.folder.name}",
        "dc:creator": "vidkin",
        "tables": [
            {
                "url": f"{name}.csv",
                "tableSchema": {"columns": [_csvw_column(key, *entry) for key, entry in columns[name].items()]},
            }
            for name in names
        ],
    }


def _csvw_column(key: str, datatype: str, unit: str, words: str) -> dict[str, Any]:
    column: dict[str, Any] = {"name": key, "titles": key, "datatype": datatype, "dc:description": words}
    return column | ({"schema:unitText": unit} if unit else {})


# --- MAT ------------------------------------------------------------------------------------------


def _mat(result: Result, name: str) -> dict[str, _Write]:
    content = {
        **{key: value for key, value in result.summary.items() if key != "splits"},
        **({"camera": result.camera} if result.camera is not None else {}),
        **{table: {key: frame[key].to_numpy() for key in frame} for table, frame in result.tables.items()},
    }
    made = {_mat_name(key): _mat_value(value) for key, value in content.items()}
    return {name: lambda path: savemat(path, made, oned_as="column", long_field_names=True)}


def _mat_name(key: str) -> str:
    """A name that MAT files allow: a letter, then letters, digits, underscores."""
    name = re.sub(r"[^0-9A-Za-z_]", "_", key)
    return (name if name[:1].isalpha() else f"x_{name}")[:_MAT_NAME_LENGTH]


def _mat_value(value: Any) -> Any:
    """Dicts as structs, lists of dicts as struct arrays, lists of numbers as arrays, other lists as cells."""
    if isinstance(value, Mapping):
        made: dict[str, Any] = {}
        for key, item in value.items():
            name = _mat_name(str(key))
            while name in made:
                name = name[: _MAT_NAME_LENGTH - 1] + "_"
            made[name] = _mat_value(item)
        return made
    if (
        isinstance(value, list)
        and value
        and all(isinstance(item, dict) and item.keys() == value[0].keys() for item in value)
    ):
        array = np.empty((len(value), 1), dtype=[(_mat_name(key), object) for key in value[0]])
        for i, item in enumerate(value):
            array[i, 0] = tuple(_mat_value(field) for field in item.values())
        return array
    if isinstance(value, list):
        try:
            return np.array(value, dtype=np.float64)
        except (TypeError, ValueError):
            cell = np.empty((len(value), 1), dtype=object)
            for i, item in enumerate(value):
                cell[i, 0] = _mat_value(item)
            return cell
    return np.zeros((0, 0)) if value is None else value


# --- JSON -----------------------------------------------------------------------------------------


def _json(result: Result, name: str) -> dict[str, _Write]:
    tables = {
        table: {
            "units": {key: unit for key, (unit, _) in TABLES[table].items()},
            "columns": {key: frame[key].tolist() for key in frame},
        }
        for table, frame in result.tables.items()
    }
    document = {"schema": "vidkin-export-1", "summary": result.summary, "camera": result.camera, "tables": tables}
    text = json.dumps(plain(document), indent=1, ensure_ascii=False, allow_nan=False) + "\n"
    return {name: lambda path: path.write_text(text, encoding="utf-8")}


# --- Parquet --------------------------------------------------------------------------------------


def _parquet(result: Result, _: str) -> dict[str, _Write]:
    try:
        arrow, parquet = import_module("pyarrow"), import_module("pyarrow.parquet")
    except ImportError as error:
        raise ExportError(
            "Parquet needs the package pyarrow, which is not installed.", 'Run: pip install "vidkin[parquet]"'
        ) from error
    files: dict[str, _Write] = {}
    for name, table in {"quantities": _quantity_table(result), **result.tables}.items():
        words = (
            {key: (unit, said) for key, (_, unit, said) in _QUANTITIES.items()}
            if name == "quantities"
            else TABLES[name]
        )
        made = arrow.Table.from_pandas(table, preserve_index=False)
        fields = [
            field.with_metadata({"unit": words[field.name][0], "description": words[field.name][1]})
            for field in made.schema
        ]
        kept = {**(made.schema.metadata or {}), b"vidkin-summary": json.dumps(dict(result.summary)).encode()}
        made = made.cast(arrow.schema(fields, metadata=kept))
        files[f"{name}.parquet"] = _parquet_writer(parquet, made)
    return files


def _parquet_writer(parquet: Any, table: Any) -> _Write:
    return lambda path: parquet.write_table(table, path)
