# Which pictures are trusted after a fault, and which packets hold a wiped block.
from __future__ import annotations

from collections.abc import Callable, Iterator
from pathlib import Path
from types import SimpleNamespace
from typing import Any

import av
import pytest

from vidkin.errors import FootageError
from vidkin.files import container
from vidkin.files.damage import Damage, intact, length_bytes
from vidkin.files.video import open_clip


def packet(pts: int, *, key: bool = False) -> Any:
    return SimpleNamespace(pts=pts, is_keyframe=key)


def picture(pts: int, *, corrupt: bool = False) -> Any:
    return SimpleNamespace(pts=pts, is_corrupt=corrupt)


def trusted(damage: Damage, stamps: range | list[int]) -> list[int]:
    return [pts for pts in stamps if not damage.spoils(picture(pts))]


def test_nothing_is_lost_without_a_fault() -> None:
    damage = Damage()
    for pts in range(10):
        damage.sent(packet(pts, key=pts % 5 == 0))
    assert trusted(damage, range(10)) == list(range(10))


def test_after_a_missing_packet_all_is_doubted_up_to_the_next_key_frame() -> None:
    damage = Damage()
    for pts in range(15):
        if pts == 6:
            damage.skipped(wiped=False)
        else:
            damage.sent(packet(pts, key=pts % 5 == 0))
    assert trusted(damage, [p for p in range(15) if p != 6]) == [0, 1, 2, 3, 4, 5, 10, 11, 12, 13, 14]


def test_a_wiped_packet_makes_the_one_before_doubtful() -> None:
    damage = Damage()
    for pts in range(10):
        if pts == 7:
            damage.skipped(wiped=True)
        else:
            damage.sent(packet(pts, key=pts % 5 == 0))
    assert trusted(damage, [p for p in range(10) if p != 7]) == [0, 1, 2, 3, 4, 5]


def test_pictures_held_back_before_a_fault_are_kept() -> None:
    damage = Damage()
    for pts in (0, 3, 1, 2):  # decoding order; 1 and 2 are shown before 3
        damage.sent(packet(pts, key=pts == 0))
    damage.skipped(wiped=False)
    damage.sent(packet(6))
    assert trusted(damage, [0, 1, 2, 3, 6]) == [0, 1, 2, 3]


def test_pictures_shown_before_a_key_frame_that_ends_the_doubt_stay_doubtful() -> None:
    damage = Damage()
    damage.sent(packet(0, key=True))
    damage.skipped(wiped=False)
    damage.sent(packet(10, key=True))
    damage.sent(packet(8))  # built on both the key frame and what was before it
    damage.sent(packet(12))
    assert trusted(damage, [0, 8, 10, 12]) == [0, 10, 12]


def test_a_picture_that_the_decoder_calls_corrupt_spoils_what_follows() -> None:
    damage = Damage()
    for pts in range(10):
        damage.sent(packet(pts, key=pts % 5 == 0))
    assert not damage.spoils(picture(1))
    assert damage.spoils(picture(2, corrupt=True))
    assert trusted(damage, range(3, 10)) == [5, 6, 7, 8, 9]
    assert damage.spoils(picture(99, corrupt=True))  # one whose packet is not known


def test_a_failing_decoder_makes_its_last_packets_doubtful() -> None:
    damage = Damage()
    for pts in range(4):
        damage.sent(packet(pts, key=pts == 0))
    damage.failed(2)
    damage.sent(packet(4))
    damage.sent(packet(5, key=True))
    assert trusted(damage, range(6)) == [0, 1, 5]


def unit(head: int, body: bytes, length: int = 4) -> bytes:
    return (len(body) + 1).to_bytes(length, "big") + bytes([head]) + body


@pytest.mark.parametrize(("codec", "slice_head", "other_head"), [("h264", 0x65, 0x06), ("hevc", 0x26, 0x4E)])
def test_a_wiped_block_shows(codec: str, slice_head: int, other_head: int) -> None:
    body = bytes(range(1, 250)) * 4
    good = unit(other_head, b"\xff" * 300) + unit(slice_head, body)  # filler and messages may hold anything
    assert intact(good, codec, 4)
    assert intact(unit(slice_head, body, 2), codec, 2)
    assert intact(unit(slice_head, body + bytes(15)), codec, 4)  # phones pad up to 16 bytes
    assert intact(unit(slice_head, b"\x00\x00\x00\x01\x06\x05" + body), codec, 4)  # and put start codes inside
    for run in (bytes(100), b"\xff" * 100):
        assert not intact(unit(slice_head, body[:300] + run + body[400:]), codec, 4)
    assert not intact(unit(slice_head, body + bytes(200)), codec, 4)
    assert not intact(good[:-1], codec, 4)
    assert not intact(good + b"\x00\x00\x00\x00", codec, 4)


def test_where_units_have_no_length_nothing_is_checked() -> None:
    # ISO/IEC 14496-15: avcC byte 4 and hvcC byte 21 hold lengthSizeMinusOne in their last two bits
    assert length_bytes("h264", bytes([1, 100, 0, 30, 0xFF, 0xE1, 0, 4])) == 4
    assert length_bytes("hevc", bytes([1] + [0] * 20 + [0xFD, 3])) == 2
    assert length_bytes("h264", b"\x00\x00\x00\x01\x67\x64\x00\x1e") == 0
    assert length_bytes("mpeg4", b"\x01" * 40) == 0
    assert length_bytes("hevc", None) == 0


def test_a_fault_of_the_decoder_is_counted(make_clip: Callable[..., Path], monkeypatch: pytest.MonkeyPatch) -> None:
    path = make_clip(gop=10)
    real = container._packets

    def garbled(*args: Any) -> Iterator[Any]:
        for number, one in enumerate(real(*args)):
            if number == 15:
                bad = av.Packet(b"\x00\x00\x00\x02\x65\x00")  # a slice cut after its first byte
                bad.pts, bad.dts, bad.time_base, bad.stream = one.pts, one.dts, one.time_base, one.stream
                yield bad
            else:
                yield one

    monkeypatch.setattr(container, "_packets", garbled)
    clip = open_clip(path)
    said = [n.text for n in clip.footage.notices if n.code == "frames_lost"]
    assert said
    assert 15 <= clip.footage.t_s.size < 30
    assert f"{30 - clip.footage.t_s.size} of 30 pictures are missing or damaged" in said[0]


def test_a_container_that_breaks_off(make_clip: Callable[..., Path], monkeypatch: pytest.MonkeyPatch) -> None:
    path = make_clip()
    real = container._opened

    class Broken:  # demuxing fails at packet `limit`
        def __init__(self, inner: Any, limit: int) -> None:
            self.inner, self.limit = inner, limit

        def __getattr__(self, name: str) -> Any:
            return getattr(self.inner, name)

        def __enter__(self) -> Any:
            return self

        def __exit__(self, *_: object) -> None:
            self.inner.close()

        def demux(self, stream: Any) -> Iterator[Any]:
            for number, one in enumerate(self.inner.demux(stream)):
                if number == self.limit:
                    raise av.error.InvalidDataError(1, "broken")
                yield one

    monkeypatch.setattr(container, "_opened", lambda p: Broken(real(p), 20))
    clip = open_clip(path)
    assert clip.footage.t_s.size == 20
    assert "10 of 30 pictures are missing or damaged" in next(n.text for n in clip.footage.notices)
    monkeypatch.setattr(container, "_opened", lambda p: Broken(real(p), 12))
    with pytest.raises(FootageError, match="18 of its 30 pictures are missing or damaged"):
        open_clip(path)
