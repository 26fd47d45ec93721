"""Makes the README's pictures, pictures/overlay.png and pictures/speed.png, from a run of the demo.

Run it from anywhere:  python demo_clips/make_pictures.py [FOLDER]
"""

from __future__ import annotations

import sys
import tempfile
from io import BytesIO
from pathlib import Path

from PIL import Image

from vidkin.app import demo
from vidkin.report.figures import speed_png

#: Width of the pictures in the README [px], and the most that each may weigh [bytes].
_WIDTH_PX = 1200
_MOST_BYTES = 300_000
#: Palettes to try, best first: colours, and whether they are mixed by dots.
_PALETTES = ((256, True), (128, True), (64, True), (256, False), (64, False))


def light(picture: Image.Image) -> bytes:
    """The picture as a PNG of few colours that weighs little.

    Raises
    ------
    ValueError
        If no palette is small enough.
    """
    height = round(picture.height * _WIDTH_PX / picture.width)
    small = picture.convert("RGB").resize((_WIDTH_PX, height), Image.Resampling.LANCZOS)
    for colours, dots in _PALETTES:
        out = BytesIO()
        mixed = Image.Dither.FLOYDSTEINBERG if dots else Image.Dither.NONE
        # Coverage keeps the few pixels of bright drawing apart from the many of grass.
        palette = small.quantize(colours, Image.Quantize.MAXCOVERAGE)
        small.quantize(palette=palette, dither=mixed).save(out, "PNG", optimize=True)
        if out.tell() < _MOST_BYTES:
            return out.getvalue()
    raise ValueError(f"{out.tell()} bytes with the smallest palette; {_MOST_BYTES} are allowed")


def main(folder: Path) -> None:
    """Run the demo and write both pictures."""
    folder.mkdir(parents=True, exist_ok=True)
    with tempfile.TemporaryDirectory() as place:
        outcome = demo(Path(place) / "demo").outcome
        overlay = Image.open(outcome.folder / "overlay.png")
        # Heading and track are in the upper part; below it there is only grass.
        made = {"overlay": light(overlay.crop((0, 0, overlay.width, overlay.height * 2 // 3)))}
    curve = speed_png(outcome.analysis, dpi=150)
    if not isinstance(curve, bytes):
        raise SystemExit(curve.reason)
    made["speed"] = light(Image.open(BytesIO(curve)))
    for name, png in made.items():
        (folder / f"{name}.png").write_bytes(png)
        print(f"{name}.png: {len(png) / 1000:.0f} kB")


if __name__ == "__main__":
    main(Path(sys.argv[1]) if len(sys.argv) > 1 else Path(__file__).resolve().parent / "pictures")
