# The sheet: the design's example is read as it stands; every mistake is answered with key, value and what is allowed.
from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from vidkin.errors import UsageError
from vidkin.files.sheets import read_sheet

EXAMPLE = """
clip = "rep3.mp4"
capture_fps = 240
splits_m = [5, 10, 20]
[athlete]
label = "A"
mass_kg = 71.0
stature_m = 1.74
[air]
temperature_c = 18
pressure_hpa = 1012
humidity_pct = 55
wind_mps = 0.3
[lane]
start_x_m = 0.0
centre_y_m = 0.61
width_m = 1.22
[camera]
hfov_deg = 70.0
height_m = 1.6
distance_m = 14.0
[[mark]]
label = "10 m, near line"
x_m = 10.0
y_m = 0.0
z_m = 0.0
u_px = 812.4
v_px = 640.9
[[mark]]
label = "15 m, near line"
x_m = 15
y_m = 0
z_m = 0
u_px = 1003.0
v_px = 641.5
sd_px = 0.7
sd_m = 0.02
"""


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    (tmp_path / "rep3.mp4").touch()
    return tmp_path


def write(folder: Path, text: str) -> Path:
    path = folder / "rep3.toml"
    path.write_text(text, encoding="utf-8")
    return path


def test_the_example_is_read(folder: Path) -> None:
    sheet = read_sheet(write(folder, EXAMPLE))
    rep = sheet.rep
    assert (sheet.path, sheet.clip_path) == (folder / "rep3.toml", folder / "rep3.mp4")
    assert (rep.clip, rep.capture_fps, rep.splits_m) == ("rep3.mp4", 240, (5, 10, 20))
    assert (rep.athlete.label, rep.athlete.mass_kg, rep.athlete.stature_m) == ("A", 71.0, 1.74)
    assert (rep.air.temperature_c, rep.air.pressure_hpa, rep.air.altitude_m) == (18, 1012, None)
    assert (rep.air.humidity_pct, rep.air.wind_mps) == (55, 0.3)
    assert (rep.lane.start_x_m, rep.lane.centre_y_m, rep.lane.width_m) == (0, 0.61, 1.22)
    assert (rep.camera.hfov_deg, rep.camera.height_m, rep.camera.distance_m) == (70, 1.6, 14)
    first, second = rep.marks
    assert first.label == "10 m, near line"
    assert np.array_equal(first.xyz_m, [10, 0, 0])
    assert np.array_equal(first.uv_px, [812.4, 640.9])
    assert (first.sd_px, first.sd_m) == (1.0, 0.01)
    assert (second.sd_px, second.sd_m) == (0.7, 0.02)


def test_only_the_clip_must_be_stated(folder: Path) -> None:
    rep = read_sheet(write(folder, 'clip = "rep3.mp4"')).rep
    assert (rep.athlete.mass_kg, rep.air.temperature_c, rep.camera.hfov_deg, rep.marks) == (None, None, None, ())


def test_a_byte_order_mark_and_windows_lines_do_not_matter(folder: Path) -> None:
    path = folder / "rep3.toml"
    path.write_bytes(b"\xef\xbb\xbf" + EXAMPLE.replace("\n", "\r\n").encode())
    assert len(read_sheet(path).rep.marks) == 2


