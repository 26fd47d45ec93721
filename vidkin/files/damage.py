"""Which pictures of a damaged file can be trusted: broken packets, decoder faults, and all that builds on them."""

from __future__ import annotations

import math
from typing import Any, Final

import av

#: No coded picture holds so long a run of one byte: it is a wiped or erased block. (ITU-T H.264 7.4.1 and H.265 7.4.2
#: forbid even three zeros; phones were seen to put start codes inside a unit and up to 15 zeros at its end.)
_RUNS: Final = (bytes(32), b"\xff" * 64)
_PADDING: Final = 64


def length_bytes(codec: str, extradata: bytes | None) -> int:
    """Size of the length before each coded unit (ISO/IEC 14496-15 configuration record); 0: units are not so marked."""
    data = extradata or b""
    if codec == "h264" and len(data) > 6 and data[0] == 1:
        return (data[4] & 3) + 1
    if codec == "hevc" and len(data) > 22 and data[0] == 1:
        return (data[21] & 3) + 1
    return 0


def intact(packet: bytes, codec: str, length: int) -> bool:
    """True if a packet's coded units fill it exactly and those of pictures hold no wiped block.

    Decoders play over such a block without a word, and show a wrong picture.
    """
    at = 0
    while at < len(packet):
        end = at + length + int.from_bytes(packet[at : at + length], "big")
        unit = packet[at + length : end]
        if end > len(packet) or not unit:
            return False
        coded = unit.rstrip(b"\x00")
        if _is_picture(unit[0], codec) and (len(unit) - len(coded) > _PADDING or any(run in coded for run in _RUNS)):
            return False
        at = end
    return True


def _is_picture(head: int, codec: str) -> bool:
    """True for a unit that codes part of a picture, by its first byte (H.264 table 7-1, H.265 table 7-1)."""
    return 1 <= head & 31 <= 5 if codec == "h264" else head >> 1 & 63 < 32


class Damage:
    """Keeps track, in decoding order, of packets whose pictures cannot be trusted.

    After a fault that is all up to the next key frame, since they build on the faulty one, and those after the key
    frame that are shown before it.
    """

    def __init__(self) -> None:
        self._order: dict[int | None, int] = {}
        self._keys: list[bool] = []
        self._bad: set[int] = set()
        self._broken = False
        self._floor = -math.inf

    def sent(self, packet: av.Packet[Any]) -> None:
        """Tell of a packet that goes to the decoder."""
        if self._broken and packet.is_keyframe:
            self._broken, self._floor = False, -math.inf if packet.pts is None else packet.pts
        self._order[packet.pts] = len(self._keys)
        if self._broken or (packet.pts is not None and packet.pts < self._floor):
            self._bad.add(len(self._keys))
        self._keys.append(packet.is_keyframe)

    def skipped(self, *, wiped: bool) -> None:
        """Tell of a packet that was not sent: cut off by the file's end, or wiped (perhaps with the one before)."""
        if wiped and self._keys:
            self._spoil(len(self._keys) - 1)
        self._broken = True

    def failed(self, lag: int) -> None:
        """Tell of a fault of the decoder, in one of the last `lag` packets."""
        self._spoil(max(0, len(self._keys) - lag))

    def spoils(self, picture: av.VideoFrame) -> bool:
        """True if this picture cannot be trusted."""
        order = self._order.get(picture.pts)
        if picture.is_corrupt and order is not None:
            self._spoil(order)
        return picture.is_corrupt or order in self._bad

    def _spoil(self, first: int) -> None:
        for order in range(first, len(self._keys)):
            if order > first and self._keys[order]:
                return
            self._bad.add(order)
        self._broken = True
