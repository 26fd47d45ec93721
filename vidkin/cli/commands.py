"""The commands and their options. Heavy modules load inside a command, so that --help is quick."""

from __future__ import annotations

import os
import signal
import sys
from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, NoReturn, cast

import typer
from typer.exceptions import TyperException

import vidkin
from vidkin.cli.session import Session, complain, session
from vidkin.errors import EXIT_USAGE, UsageError

if TYPE_CHECKING:
    from vidkin.files.exports import Format

app = typer.Typer(
    name="vidkin",
    add_completion=False,
    no_args_is_help=True,
    rich_markup_mode=None,
    pretty_exceptions_enable=False,
    context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100},
)


# --- options --------------------------------------------------------------------------------------


def _number(low: float, high: float) -> Callable[[str], float]:
    """A parser of a number in a closed range that names the value seen and what is allowed."""

    def parse(text: str) -> float:
        try:
            value = float(text)
        except ValueError:
            value = float("nan")
        if not low <= value <= high:
            raise typer.BadParameter(f"'{text}' is no number from {low:g} to {high:g}.")
        return value

    return parse


def _whole(low: int, high: int) -> Callable[[str], int]:
    def parse(text: str) -> int:
        try:
            value = int(text)
        except ValueError:
            value = low - 1
        if not low <= value <= high:
            raise typer.BadParameter(f"'{text}' is no whole number from {low} to {high}.")
        return value

    return parse


_FORMATS = ("csv", "mat", "json", "parquet")


def _format(text: str) -> str:
    if text.lower() not in _FORMATS:
        raise typer.BadParameter(f"'{text}' is none of {', '.join(_FORMATS)}.")
    return text.lower()


AsJson = Annotated[bool, typer.Option("--json", help="Print one JSON object on standard output, no tables.")]
Debug = Annotated[bool, typer.Option("--debug", help="On an error, print the traceback too.")]
SheetPath = Annotated[Path, typer.Argument(metavar="SHEET", hidden=True)]
SheetPaths = Annotated[list[Path], typer.Argument(metavar="SHEET", hidden=True)]
TablePath = Annotated[Path, typer.Argument(metavar="TABLE", hidden=True)]
ResultPath = Annotated[Path, typer.Argument(metavar="DIR", hidden=True)]
Level = Annotated[
    float, typer.Option(metavar="P", parser=_number(0.5, 0.999), help="Coverage of every interval, 0.5 to 0.999.")
]
SplitsAt = Annotated[
    list[float] | None,
    typer.Option("--split", metavar="M", parser=_number(0.1, 1000), help="Distance of a split [m]; may be repeated."),
]


def _show_version(wanted: bool) -> None:
    if wanted:
        typer.echo(f"vidkin {vidkin.__version__}")
        raise typer.Exit


@app.callback()
def _root(
    ctx: typer.Context,
    as_json: AsJson = False,
    debug: Debug = False,
    _version: Annotated[
        bool, typer.Option("--version", callback=_show_version, is_eager=True, help="Print the version and stop.")
    ] = False,
) -> None:
    """A filmed sprint rep in; speed, power, force and air drag out, each with its interval.

    Exit codes: 0 ok, 1 internal error, 2 usage, 3 footage, 4 calibration, 5 export, 6 finished, but a stage could
    not answer. With several sheets: 0 if all are 0, else the smallest of the others.
    """
    ctx.obj = {"as_json": as_json, "debug": debug}


# --- commands -------------------------------------------------------------------------------------


@app.command(short_help="The whole job on the bundled clip, truth beside it.")
def demo(
    ctx: typer.Context,
    out: Annotated[Path | None, typer.Option(metavar="DIR", help="The result folder.  [default: out/demo]")] = None,
    as_json: AsJson = False,
    debug: Debug = False,
) -> None:
    """Do the whole job on the bundled clip and print the known truth beside each result."""
    with session("demo", ctx, as_json=as_json, debug=debug) as s:
        from vidkin import app as actions
        from vidkin.cli import show

        with s.progress() as tell:
            done = actions.demo(out, progress=tell)
        show.demo(s, done)


