"""Still pictures of the curves (PNG), drawn with matplotlib's Agg canvas and no global state."""

from __future__ import annotations

from collections.abc import Sequence
from io import BytesIO
from typing import Any, Final

from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from matplotlib.ticker import MaxNLocator

from vidkin.notices import Failure
from vidkin.report.series import Line, Panel, force_panels, laws_panel, residual_panel, speed_panels
from vidkin.stages import Analysis

_INK: Final = "#1d2126"
_SOFT: Final = "#5b636b"
_RULE: Final = "#d9d5cc"
_PAPER: Final = "#fbfaf7"
_BLUE: Final = "#0b6e8f"
#: Colour, dash pattern, width of each role.
_STYLE: Final[dict[str, tuple[str, Any, float]]] = {
    "measured": (_BLUE, "-", 2.4),
    "ends": (_BLUE, (0, (1.5, 1.5)), 1.5),
    "law": ("#b4540a", (0, (4, 1.5)), 1.5),
    "total": ("#b4540a", "-", 2.0),
    "zero": (_BLUE, "-", 0.8),
    "second": ("#5b636b", (0, (2, 2)), 1.4),
    "third": ("#8a8f94", (0, (5, 1.5, 1, 1.5)), 1.3),
    "drag": ("#a8326f", (0, (4, 1.5, 1, 1.5)), 1.8),
}


def speed_png(analysis: Analysis, *, dpi: int = 150) -> bytes | Failure:
    """Speed against time and distance: measured with interval, law, splits. PNG, or why there is none."""
    return _png(speed_panels(analysis), dpi)


def residual_png(analysis: Analysis, *, dpi: int = 150) -> bytes | Failure:
    """Position residuals of the preferred law against distance. PNG, or why there is none."""
    panel = residual_panel(analysis)
    return _png((panel,) if isinstance(panel, Panel) else panel, dpi)


def laws_png(analysis: Analysis, *, dpi: int = 150) -> bytes | Failure:
    """All fitted laws beside the measured speed. PNG, or why there is none."""
    panel = laws_panel(analysis)
    return _png((panel,) if isinstance(panel, Panel) else panel, dpi)


def force_png(analysis: Analysis, *, dpi: int = 150) -> bytes | Failure:
    """Force and power with their share of air drag. PNG, or why there is none."""
    return _png(force_panels(analysis), dpi)


def figures(analysis: Analysis, *, dpi: int = 150) -> dict[str, bytes]:
    """Every picture that this analysis allows, by name."""
    made = {
        "speed": speed_png(analysis, dpi=dpi),
        "residuals": residual_png(analysis, dpi=dpi),
        "laws": laws_png(analysis, dpi=dpi),
        "force": force_png(analysis, dpi=dpi),
    }
    return {name: png for name, png in made.items() if isinstance(png, bytes)}


def _png(panels: Sequence[Panel] | Failure, dpi: int) -> bytes | Failure:
    if isinstance(panels, Failure):
        return panels
    figure = Figure(figsize=(5.2 * min(2, len(panels)) + (3.4 if len(panels) == 1 else 0), 3.9), layout="constrained")
    if len(panels) > 2:
        figure.set_size_inches(4.1 * len(panels), 3.9)
    FigureCanvasAgg(figure)
    figure.set_facecolor(_PAPER)
    for k, panel in enumerate(panels):
        _draw(figure.add_subplot(1, len(panels), k + 1), panel)
    out = BytesIO()
    figure.savefig(out, format="png", dpi=dpi, facecolor=_PAPER)
    return out.getvalue()


def _draw(axes: Axes, panel: Panel) -> None:
    axes.set_facecolor(_PAPER)
    axes.set_title(panel.title, loc="left", color=_INK, fontsize=11, fontweight="bold", pad=22 if panel.ticks else 8)
    axes.set_xlabel(panel.x_label, color=_INK)
    axes.set_ylabel(panel.y_label, color=_INK)
    axes.tick_params(colors=_SOFT, labelcolor=_INK, length=3)
    for side in ("top", "right"):
        axes.spines[side].set_visible(False)
    for side in ("left", "bottom"):
        axes.spines[side].set_color(_RULE)
    axes.grid(axis="y", color=_RULE, linewidth=0.6)
    axes.set_axisbelow(True)
    said: set[str] = set()
    for line in panel.lines:
        _draw_line(axes, line, "" if line.label in said else line.label)
        said.add(line.label)
    for x, text in panel.ticks:
        axes.axvline(x, color=_SOFT, linewidth=0.7, linestyle=(0, (1, 2)))
        axes.annotate(
            text,
            (x, 1.0),
            xycoords=("data", "axes fraction"),
            xytext=(0, 4),
            textcoords="offset points",
            ha="center",
            color=_SOFT,
            fontsize=8,
        )
    if panel.from_zero:
        axes.set_ylim(bottom=min(0.0, axes.get_ylim()[0]))
    axes.margins(x=0.02)
    axes.xaxis.set_major_locator(MaxNLocator(nbins=8, steps=[1, 2, 5, 10]))
    axes.yaxis.set_major_locator(MaxNLocator(nbins=6, steps=[1, 2, 5, 10]))
    axes.legend(frameon=False, fontsize=8, labelcolor=_INK)
    if panel.note:
        axes.annotate(
            panel.note,
            (0.0, -0.24),
            xycoords="axes fraction",
            color=_SOFT,
            fontsize=8,
            annotation_clip=False,
            wrap=True,
        )


def _draw_line(axes: Axes, line: Line, label: str) -> None:
    shown = label or "_nolegend_"
    if line.role == "dots":
        axes.plot(line.x, line.y, ".", color=_INK, markersize=3, alpha=0.6, markeredgewidth=0, label=shown)
        return
    colour, dash, width = _STYLE[line.role]
    if line.low.size:
        axes.fill_between(line.x, line.low, line.high, color=colour, alpha=0.15, linewidth=0)
    axes.plot(line.x, line.y, color=colour, linestyle=dash, linewidth=width, label=shown)
