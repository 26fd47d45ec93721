# Writes video and reads it back: true times, BT.709 colours, what a browser needs, errors.
from __future__ import annotations

import base64
import os
import shutil
from pathlib import Path
from typing import Any

import av
import numpy as np
import pytest

from vidkin.errors import ExportError
from vidkin.files.video import VideoWriter, open_clip


def test_uneven_times_come_back(tmp_path: Path) -> None:
    times = [2.0, 2.01, 2.03, 2.1, 2.11, 2.4, 2.41]
    path = tmp_path / "a.mp4"
    with VideoWriter(path, (64, 48), rate=60, times_s=times) as writer:
        for i in range(len(times)):
            writer.write_rgb(np.full((48, 64, 3), 20 * i, np.uint8))
    clip = open_clip(path)
    assert clip.footage.t_s == pytest.approx(np.array(times) - 2.0, abs=6e-6)  # one tick is 11 us
    with av.open(str(path)) as container:  # the last picture is shown too
        assert container.duration == pytest.approx((0.41 + 1 / 60) * 1e6, abs=1500)
    assert [float(f.luma.mean()) for f in clip.frames()] == pytest.approx(
        [16 + 20 * i * 219 / 255 for i in range(7)], abs=2
    )


@pytest.mark.parametrize("rate", [59.7, 120, 30_000 / 1001])
def test_an_even_rate_keeps_it(tmp_path: Path, rate: float) -> None:
    path = tmp_path / "a.mp4"
    with VideoWriter(path, (64, 48), rate=rate) as writer:
        for _ in range(40):
            writer.write_rgb(np.zeros((48, 64, 3), np.uint8))
    assert open_clip(path).footage.t_s == pytest.approx(np.arange(40) / rate, abs=6e-6)


def test_colours_are_those_of_bt709(tmp_path: Path) -> None:
    # ITU-R BT.709-6, items 3.2-3.4 (MEM, values from memory): Y' = 0.2126 R' + 0.7152 G' + 0.0722 B',
    # C'B = (B' - Y') / 1.8556, C'R = (R' - Y') / 1.5748; 8 bit: 16 + 219 Y', 128 + 224 C'.
    path = tmp_path / "a.mp4"
    colours = np.array([[200, 30, 60], [20, 180, 90], [240, 240, 10], [0, 0, 0], [255, 255, 255]])
    with VideoWriter(path, (64, 48), rate=30, crf=10) as writer:
        for colour in colours:
            writer.write_rgb(np.full((48, 64, 3), colour, np.uint8))
    for (r, g, b), frame in zip(colours / 255, open_clip(path).frames(), strict=True):
        y = 0.2126 * r + 0.7152 * g + 0.0722 * b
        assert frame.luma.mean() == pytest.approx(16 + 219 * y, abs=1.5)
        assert frame.chroma_u.mean() == pytest.approx(128 + 224 * (b - y) / 1.8556, abs=1.5)
        assert frame.chroma_v.mean() == pytest.approx(128 + 224 * (r - y) / 1.5748, abs=1.5)


@pytest.mark.parametrize("full_range", [False, True])
def test_the_file_is_what_browsers_play(tmp_path: Path, mp4_boxes: Any, full_range: bool) -> None:
    path = tmp_path / "a.mp4"
    with VideoWriter(path, (64, 48), rate=30, full_range=full_range) as writer:
        for i in range(40):
            writer.write_rgb(np.full((48, 64, 3), 6 * i, np.uint8))
    with av.open(str(path)) as container:
        stream = container.streams.video[0]
        context = stream.codec_context
        assert (context.name, context.profile) == ("h264", "High")
        assert context.pix_fmt == ("yuvj420p" if full_range else "yuv420p")
        assert (context.color_range, context.colorspace, context.color_primaries, context.color_trc) == (
            2 if full_range else 1,
            1,
            1,
            1,
        )
        keys = [p.pts for p in container.demux(stream) if p.is_keyframe and p.pts is not None]
        assert len(keys) >= 3  # one each half second
    data = path.read_bytes()
    assert mp4_boxes(data, (b"moov",))[0][0] < mp4_boxes(data, (b"mdat",))[0][0]  # plays before it is all loaded


def test_odd_sizes_are_filled_up(tmp_path: Path) -> None:
    path = tmp_path / "a.mp4"
    with VideoWriter(path, (65, 49), rate=30) as writer:
        for _ in range(3):
            writer.write_rgb(np.full((49, 65, 3), 128, np.uint8))
            writer.write_planes(np.full((49, 65), 90, np.uint8), *(np.full((25, 33), n, np.uint8) for n in (100, 150)))
    clip = open_clip(path)
    assert (clip.footage.width_px, clip.footage.height_px) == (66, 50)
    planes = list(clip.frames())[1]
    assert planes.luma == pytest.approx(np.full((50, 66), 90), abs=2)
    assert planes.chroma_u == pytest.approx(np.full((25, 33), 100), abs=2)


@pytest.mark.parametrize("chroma", [(24, 32), (48, 32), (48, 64)])
def test_planes_go_through_unchanged(tmp_path: Path, chroma: tuple[int, int]) -> None:
    path = tmp_path / "a.mp4"
    y = np.clip(np.add.outer(np.arange(48) * 2, np.arange(64)), 0, 255).astype(np.uint8)
    u, v = np.full(chroma, 90, np.uint8), np.full(chroma, 170, np.uint8)
    with VideoWriter(path, (64, 48), rate=30, crf=5) as writer:
        for _ in range(4):
            writer.write_planes(y, u, v)
    frame = list(open_clip(path).frames())[2]
    assert np.abs(frame.luma.astype(int) - y).max() <= 4
    assert (frame.chroma_u.mean(), frame.chroma_v.mean()) == pytest.approx((90, 170), abs=1)