@app.command(short_help="Camera, marker overlay and error table.")
def calibrate(
    ctx: typer.Context,
    sheet: SheetPath,
    out: Annotated[
        Path | None, typer.Option(metavar="DIR", help="The folder to write.  [default: SHEET-calibration beside it]")
    ] = None,
    as_json: AsJson = False,
    debug: Debug = False,
) -> None:
    """Work out the camera from the marks of a SHEET: error of each mark, and overlay.png to check by eye.

    Only the clip's first frame is read.
    """
    with session("calibrate", ctx, as_json=as_json, debug=debug) as s:
        from vidkin import app as actions
        from vidkin.cli import show

        show.calibration(s, actions.calibrate(sheet, out))


@app.command(short_help="The whole job on one or more sheets.")
def analyse(
    ctx: typer.Context,
    sheets: SheetPaths,
    out: Annotated[
        Path | None,
        typer.Option(
            metavar="DIR",
            help="The result folder; with several sheets, the folder for all of them.  "
            "[default: SHEET-result beside each sheet]",
        ),
    ] = None,
    jobs: Annotated[
        int, typer.Option(metavar="N", parser=_whole(1, 64), help="With several sheets, how many at once.")
    ] = 1,
    level: Level = 0.95,
    window: Annotated[
        float | None,
        typer.Option(
            "--window",
            metavar="S",
            parser=_number(0.05, 5),
            help="Smoothing window of the speed curve [s].  [default: two steps of this runner]",
        ),
    ] = None,
    no_pictures: Annotated[
        bool, typer.Option("--no-pictures", help="Leave out overlay.png and tracked.mp4; quicker.")
    ] = False,
    as_json: AsJson = False,
    debug: Debug = False,
) -> None:
    """Do the whole job on each SHEET: camera, track, speed, power, force, drag and a report.

    A SHEET is a TOML file that says what was filmed; the README shows one. A sheet that fails does not stop the
    others. Put -- before a name that starts with a dash.
    """
    with session("analyse", ctx, as_json=as_json, debug=debug) as s:
        from vidkin import app as actions
        from vidkin.cli import show
        from vidkin.stages import Settings

        settings = Settings(level=level, window_s=window)
        if len(sheets) == 1:
            with s.progress() as tell:
                one = actions.analyse(sheets[0], out, settings=settings, progress=tell, pictures=not no_pictures)
            show.analysis(s, one)
            return
        with s.counter(len(sheets)) as finished:
            every = actions.analyse_all(
                sheets, out, jobs=jobs, settings=settings, pictures=not no_pictures, finished=finished
            )
        show.analyses(s, every)


@app.command(short_help="The fitting core on a speed or split table.")
def fit(
    ctx: typer.Context,
    table: TablePath,
    unit: Annotated[
        list[str] | None,
        typer.Option(
            "--unit", metavar="Q=UNIT", help="Unit of a column whose header names none, as v=km/h; may be repeated."
        ),
    ] = None,
    split: SplitsAt = None,
    mass_kg: Annotated[
        float | None, typer.Option(metavar="KG", parser=_number(20, 200), help="Body mass [kg].")
    ] = None,
    stature_m: Annotated[
        float | None, typer.Option(metavar="M", parser=_number(1.0, 2.5), help="Body height [m].")
    ] = None,
    temperature_c: Annotated[
        float | None, typer.Option(metavar="C", parser=_number(-30, 55), help="Air temperature [degrees Celsius].")
    ] = None,
    pressure_hpa: Annotated[
        float | None, typer.Option(metavar="HPA", parser=_number(500, 1100), help="Station pressure [hPa].")
    ] = None,
    altitude_m: Annotated[
        float | None, typer.Option(metavar="M", parser=_number(-430, 5000), help="Altitude [m], instead of pressure.")
    ] = None,
    humidity_pct: Annotated[
        float | None, typer.Option(metavar="PCT", parser=_number(0, 100), help="Relative humidity [%].")
    ] = None,
    wind_mps: Annotated[
        float | None, typer.Option(metavar="MPS", parser=_number(-15, 15), help="Wind [m/s]; + is a tailwind.")
    ] = None,
    level: Level = 0.95,
    as_json: AsJson = False,
    debug: Debug = False,
) -> None:
    """Fit the sprint laws to a TABLE: time with distance, with speed, or split times.

    A TABLE is a text file with a header, such as CSV. Columns are found by name (t_s, time, x_m, distance, v_mps,
    speed ...) and unit. Force and power need body and air.
    """
    with session("fit", ctx, as_json=as_json, debug=debug) as s:
        from vidkin import app as actions
        from vidkin.cli import show
        from vidkin.stages import Air, Athlete, Rep, Settings

        rep = Rep(
            clip=table.name,
            athlete=Athlete(mass_kg=mass_kg, stature_m=stature_m),
            air=Air(
                temperature_c=temperature_c,
                pressure_hpa=pressure_hpa,
                altitude_m=altitude_m,
                humidity_pct=humidity_pct,
                wind_mps=wind_mps,
            ),
            splits_m=tuple(sorted(set(split or ()))),
        )
        units = _units(unit or ())
        show.fit(s, actions.fit(table, rep, units=units, settings=Settings(level=level)))


