"""The report: one HTML file that opens anywhere, with no network and nothing outside itself."""

from __future__ import annotations

import base64
from collections.abc import Sequence
from typing import Final

import cv2
import numpy as np

from vidkin.notices import Failure
from vidkin.report import sections
from vidkin.report.markup import Markup, el, join, table
from vidkin.report.overlay import rms_m, rms_px
from vidkin.report.style import CSS, SCRIPT
from vidkin.report.words import CAUTIONS, NAMES, SEVERITY, STAGE, failure_severity, flat, number, why_missing
from vidkin.stages import CAMERA_PARAMETERS, Analysis, Camera, Fit, Motion

#: Nothing may be fetched: styles, script and pictures are in the file itself.
_POLICY: Final = "default-src 'none'; img-src data:; style-src 'unsafe-inline'; script-src 'unsafe-inline'"
_ICON: Final = "data:,"
_PICTURE_PX: Final = 1600
_PICTURE_BYTES: Final = 1_200_000
_RANK: Final = {"serious": 0, "warning": 1, "info": 2}


def report_page(analysis: Analysis, *, overlay_png: bytes | None = None, files: Sequence[str] = ()) -> str:
    """The whole report as one self-contained HTML text.

    Parameters
    ----------
    analysis : Analysis
        Stages may have failed; what stands is reported and what is missing says why.
    overlay_png : the marker overlay as PNG (any format that OpenCV reads); re-encoded to keep the page small
    files : names of result files that lie beside the page, to be linked

    Raises
    ------
    ValueError
        `overlay_png` is not a picture.
    """
    parts = (
        ("notices", "Notices", _notices(analysis)),
        ("numbers", "Key numbers", sections.key_numbers(analysis)),
        ("speed", "Speed", sections.curves(analysis)),
        ("splits", "Splits", sections.splits(analysis)),
        ("steps", "Steps", sections.steps(analysis)),
        ("force", "Force and power", sections.force_power(analysis)),
        ("quantities", "All quantities", sections.quantities(analysis)),
        ("calibration", "Calibration", _calibration(analysis, overlay_png)),
        ("laws", "Laws compared", sections.laws(analysis)),
        ("unanswered", "Not answered", _unanswered(analysis)),
        ("air", "Air and drag", sections.air(analysis)),
        ("settings", "Settings and provenance", _settings(analysis)),
        ("cautions", "Cautions", el("ul", join(el("li", text) for text in CAUTIONS))),
        ("names", "Nomenclature", _nomenclature()),
    )
    title = f"{analysis.rep.athlete.label}, {analysis.rep.clip}"
    head = el(
        "head",
        el("meta", charset="utf-8"),
        el("meta", name="viewport", content="width=device-width, initial-scale=1"),
        el("meta", http_equiv="Content-Security-Policy", content=_POLICY),
        Markup(f'<link rel="icon" href="{_ICON}">'),
        el("title", f"Sprint rep: {title}"),
        el("style", Markup(CSS)),
    )
    body = el(
        "body",
        _header(analysis, files),
        el("main", join(el("section", el("h2", name), el("div", content), id=key) for key, name, content in parts)),
        el("footer", "A result describes one filmed rep; it is no diagnosis. Cautions stand above."),
        el("script", Markup(SCRIPT)),
    )
    return "<!DOCTYPE html>\n" + el("html", head, body, lang="en") + "\n"