def test_the_clip_is_relative_to_the_sheet(folder: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir("/")
    (folder / "sub").mkdir()
    path = folder / "sub" / "a.toml"
    path.write_text('clip = "../rep3.mp4"')
    assert read_sheet(path).clip_path.samefile(folder / "rep3.mp4")
    path.write_text(f'clip = "{folder / "rep3.mp4"}"')
    assert read_sheet(path).clip_path == folder / "rep3.mp4"


def refused(folder: Path, text: str) -> UsageError:
    with pytest.raises(UsageError) as caught:
        read_sheet(write(folder, text))
    assert str(folder / "rep3.toml") in caught.value.message
    assert caught.value.hint
    return caught.value


@pytest.mark.parametrize(
    ("old", "new", "words"),
    [
        # unknown keys
        ("mass_kg = 71.0", "mass_g = 71000", "unknown key athlete.mass_g = 71000. Did you mean mass_kg?"),
        (
            "mass_kg = 71.0",
            "weight = 71",
            "unknown key athlete.weight = 71. Known keys here: label, mass_kg, stature_m.",
        ),
        ("wind_mps = 0.3", "wind = 0.3", "unknown key air.wind = 0.3. Did you mean wind_mps?"),
        ("wind_mps = 0.3", "wind_kmh = 1", "unknown key air.wind_kmh = 1. Did you mean wind_mps?"),
        ("[camera]", "[camara]", "unknown key camara = {"),
        ("[camera]", "[camara]", "Did you mean camera?"),
        ('[athlete]\nlabel = "A"', "mass_kg = 3\n[athlete]", "unknown key mass_kg = 3. It belongs in [athlete]."),
        (
            "wind_mps = 0.3",
            "capture_fps = 240",
            "air.capture_fps = 240. It belongs at the top of the sheet, before any",
        ),
        (
            "hfov_deg = 70.0",
            'reuse = "rep1/camera.json"',
            "unknown key camera.reuse = 'rep1/camera.json'. Known keys here",
        ),
        (
            "z_m = 0.0\nu_px = 812.4",
            "z_m = 0.0\nu_pix = 812.4",
            "mark 1 ('10 m, near line'): u_pix = 812.4. Did you mean u_px?",
        ),
        ("u_px = 812.4", "u = 812.4", "mark 1 ('10 m, near line'): u = 812.4. Did you mean u_px?"),
        # types
        (
            "mass_kg = 71.0",
            'mass_kg = "71"',
            "athlete.mass_kg = '71' must be a number without quotes, with a decimal point.",
        ),
        ("mass_kg = 71.0", "mass_kg = true", "athlete.mass_kg = true must be a number"),
        ("mass_kg = 71.0", "mass_kg = nan", "athlete.mass_kg = nan must be a finite number"),
        ("mass_kg = 71.0", "mass_kg = inf", "athlete.mass_kg = inf must be a finite number"),
        ('label = "A"', "label = 7", 'athlete.label = 7 must be a text in "quotes".'),
        ('label = "A"', 'label = " "', "athlete.label is empty."),
        ("splits_m = [5, 10, 20]", "splits_m = 10", "splits_m = 10 must be a list."),
        ("splits_m = [5, 10, 20]", 'splits_m = [5, "10"]', "splits_m[2] = '10' must be a number"),
        ("u_px = 812.4", 'u_px = "812,4"', "mark 1 ('10 m, near line'): u_px = '812,4' must be a number"),
        # missing
        ('clip = "rep3.mp4"', "", "clip is missing."),
        ("u_px = 812.4", "", "mark 1 ('10 m, near line'): u_px is missing."),
        ("x_m = 10.0\ny_m = 0.0", "", "mark 1 ('10 m, near line'): x_m and y_m missing."),
        ('label = "10 m, near line"', "", "mark 1: label missing."),
        # other units
        (
            "mass_kg = 71.0",
            "mass_kg = 71000",
            "athlete.mass_kg = 71000: allowed are 20 to 200 kg. If that is in grams, write 71.",
        ),
        ("mass_kg = 71.0", "mass_kg = 265", "If that is in pounds, write 120.2."),
        ("mass_kg = 71.0", "mass_kg = 0", "athlete.mass_kg = 0: allowed are 20 to 200 kg."),
        ("mass_kg = 71.0", "mass_kg = -71", "athlete.mass_kg = -71: allowed are"),
        (
            "stature_m = 1.74",
            "stature_m = 174",
            "stature_m = 174: allowed are 1 to 2.5 m. If that is in centimetres, write 1.74.",
        ),
        ("stature_m = 1.74", "stature_m = 1740", "If that is in millimetres, write 1.74."),
        ("stature_m = 1.74", "stature_m = 5.71", "If that is in feet, write 1.74."),
        ("stature_m = 1.74", "stature_m = 68.5", "If that is in inches, write 1.74."),
        (
            "temperature_c = 18",
            "temperature_c = 291.15",
            "allowed are -30 to 55 degrees Celsius. If that is in kelvins, write 18.",
        ),
        ("temperature_c = 18", "temperature_c = 64.4", "If that is in degrees Fahrenheit, write 18."),
        (
            "pressure_hpa = 1012",
            "pressure_hpa = 101200",
            "allowed are 500 to 1100 hPa. If that is in pascals, write 1012.",
        ),
        ("pressure_hpa = 1012", "pressure_hpa = 101.2", "If that is in kilopascals, write 1012."),
        ("pressure_hpa = 1012", "pressure_hpa = 29.88", "If that is in inches of mercury, write 1012."),
        ("pressure_hpa = 1012", "pressure_hpa = 1.012", "If that is in bars, write 1012."),
        (
            "pressure_hpa = 1012",
            "pressure_hpa = 760",
            "pressure at about 2361 m: state altitude_m too, to confirm it. If the value is in mmHg, write 1013.",
        ),
        (
            "pressure_hpa = 1012",
            "pressure_hpa = 1012\naltitude_m = 2300",
            "does not go with altitude_m = 2300, where about 766 hPa are usual",
        ),
        (
            "humidity_pct = 55",
            "humidity_pct = 0.55",
            "air.humidity_pct = 0.55 looks like a fraction; write per cent: 55.",
        ),
        ("humidity_pct = 55", "humidity_pct = 155", "allowed are 0 to 100 %."),
        ("wind_mps = 0.3", "wind_mps = 40", "allowed are -15 to 15 m/s."),
        ("hfov_deg = 70.0", "hfov_deg = 1.22", "allowed are 5 to 150 degrees. If that is in radians, write 69.9."),
        ("height_m = 1.6", "height_m = 160", "If that is in centimetres, write 1.6."),
        ("width_m = 1.22", "width_m = 122", "If that is in centimetres, write 1.22."),
        ("capture_fps = 240", "capture_fps = 0", "capture_fps = 0: allowed are 1 to 100000 pictures per second."),
        ("splits_m = [5, 10, 20]", "splits_m = [0, 10]", "splits_m[1] = 0: allowed are 0.1 to 1000 m."),
        ("splits_m = [5, 10, 20]", "splits_m = [10, 5]", "splits_m = [10.0, 5.0] must rise, each distance once."),
        ("sd_px = 0.7", "sd_px = 0", "mark 2 ('15 m, near line'): sd_px = 0: allowed are 0.01 to 100 px."),
        ("x_m = 15", "x_m = 1500", "mark 2 ('15 m, near line'): x_m = 1500: allowed are -500 to 500 m."),
        # twins
        (
            '"15 m, near line"',
            '"10 m, near line"',
            "2 marks are labelled '10 m, near line'; each label may stand once.",
        ),
        ("x_m = 15", "x_m = 10", "marks '10 m, near line' and '15 m, near line' have the same place (10, 0, 0) m."),
        ("u_px = 1003.0\nv_px = 641.5", "u_px = 812.4\nv_px = 640.9", "are seen at the same pixel (812.4, 640.9)."),
        # layouts
        (
            "x_m = 15\ny_m = 0\nz_m = 0",
            'point = "hurdle 1 left"',
            "mark 2 ('15 m, near line'): point = 'hurdle 1 left' needs a layout",
        ),
        (
            "x_m = 15",
            'point = "hurdle 1 left"\nx_m = 15',
            "give either point = 'hurdle 1 left' or x_m, y_m and z_m, not both.",
        ),
        (
            "[camera]",
            '[calibration]\nlayout = "hurdles-100"\n[camera]',
            "no layout 'hurdles-100'. Did you mean 'hurdles-100m'?",
        ),
        # clip
        ('clip = "rep3.mp4"', 'clip = "rep4.mp4"', "clip = 'rep4.mp4' is not there ("),
        ('clip = "rep3.mp4"', 'clip = "."', "clip = '.' is a folder ("),
        ('clip = "rep3.mp4"', 'clip = ""', "clip is empty."),
        # TOML
        ("mass_kg = 71.0", "mass_kg = 71,0", "is no TOML: Expected newline"),
        ("mass_kg = 71.0", "mass_kg = ", "is no TOML: Invalid value"),
        ("mass_kg = 71.0", "mass_kg = 71.0\nmass_kg = 72", "is no TOML: Cannot overwrite a value"),
    ],
)
def test_a_mistake_is_named(folder: Path, old: str, new: str, words: str) -> None:
    assert old in EXAMPLE
    assert words in refused(folder, EXAMPLE.replace(old, new)).message


def test_one_mark_in_single_brackets(folder: Path) -> None:
    text = EXAMPLE[: EXAMPLE.index("[[mark]]")] + '[mark]\nlabel = "a"\n'
    assert "start each mark with [[mark]], in double brackets." in refused(folder, text).message


def test_low_pressure_is_believed_with_its_altitude(folder: Path) -> None:
    sheet = read_sheet(write(folder, EXAMPLE.replace("pressure_hpa = 1012", "pressure_hpa = 760\naltitude_m = 2300")))
    assert (sheet.rep.air.pressure_hpa, sheet.rep.air.altitude_m) == (760, 2300)


@pytest.mark.parametrize(("altitude", "pressure"), [(0, 1013.25), (1000, 898.75), (2000, 794.95), (3000, 701.09)])
def test_the_standard_atmosphere_agrees(folder: Path, altitude: int, pressure: float) -> None:
    # ISO 2533 / US Standard Atmosphere 1976 pressures (MEM, values from memory)
    read_sheet(
        write(folder, EXAMPLE.replace("pressure_hpa = 1012", f"pressure_hpa = {pressure}\naltitude_m = {altitude}"))
    )
    off = f"pressure_hpa = {pressure * 1.08}\naltitude_m = {altitude}"
    assert (
        f"where about {pressure:.0f} hPa are usual"
        in refused(folder, EXAMPLE.replace("pressure_hpa = 1012", off)).message
    )


def test_several_mistakes_are_listed(folder: Path) -> None:
    text = EXAMPLE.replace("mass_kg = 71.0", "mass_kg = 7100").replace("wind_mps", "wind")
    message = refused(folder, text).message
    assert "2 things to mend:\n- athlete.mass_kg" in message
    assert "\n- unknown key air.wind" in message
    many = 'clip = "rep3.mp4"\n' + "".join(f"q{i} = {i}\n" for i in range(12))
    assert refused(folder, many).message.count("\n- ") == 9
    assert refused(folder, many).message.endswith("\n- ...")


def test_marks_may_name_points_of_a_layout(folder: Path) -> None:
    text = 'clip = "rep3.mp4"\n[calibration]\nlayout = "hurdles-110m"\n' + "".join(
        f'[[mark]]\npoint = "hurdle {k} left"\nu_px = {100 * k}\nv_px = 5\n' + ("sd_m = 0.05\n" if k == 2 else "")
        for k in (1, 2)
    )
    first, second = read_sheet(write(folder, text)).rep.marks
    assert np.array_equal(first.xyz_m, [13.72, 1.22, 0])
    assert (first.label, first.sd_m, second.sd_m) == ("hurdle 1 left", 0.01, 0.05)
    assert (
        "has no point 'hurdle 77 left'. Near: hurdle 7 left"
        in refused(folder, text.replace("hurdle 1", "hurdle 77")).message
    )


def test_what_is_no_sheet(folder: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def says(path: Path, words: str) -> None:
        with pytest.raises(UsageError, match=words) as caught:
            read_sheet(path)
        assert caught.value.hint

    says(folder / "none.toml", "there is no such sheet")
    says(folder, "is a folder, not a sheet")
    clip = folder / "a.mp4"
    clip.write_bytes(b"\x00\x00\x00\x18ftyp\xff\xfe")
    says(clip, r"is no UTF-8 text \(byte 8: 0xff\)")

    def deny(_: Path) -> bytes:
        raise PermissionError(13, "Permission denied")

    path = write(folder, EXAMPLE)
    monkeypatch.setattr(Path, "read_bytes", deny)
    says(path, "cannot be read: Permission denied")