def _units(stated: list[str] | tuple[()]) -> dict[str, str]:
    units: dict[str, str] = {}
    for text in stated:
        key, sign, unit = text.partition("=")
        if not (key and sign and unit):
            raise UsageError(f"--unit '{text}' is no pair of column and unit.", "Write it as v=km/h or t=ms.")
        units[key.strip()] = unit.strip()
    return units


@app.command(short_help="A result for other programs.")
def export(
    ctx: typer.Context,
    folder: ResultPath,
    fmt: Annotated[
        str, typer.Option("--format", metavar="csv|mat|json|parquet", parser=_format, help="The format to write.")
    ],
    out: Annotated[
        Path | None,
        typer.Option(metavar="PATH", help="A folder, or a file for mat and json.  [default: DIR/export]"),
    ] = None,
    as_json: AsJson = False,
    debug: Debug = False,
) -> None:
    """Write a result for other programs: CSV with metadata, MAT, JSON, Parquet.

    DIR is a result folder that analyse or demo wrote.
    """
    with session("export", ctx, as_json=as_json, debug=debug) as s:
        from vidkin import app as actions
        from vidkin.cli import show

        show.export(s, folder, actions.export(folder, cast("Format", fmt), out))


# --- the whole ------------------------------------------------------------------------------------


def _stop(_signal: int, _frame: object) -> None:
    """SIGTERM as Ctrl-C: whatever is half written is removed on the way out."""
    signal.signal(signal.SIGTERM, signal.SIG_IGN)
    raise KeyboardInterrupt


def main(args: list[str] | None = None) -> NoReturn:
    """Run the command line and exit with its code."""
    args = sys.argv[1:] if args is None else args
    for stream in (sys.stdout, sys.stderr):
        if hasattr(stream, "reconfigure"):  # a name or a degree sign that the terminal lacks must not end a run
            stream.reconfigure(errors="backslashreplace")
    signal.signal(signal.SIGTERM, _stop)
    # Read when numpy loads, which it has not yet: the matrices here are small, and threads only slow them down.
    os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
    try:
        code = app(args, prog_name="vidkin", standalone_mode=False)
    except TyperException as error:
        code = _usage(error, args)
    sys.exit(code if isinstance(code, int) else 0)


def _usage(error: TyperException, args: list[str]) -> int:
    """Say what was wrong with the command line."""
    context = getattr(error, "ctx", None)
    if type(error).__name__ == "NoArgsIsHelpError":
        typer.echo(error.format_message(), err=True)
        return EXIT_USAGE
    where = context.command_path if context is not None else "vidkin"
    hint = f"See: {where} --help"
    if "--" not in args and any(arg.startswith("-") and Path(arg).exists() for arg in args):
        hint = "Put -- before names that start with a dash."
    message = error.format_message()
    message = message if message.endswith((".", "?", ")")) else f"{message}."
    complain(Session(command="", as_json="--json" in args, debug=False, code=EXIT_USAGE), message, hint)
    return EXIT_USAGE
