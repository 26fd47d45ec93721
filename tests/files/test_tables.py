# Tables for the fitting core: names, units, separators, decimal commas, gaps, and every mistake by its line.
from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from vidkin.errors import UsageError
from vidkin.files.tables import SpeedTable, read_table

# 2009 men's final, 1st, 10 m splits with reaction time (Graubner & Nixdorf, New Stud. Athl. 26:1/2 (2011) 19-53: READ)
SPLITS = [1.88, 2.88, 3.78, 4.64, 5.47, 6.29, 7.10, 7.92, 8.74, 9.58]


def read(tmp_path: Path, text: str | bytes, **options: dict[str, str]) -> SpeedTable:
    path = tmp_path / "table.csv"
    path.write_bytes(text if isinstance(text, bytes) else text.encode())
    return read_table(path, **options)


def test_a_split_table(tmp_path: Path) -> None:
    text = "distance_m,time_s\n" + "".join(f"{10 * (i + 1)},{t}\n" for i, t in enumerate(SPLITS))
    table = read(tmp_path, text)
    assert table.t_s.tolist() == SPLITS
    assert table.x_m is not None
    assert table.x_m.tolist() == list(range(10, 101, 10))
    assert table.v_mps is None
    assert (table.source_name, table.notes) == ("table.csv", ())


def test_our_own_files_are_read(tmp_path: Path) -> None:
    table = read(
        tmp_path,
        "t_s,x_m,x_sd_m,v_mps,v_low_mps,v_high_mps,a_mps2\n0,0,0.01,1,0,2,3\n1,2,0.01,3,2,4,1\n2,6,0,4,3,5,1\n",
    )
    assert table.x_m is not None
    assert table.v_mps is not None
    assert (table.x_m.tolist(), table.v_mps.tolist()) == ([0, 2, 6], [1, 3, 4])
    splits = read(tmp_path, "distance_m,time_s,low_s,high_s\n10,1.9,1.8,2\n20,3,2.9,3.1\n30,4,3.9,4.1\n")
    assert splits.t_s.tolist() == [1.9, 3, 4]


BODY = ["0{d}5", "1{d}0", "2{d}5"], ["3{d}6", "18{d}0", "36{d}0"]


HEADERS = [
    "t_s{s}v_kmh",
    "Time (s){s}Speed (km/h)",
    "time [s]{s}Velocity [km/h]",
    "TIME{s}speed km/h",
    "elapsed time (sec){s}vel_kph",
    '"Time (s)"{s}"speed_kmh"',
    "time / s{s}speed / km/h",
    "t, s{s}v, km/h",
]
MARKS = [(",", "."), (";", ","), (";", "."), ("\t", ","), ("\t", ".")]


@pytest.mark.parametrize(
    ("header", "separator", "mark"),
    [(h, s, m) for h in HEADERS for s, m in MARKS if not (s == "," and ", " in h)],
)
def test_headers_separators_and_decimal_marks(tmp_path: Path, header: str, separator: str, mark: str) -> None:
    rows = "".join(f"{a}{separator}{b}\r\n".replace("{d}", mark) for a, b in zip(*BODY, strict=True))
    table = read(tmp_path, header.replace("{s}", separator) + "\r\n" + rows)
    assert table.t_s.tolist() == [0.5, 1.0, 2.5]
    assert table.v_mps == pytest.approx(np.array([1.0, 5.0, 10.0]))
    assert table.x_m is None
    assert table.notes == (("column 'TIME' states no unit: taken as s",) if header.startswith("TIME") else ())


def test_quoted_decimal_commas(tmp_path: Path) -> None:
    assert read(tmp_path, 't_s,x_m\n"0,5","1,5"\n1,3\n"1,5",5\n').t_s.tolist() == [0.5, 1, 1.5]


@pytest.mark.parametrize(("unit", "scale"), [("cm", 0.01), ("yd", 0.9144), ("ft", 0.3048), ("km", 1000), ("mm", 0.001)])
def test_lengths(tmp_path: Path, unit: str, scale: float) -> None:
    # yard 0.9144 m, foot 0.3048 m: international yard and pound agreement, 1959 (MEM, value from memory)
    rows = "".join(f"{t},{5 * t / scale}\n" for t in (1, 2, 3))
    assert read(tmp_path, f"time_ms,distance_{unit}\n{rows}".replace("time_ms", "time_s")).x_m == pytest.approx(
        np.array([5, 10, 15])
    )


def test_times_and_miles(tmp_path: Path) -> None:
    table = read(tmp_path, "t_ms,v_mph\n1000,10\n2000,20\n3000,22.5\n")
    assert table.t_s.tolist() == [1, 2, 3]
    assert table.v_mps == pytest.approx(np.array([4.4704, 8.9408, 10.0584]))  # 1 mile/h = 0.44704 m/s exactly


