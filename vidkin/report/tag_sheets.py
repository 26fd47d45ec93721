"""Pages to print: one tag each at true size, with its place, how to put it up, and a ruler that checks the printer."""

from __future__ import annotations

import warnings
from collections.abc import Sequence
from functools import lru_cache
from io import BytesIO
from typing import Final, Literal

import numpy as np
from matplotlib.axes import Axes
from matplotlib.backends.backend_pdf import FigureCanvasPdf, PdfPages
from matplotlib.collections import LineCollection
from matplotlib.figure import Figure
from matplotlib.font_manager import FontProperties
from matplotlib.patches import PathPatch
from matplotlib.path import Path
from matplotlib.textpath import TextPath

from vidkin.core.tags import MODULES, PAPERS, Paper, PaperName, Tag, check_tags, ink
from vidkin.errors import UsageError
from vidkin.stages import Array

_MM: Final = 1 / 25.4
_POINT_MM: Final = 25.4 / 72
_FAMILY: Final = "DejaVu Sans"
_SOFT: Final = "#5b636b"
_DESIGN: Final = 64.0
_RULER_MM: Final = 100
#: Widths of picture for which a reading distance is printed [px], and the field of view of phones' main cameras [deg].
_WIDTHS_PX: Final = (1920, 3840)
_HFOV_DEG: Final = 66.0
#: A centre may lie this much lower than the page allows before it is an error, for the sheet's rounding [mm].
_SLACK_MM: Final = 1.0


def tag_sheets_pdf(tags: Sequence[Tag], *, paper: Literal["A4", "A3"]) -> bytes:
    """A PDF with one page per tag, drawn at true size.

    Parameters
    ----------
    tags : sequence of Tag
        What to print; each side must be the paper's (`core.tags.PAPERS`).
    paper : {"A4", "A3"}

    Returns
    -------
    bytes
        The same for the same tags: it holds no date.

    Raises
    ------
    UsageError
        If there is no tag, two have the same number or place, a side is another paper's, or a centre is lower than a
        page that stands on the ground has it.
    """
    check(tags, paper)
    out = BytesIO()
    facts = {"Title": f"Tags for calibration, {paper}", "Creator": "vidkin", "Producer": "vidkin", "CreationDate": None}
    with PdfPages(out, metadata=facts) as pdf, warnings.catch_warnings():
        warnings.filterwarnings("ignore", message="Glyph")  # a letter that the font lacks is drawn as a box
        for tag in tags:
            figure = page(tag, paper)
            FigureCanvasPdf(figure)
            pdf.savefig(figure)
    return out.getvalue()


def check(tags: Sequence[Tag], paper: PaperName) -> None:
    """Refuse what cannot be printed on this paper.

    Raises
    ------
    UsageError
    """
    sheet = PAPERS[paper]
    if not tags:
        raise UsageError("There is no tag to print.", "List at least six tags, on both lines of the lane.")
    check_tags(tuple(tags))
    for tag in tags:
        name = f"Tag {tag.id} ('{tag.label}')"
        if abs(tag.side_m - sheet.side_m) > 1e-6:
            raise UsageError(
                f"{name}: its side is {1000 * tag.side_m:g} mm, but {paper} pages carry {sheet.side_mm:g} mm.",
                f"State side_m = {sheet.side_m:g}, or choose the other paper.",
            )
        if 1000 * tag.xyz_m[2] < sheet.centre_mm - _SLACK_MM:
            raise UsageError(
                f"{name}: its centre is to be {1000 * tag.xyz_m[2]:.0f} mm above the ground, but an {paper} page that "
                f"stands on the ground has it at {sheet.centre_mm:.0f} mm.",
                f"State z_m = {sheet.centre_m:g}, or more where it stands on something.",
            )


def page(tag: Tag, paper: PaperName) -> Figure:
    """One page: the tag, what is said about it, and the ruler. Axes are millimetres from the lower left corner."""
    sheet = PAPERS[paper]
    figure = Figure(figsize=(sheet.width_mm * _MM, sheet.height_mm * _MM))
    axes = figure.add_axes((0.0, 0.0, 1.0, 1.0))
    axes.set_xlim(0, sheet.width_mm)
    axes.set_ylim(0, sheet.height_mm)
    axes.set_axis_off()
    middle = sheet.width_mm / 2
    outline = _outline(ink(tag.id)) * sheet.side_mm + np.array([middle, sheet.centre_mm])
    axes.add_patch(PathPatch(_closed(outline), facecolor="black", edgecolor="none", linewidth=0))
    _pointers(axes, sheet)
    _words(axes, tag, paper)
    _ruler(axes, sheet)
    return figure