def test_an_error_inside_leaves_no_file(tmp_path: Path) -> None:
    path = tmp_path / "a.mp4"

    def fail(error: type[BaseException]) -> None:
        with VideoWriter(path, (64, 48), rate=30) as writer:
            writer.write_rgb(np.zeros((48, 64, 3), np.uint8))
            raise error

    for error in (RuntimeError, KeyboardInterrupt):
        with pytest.raises(error):
            fail(error)
        assert list(tmp_path.iterdir()) == []


def test_what_cannot_be_written(tmp_path: Path) -> None:
    with pytest.raises(ExportError, match=r"none.a\.mp4 cannot be written: No such file") as caught:
        VideoWriter(tmp_path / "none" / "a.mp4", (64, 48), rate=30)
    assert caught.value.hint


@pytest.mark.skipif(not Path("/dev/full").exists(), reason="this system has no /dev/full to stand for a full disk")
def test_a_full_disk(tmp_path: Path) -> None:
    path = tmp_path / "a.mp4"
    rng = np.random.default_rng(1)

    def fill(pictures: int) -> None:
        with VideoWriter(path, (320, 240), rate=30, crf=1) as writer:
            for _ in range(pictures):
                writer.write_rgb(rng.integers(0, 255, (240, 320, 3), dtype=np.uint8))

    for pictures in (30, 1):  # noticed while writing, or only at the end
        path.unlink(missing_ok=True)
        os.symlink("/dev/full", path)
        with pytest.raises(ExportError, match="cannot be written: No space left on device"):
            fill(pictures)
        assert not path.is_symlink()
    assert Path("/dev/full").exists()


def test_wrong_use_is_a_plain_error(tmp_path: Path) -> None:
    path = tmp_path / "a.mp4"
    with pytest.raises(ValueError, match="at least 2 x 2 px"):
        VideoWriter(path, (1, 48), rate=30)
    with pytest.raises(ValueError, match="rate nan > 0"):
        VideoWriter(path, (64, 48), rate=float("nan"))
    with pytest.raises(ValueError, match="must rise"):
        VideoWriter(path, (64, 48), rate=30, times_s=[0, 0.1, 0.1])
    with pytest.raises(ValueError, match="no picture was written"), VideoWriter(path, (64, 48), rate=30):
        pass
    assert not path.exists()
    with VideoWriter(path, (64, 48), rate=30, times_s=[0.0, 0.1]) as writer:
        picture = np.zeros((48, 64, 3), np.uint8)
        writer.write_rgb(picture)
        writer.write_rgb(picture)
        with pytest.raises(ValueError, match="more pictures than the 2 times given"):
            writer.write_rgb(picture)
        with pytest.raises(ValueError, match="expected uint8"):
            writer.write_rgb(np.zeros((48, 64, 3)))
        with pytest.raises(ValueError, match="luma"):
            writer.write_planes(picture[..., 0].T, picture[..., 0], picture[..., 0])


def test_a_browser_shows_each_picture_at_its_time(tmp_path: Path) -> None:
    from playwright import sync_api

    browser_path = next(filter(None, map(shutil.which, ("chromium", "chromium-browser", "google-chrome"))), None)
    if browser_path is None and "CI" not in os.environ:
        pytest.skip("chromium is not installed (Debian's package 'chromium'); in CI this fails")
    assert browser_path is not None, "chromium is not installed: install Debian's package 'chromium'"
    times = [0, 0.1, 0.2, 0.5, 0.6, 0.7, 1.5, 1.6]
    path = tmp_path / "a.mp4"
    with VideoWriter(path, (64, 48), rate=10, times_s=times) as writer:
        for i in range(len(times)):
            writer.write_rgb(np.full((48, 64, 3), (200, 30, 60) if i % 2 else (20, 180, 90), np.uint8))
    source = "data:video/mp4;base64," + base64.b64encode(path.read_bytes()).decode()
    with sync_api.sync_playwright() as playwright:
        browser = playwright.chromium.launch(executable_path=browser_path, args=["--no-sandbox"])
        page = browser.new_page()
        page.set_content("<video id=v muted></video><canvas id=c width=64 height=48></canvas>")
        duration, *pictures = page.evaluate(
            """async ([source, times]) => {
                const v = document.getElementById('v'), x = document.getElementById('c').getContext('2d');
                v.src = source;
                await new Promise((done, fail) => { v.onloadeddata = done; v.onerror = () => fail(v.error.message); });
                const out = [v.duration];
                for (const t of times) {
                    v.currentTime = t;
                    await new Promise(done => { v.onseeked = done; });
                    x.drawImage(v, 0, 0, 64, 48);
                    out.push(Array.from(x.getImageData(30, 20, 1, 1).data));
                }
                return out;
            }""",
            [source, [t + 0.04 for t in times]],
        )
        browser.close()
    assert duration == pytest.approx(1.7, abs=0.002)
    for i, (r, g, b, _) in enumerate(pictures):
        assert (r, g, b) == pytest.approx((200, 30, 60) if i % 2 else (20, 180, 90), abs=5), times[i]