def _header(analysis: Analysis, files: Sequence[str]) -> Markup:
    f = analysis.footage
    facts = [f"{f.width_px} × {f.height_px} px", f"{f.t_s.size} frames"]
    if f.frame_rate_hz:
        facts.append(
            f"{f.frame_rate_hz:.1f} frames/s" + (f" (slowed {f.slow_factor:g} times)" if f.slow_factor != 1 else "")
        )
    if isinstance(analysis.motion, Motion):
        m = analysis.motion
        facts.append(f"{m.x_m.max() - m.x_m.min():.1f} m of lane in {m.t_s[-1] - m.t_s[0]:.2f} s measured")
    body = [
        f"{value:g} {unit}"
        for value, unit in ((analysis.rep.athlete.mass_kg, "kg"), (analysis.rep.athlete.stature_m, "m tall"))
        if value is not None
    ]
    lines = [
        el("h1", analysis.rep.athlete.label),
        sections.para(f"Sprint rep, clip {analysis.rep.clip}" + (f", {', '.join(body)}" if body else "")),
        sections.para(", ".join(facts)),
    ]
    if files:
        links: list[str] = []
        for name in files:
            links.extend([", " if links else "", el("a", name, href=f"./{_quoted(name)}")])
        lines.append(el("p", "Beside this page: ", *links))
    return el("header", *lines)


def _quoted(name: str) -> str:
    from urllib.parse import quote

    return quote(name)


def _notices(analysis: Analysis) -> Markup:
    failed = [s for s in analysis.stages if isinstance(s, Failure)]
    found = sorted(analysis.notices, key=lambda n: _RANK[n.severity])
    items = [
        *(_notice(failure_severity(f), f"{STAGE[f.stage]} could not answer", f.reason, f.hint) for f in failed),
        *(_notice(n.severity, STAGE[n.stage], n.text, n.hint) for n in found),
    ]
    refused = len(analysis.fit.refused) if isinstance(analysis.fit, Fit) else 0
    more = []
    if refused:
        words = "1 question was refused" if refused == 1 else f"{refused} questions were refused"
        more.append(el("p", words + ": see ", el("a", "what could not be answered", href="#unanswered"), "."))
    if not items:
        return join([el("p", "No check raised a notice."), *more])
    return join([el("ul", join(items), class_="notices"), *more])


def _notice(severity: str, where: str, text: str, hint: str) -> Markup:
    return el(
        "li",
        el("b", SEVERITY[severity]),
        el("span", f"{where}. ", class_="where"),
        text,
        el("span", hint, class_="hint"),
        class_=severity,
    )


def _unanswered(analysis: Analysis) -> Markup:
    if not analysis.failures:
        missing = [STAGE[s] for s in ("track", "steps", "motion", "fit") if getattr(analysis, s) is None]
        if missing:
            return el("p", f"Not run: {', '.join(missing)}.")
        return el("p", "Every question that was asked has an answer.")
    items = [
        el("li", el("b", STAGE[f.stage]), f.reason, el("span", f.hint, class_="hint"), class_=failure_severity(f))
        for f in analysis.failures
    ]
    return el("ul", join(items), class_="notices")


def _calibration(analysis: Analysis, overlay_png: bytes | None) -> Markup:
    camera = analysis.camera
    parts: list[Markup] = []
    if not isinstance(camera, Camera):
        return join([sections.absent(why_missing(analysis, "camera")), *_still(overlay_png)])
    p, sd = camera.parameters, np.sqrt(np.maximum(np.diag(camera.cov), 0.0))
    lane = analysis.rep.lane
    px, m = rms_px(camera), rms_m(camera)
    if px is not None and m is not None:
        words = (
            f"{len(camera.marks)} marks, rms error {px:.2f} px, that is {100 * m:.2f} cm at the marks; lane lengths "
            f"are known to {100 * camera.scale_sd:.2f} % (one sd)."
        )
        parts.append(sections.para(words))
    if len(camera.x_sd_m):
        low, high = 100 * camera.x_sd_m[:, 1].min(), 100 * camera.x_sd_m[:, 1].max()
        words = (
            f"A position on the lane is known to {low:.1f} to {high:.1f} cm (one sd, camera alone) between "
            f"{camera.x_sd_m[:, 0].min():g} and {camera.x_sd_m[:, 0].max():g} m."
        )
        parts.append(sections.para(words))
    parts.extend(_still(overlay_png))
    rows = [
        ("focal length", number(p[0], 1), "px", number(sd[0], 1)),
        ("horizontal field of view, distortion left out", number(camera.hfov_deg, 2), "°", "–"),
        *(
            (f"radial distortion {name}", number(p[CAMERA_PARAMETERS.index(name)], 4), "", number(sd[k], 4))
            for k, name in ((1, "k1"), (2, "k2"))
        ),
        ("position along the lane", number(p[3], 3), "m", number(sd[3], 3)),
        ("distance from lane centre", number(abs(p[4] - lane.centre_y_m), 3), "m", number(sd[4], 3)),
        ("height", number(p[5], 3), "m", number(sd[5], 3)),
        *(
            (name, number(float(np.degrees(p[k])), 3), "°", number(float(np.degrees(sd[k])), 3))
            for k, name in (
                (6, "yaw, from the running direction to the left"),
                (7, "pitch, up"),
                (8, "roll, clockwise"),
            )
        ),
    ]
    parts.append(table(("Camera", "Value", "Unit", "sd"), rows, numeric=(1, 3), wordy=(0,)))
    if camera.marks:
        parts.append(marks_html(camera))
    return join(parts)