# --- the marker -----------------------------------------------------------------------------------


def _outline(pattern: Array) -> Array:
    """The edge of the ink (N, 3, ...) as loops, NaN between them, in sides about the centre, y up.

    One outline for all ink: squares drawn one by one would show hairlines between them.
    """
    n = MODULES
    inked = np.pad(pattern > 0, 1)
    steps: dict[tuple[int, int], list[tuple[int, int]]] = {}
    for row in range(1, n + 1):
        for column in range(1, n + 1):
            if not inked[row, column]:
                continue
            # ink lies to the left of each edge, so that holes run the other way round
            left, right, top, bottom = column - 1, column, row - 1, row
            for open_, start, end in (
                (not inked[row + 1, column], (left, bottom), (right, bottom)),
                (not inked[row, column + 1], (right, bottom), (right, top)),
                (not inked[row - 1, column], (right, top), (left, top)),
                (not inked[row, column - 1], (left, top), (left, bottom)),
            ):
                if open_:
                    steps.setdefault(start, []).append(end)
    loops: list[Array] = []
    while steps:
        here = start = next(iter(steps))
        loop = [here]
        while True:
            following = steps[here].pop()
            if not steps[here]:
                del steps[here]
            loop.append(following)
            here = following
            if here == start:
                break
        loops.append(np.array([*loop, (np.nan, np.nan)], dtype=np.float64))
    places = np.concatenate(loops) / n
    return np.column_stack([places[:, 0] - 0.5, 0.5 - places[:, 1]])


def _closed(outline: Array) -> Path:
    """Loops separated by NaN as one path."""
    vertices: list[Array] = []
    codes: list[np.uint8] = []
    start = 0
    for end in (int(i) for i in np.flatnonzero(np.isnan(outline[:, 0]))):
        loop = outline[start:end]
        vertices.append(loop)
        codes += [Path.MOVETO, *[Path.LINETO] * (len(loop) - 2), Path.CLOSEPOLY]
        start = end + 1
    return Path(np.concatenate(vertices), codes)


def _pointers(axes: Axes, sheet: Paper) -> None:
    """Ticks at the page's rim that point at the centre, and the arrow that says which edge is up."""
    k, middle = sheet.width_mm / 210, sheet.width_mm / 2
    for x in ((4 * k, 10 * k), (sheet.width_mm - 10 * k, sheet.width_mm - 4 * k)):
        axes.plot(x, (sheet.centre_mm, sheet.centre_mm), color="black", linewidth=0.8)
    axes.plot((middle, middle), (4, 4 + 6 * k), color="black", linewidth=0.8)
    _text(axes, (middle + 2 * k, 4.5 * k), "centre of the square is above this tick", 6 * k, colour=_SOFT)
    top = sheet.height_mm
    axes.annotate(
        "",
        (middle - 8 * k, top - 4.5 * k),
        (middle - 8 * k, top - 11 * k),
        arrowprops={"arrowstyle": "-|>", "color": "black", "linewidth": 1.2 * k},
    )
    _text(axes, (middle - 5 * k, top - 10 * k), "this edge up", 8 * k)


# --- words ----------------------------------------------------------------------------------------


def _words(axes: Axes, tag: Tag, paper: PaperName) -> None:
    sheet = PAPERS[paper]
    k = sheet.width_mm / 210
    x, y, z = (float(c) for c in tag.xyz_m)
    number = f"{tag.id}"
    _text(axes, (12 * k, 69 * k), number, 36 * k, bold=True)
    indent = 12 * k + _width_mm(number, 36 * k, bold=True) + 5 * k
    room = sheet.width_mm - 12 * k - indent
    _text(axes, (indent, 75.5 * k), _fitted(tag.label, 14 * k, room), 14 * k, bold=True)
    place = f"x = {x:.3f} m along the lane, y = {y:.3f} m (+ is the runner's left), z = {z:.3f} m (height)"
    _text(axes, (indent, 69 * k), f"Centre of the square: {place}", 7.5 * k)
    raised = 1000 * z - sheet.centre_mm
    stands = "on the ground" if abs(raised) <= _SLACK_MM else f"{raised:.0f} mm above the ground"
    near, far = (sheet.side_m * 0.5 * w / np.tan(np.radians(_HFOV_DEG / 2)) / 20 for w in _WIDTHS_PX)
    columns = (
        (
            "Put it up",
            (
                "Print at actual size (100 %) on matt paper and check the ruler below.",
                f"Fix the page flat to a box or a board. Lower edge {stands}: the centre of the square is then "
                f"{1000 * z:.0f} mm up. Bottom tick straight above the point (x, y).",
                "Upright, facing the camera. Nothing in front of it; no two tags one behind the other, so set those "
                "of the second line in the gaps of the first.",
                f"The square measures {sheet.side_mm:g} mm. It is read up to about {near:.0f} m away in pictures "
                f"{_WIDTHS_PX[0]} px wide, {far:.0f} m in {_WIDTHS_PX[1]} px.",
            ),
        ),
        (
            "Keep it safe",
            (
                "Never in the lane that is run in, in its run-out, or in another lane in use: on the line's outer "
                "side, or beyond it.",
                "Weigh it down. Wind must not carry it off, and nobody may trip over it.",
                "Do not touch it while you film; take it away afterwards.",
                "The rules of the track come first.",
            ),
        ),
    )
    for column, (title, lines) in enumerate(columns):
        left = (12 + 106 * column) * k
        _text(axes, (left, 61.5 * k), title, 9 * k, bold=True)
        _paragraphs(axes, (left, 57 * k), lines, 7.2 * k, width_mm=(98 if column == 0 else 80) * k)