def test_units_may_be_stated(tmp_path: Path) -> None:
    text = "time,speed\n1,18\n2,36\n3,36\n"
    table = read(tmp_path, text, units={"v": "km/h", "time": "s"})
    assert table.v_mps == pytest.approx(np.array([5, 10, 10]))
    assert table.notes == ()
    assert read(tmp_path, text.replace("18", "5").replace("36", "9")).notes == (
        "column 'time' states no unit: taken as s",
        "column 'speed' states no unit: taken as m/s",
    )
    for units, words in (
        ({"w": "m"}, "Units are stated for 'w', which is no column"),
        ({"v": "knots"}, "'knots' is no unit for v"),
    ):
        with pytest.raises(UsageError, match=words) as caught:
            read(tmp_path, text, units=units)
        assert caught.value.hint
    with pytest.raises(UsageError, match=r"column 'v_kmh' has the unit 'kmh', but another one is stated for it"):
        read(tmp_path, "t_s,v_kmh\n1,18\n2,36\n3,36\n", units={"v": "m/s"})


@pytest.mark.parametrize("encoding", ["utf-8", "utf-8-sig", "utf-16", "cp1252"])
def test_encodings(tmp_path: Path, encoding: str) -> None:
    text = "# läufer\ntime (s);größe;x (m)\n1;7;2\n2;7;6\n3;7;11\n"
    table = read(tmp_path, text.encode(encoding))
    assert table.x_m is not None
    assert table.x_m.tolist() == [2, 6, 11]


def test_gaps_repeats_and_comments_are_left_out_by_line(tmp_path: Path) -> None:
    table = read(
        tmp_path, "# from the timing gates\nt_s,x_m\n0,0\n1,\n\n2,8\n2,8\n3,NaN\n# pause\n4,20\n5\n6,-\n7,50\n"
    )
    assert table.t_s.tolist() == [0, 2, 4, 7]
    assert table.notes == ("left out for a gap: lines 4, 8, 11, 12", "left out as repeated: line 7")
    many = "t_s,x_m\n" + "".join(f"{i},{5 * i}\n{i}.5,\n" for i in range(12))
    assert read(tmp_path, many).notes == ("left out for a gap: lines 3, 5, 7, 9, 11, 13, 15, 17, 19, 21 and 2 more",)


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("", "is empty"),
        ("\n;;\n# only a remark\n", "is empty"),
        ("time\n1\n2\n3\n", "the header 'time' has only one column"),
        ("1,2\n2,4\n3,6\n", "the first line holds numbers, so the columns have no names"),
        ("1,5;2\n2;4\n3;6\n", "the first line holds numbers"),
        ("a,b\n1,2\n", "no column for time among 'a, b'"),
        ("t_s,heart rate\n1,2\n", "no column for distance or speed among 't_s, heart rate'"),
        ("x_m,v_mps\n1,2\n", "no column for time"),
        ("t_s,x_m,distance\n1,2,3\n", ""),
        ("time (s),speed (m/s),v_kmh\n1,2,3\n", r"columns 'speed \(m/s\)' and 'v_kmh' both say speed"),
        ("t_s,x (furlong)\n1,2\n", r"column 'x \(furlong\)' has the unit 'furlong', which is none of distance"),
        ("t_s,x_m\n1,2\n2,four\n3,6\n", "line 3, column 'x_m': 'four' is no number"),
        ("t_s,x_m\n1,2\n2,inf\n3,6\n", "line 3, column 'x_m': 'inf' is no number"),
        ("t_s,x_m\n1,2\n2,1_0\n3,6\n", "line 3, column 'x_m': '1_0' is no number"),
        ("t_s,x_m\n1,2\n2,4,5\n3,6\n", "line 3 has 3 fields, the header has 2: '2,4,5'"),
        ("t_s,x_m\n1,2\n\n3,6\n2,9\n", "line 5: time 2 s does not come after 3 s"),
        ("t_s,x_m\n1,2\n1,3\n3,6\n", "line 3: time 1 s does not come after 1 s"),
        ("t_s,x_m\n1,2\n2,\n3,6\n", "2 usable rows, at least 3 are needed"),
        ("t_s,v_mps\n1,18\n2,36\n3,36\n", "speeds up to 36 m/s: nobody runs so fast"),
        ("t_s,x_m\n1880,10\n2880,20\n3780,30\n", r"mean speed is 0\.01053 m/s, which is no run"),
        ("t_s,x_m\n1,1000\n2,2000\n3,3000\n", "mean speed is 1000 m/s, which is no run"),
    ],
)
def test_a_mistake_is_named(tmp_path: Path, text: str, words: str) -> None:
    if not words:  # the exact name wins over a likeness
        x_m = read(tmp_path, text + "2,4,9\n3,6,9\n").x_m
        assert x_m is not None
        assert x_m.tolist() == [2, 4, 6]
        return
    with pytest.raises(UsageError, match=words) as caught:
        read(tmp_path, text)
    assert caught.value.hint
    assert "table.csv" in caught.value.message


def test_what_is_no_table(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    with pytest.raises(UsageError, match="there is no such table"):
        read_table(tmp_path / "none.csv")
    with pytest.raises(UsageError, match="is a folder, not a table"):
        read_table(tmp_path)
    for data in (b"PK\x03\x04rest", b"t_s,x_m\n\x00\x01"):
        with pytest.raises(UsageError, match="is no text file") as caught:
            read(tmp_path, data)
        assert caught.value.hint == "Save the table as CSV first."
    path = tmp_path / "a.csv"
    path.touch()

    def deny(_: Path) -> bytes:
        raise PermissionError(13, "Permission denied")

    monkeypatch.setattr(Path, "read_bytes", deny)
    with pytest.raises(UsageError, match="cannot be read: Permission denied"):
        read_table(path)