def _still(overlay_png: bytes | None) -> list[Markup]:
    """The marker overlay with its key, where there is one."""
    if overlay_png is None:
        return []
    words = (
        "Ring: as clicked. Dot: where the model puts it. Arrow: their difference, drawn longer by the factor in the "
        "heading. Lines and metre scale are drawn through the model: they must lie on the track's own lines."
    )
    image = el("img", src=_picture(overlay_png), alt="A frame of the clip with marks, lane lines and metre scale")
    return [el("figure", image, el("figcaption", words), class_="still")]


def marks_html(camera: Camera) -> Markup:
    """Error of each mark, numbered as in the overlay."""
    rows = [
        (
            str(k + 1),
            mark.label,
            *(number(float(c), 3) for c in mark.xyz_m),
            *(number(float(c), 2) for c in error),
            number(100 * float(m), 2),
        )
        for k, (mark, error, m) in enumerate(zip(camera.marks, camera.mark_error_px, camera.mark_error_m, strict=True))
    ]
    head = ("No.", "Mark", "x, m", "y, m", "z, m", "error u, px", "error v, px", "error, cm")
    return table(head, rows, caption="Clicked minus model, at each mark", numeric=(0, 2, 3, 4, 5, 6, 7), wordy=(1,))


def _picture(data: bytes) -> str:
    """A picture as a data URL, small enough for the page."""
    picture = cv2.imdecode(np.frombuffer(data, np.uint8), cv2.IMREAD_COLOR) if data else None
    if picture is None:
        raise ValueError(f"report_page: overlay_png ({len(data)} bytes) is not a picture; pass the bytes of a PNG file")
    longest = max(picture.shape[:2])
    encoded = b""
    for side, quality in ((_PICTURE_PX, 88), (_PICTURE_PX, 75), (1280, 65), (960, 50)):
        zoom = min(1.0, side / longest)
        small = cv2.resize(picture, None, fx=zoom, fy=zoom, interpolation=cv2.INTER_AREA) if zoom < 1 else picture
        encoded = cv2.imencode(".jpg", small, [cv2.IMWRITE_JPEG_QUALITY, quality])[1].tobytes()
        if len(encoded) <= _PICTURE_BYTES:
            break
    return "data:image/jpeg;base64," + base64.b64encode(encoded).decode("ascii")


def _settings(analysis: Analysis) -> Markup:
    s = analysis.settings
    rows = [
        ("level of intervals", f"{100 * s.level:g} %"),
        ("smoothing window", "tied to the step rate" if s.window_s is None else f"{s.window_s:g} s, as set"),
        *flat(analysis.provenance),
    ]
    return table(("Key", "Value"), ((k, el("code", v)) for k, v in rows))


def _nomenclature() -> Markup:
    rows = [(name.symbol, key, name.meaning) for key, name in NAMES.items()]
    axes = (
        "Axes: x along the lane in running direction, y to the runner's left, z up, in metres from the sheet's origin. "
        "Distances count from the start line."
    )
    return join([el("p", axes), table(("Symbol", "Name in files", "Meaning"), rows, wordy=(2,))])