def _paragraphs(
    axes: Axes, at_mm: tuple[float, float], lines: Sequence[str], size_pt: float, *, width_mm: float
) -> None:
    y = at_mm[1]
    for line in lines:
        for row in _wrapped(line, size_pt, width_mm):
            _text(axes, (at_mm[0], y), row, size_pt)
            y -= 1.25 * size_pt * _POINT_MM
        y -= 0.35 * size_pt * _POINT_MM


def _text(
    axes: Axes, at_mm: tuple[float, float], text: str, size_pt: float, *, bold: bool = False, colour: str = "black"
) -> None:
    """One line, baseline at `at_mm`; a dollar sign is a dollar sign."""
    weight = "bold" if bold else "normal"
    axes.text(*at_mm, text, fontsize=size_pt, family=_FAMILY, fontweight=weight, color=colour, parse_math=False)


@lru_cache(maxsize=1024)
def _advance(text: str, bold: bool) -> float:
    """Width of a word at type size 1 [-]."""
    font = FontProperties(family=_FAMILY, weight="bold" if bold else "normal")
    text = text.replace("$", r"\$")
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # a letter that the font lacks is drawn as a box
        ends = [TextPath((0, 0), t, size=_DESIGN, prop=font).get_extents().x1 for t in (f"|{text}|", "||")]
    return float(ends[0] - ends[1]) / _DESIGN


def _width_mm(text: str, size_pt: float, *, bold: bool = False) -> float:
    words = text.split(" ")
    return size_pt * _POINT_MM * (sum(_advance(w, bold) for w in words) + (len(words) - 1) * _advance(" ", bold))


def _wrapped(text: str, size_pt: float, width_mm: float) -> list[str]:
    rows: list[str] = []
    for word in text.split():
        if rows and _width_mm(f"{rows[-1]} {word}", size_pt) <= width_mm:
            rows[-1] += f" {word}"
        else:
            rows.append(word)
    return rows


def _fitted(text: str, size_pt: float, width_mm: float) -> str:
    """The text, cut to what fits on one line."""
    text = " ".join(text.split())
    if _width_mm(text, size_pt, bold=True) <= width_mm:
        return text
    while text and _width_mm(f"{text}…", size_pt, bold=True) > width_mm:
        text = text[:-1]
    return f"{text.rstrip()}…"


# --- the ruler ------------------------------------------------------------------------------------


def _ruler(axes: Axes, sheet: Paper) -> None:
    """Exactly 100 mm on any paper, a tick each millimetre."""
    k = sheet.width_mm / 210
    left, base = 12 * k, 14 * k
    lines = [[(left, base), (left + _RULER_MM, base)]]
    for mm in range(_RULER_MM + 1):
        height = 4.0 if mm % 10 == 0 else 2.8 if mm % 5 == 0 else 1.6
        lines.append([(left + mm, base), (left + mm, base + height)])
        if mm % 10 == 0:
            axes.text(left + mm, base + 4.8, f"{mm}", fontsize=6, family=_FAMILY, ha="center")
    axes.add_collection(LineCollection(lines, colors="black", linewidths=0.4), autolim=False)
    at = (left + _RULER_MM + 6 * k, base + 3.2 * k)
    room = sheet.width_mm - 12 * k - at[0]
    said = "This ruler is 100 mm long, to within 0.5 mm, or the page was not printed at actual size: print it again."
    _paragraphs(axes, at, (said,), 7.2 * k, width_mm=room)
