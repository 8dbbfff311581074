"""How large a packed frame says it is, read before it is unpacked: decoders take memory for what it says.

JPEG and JPEG-LS: the frame header SOF (ISO/IEC 10918-1 B.2.2; 14495-1 C.2.2).  JPEG 2000: the marker SIZ
(ISO/IEC 15444-1 A.5.1).  Both from memory.
"""

from __future__ import annotations

_JPEG, _JPEG_2000 = b"\xff\xd8\xff", b"\xff\x4f\xff\x51"  # SOI and another marker; SOC and SIZ
_FRAME_HEADERS = frozenset({*range(0xC0, 0xD0), 0xF7} - {0xC4, 0xC8, 0xCC})
_WITHOUT_LENGTH = frozenset({0x01, *range(0xD0, 0xD9)})
_SCAN = 0xDA


def packed_size(frame: bytes) -> tuple[int, int] | None:
    """Rows and columns of a frame packed by JPEG, JPEG-LS or JPEG 2000; None when it does not say.

    Parameters
    ----------
    frame : bytes
    """
    if frame[:3] == _JPEG:
        return _of_jpeg(frame)
    at = frame.find(_JPEG_2000, 0, 4096)  # at once, or inside the boxes of a JP2 file
    if at < 0 or len(frame) < at + 24:
        return None
    right, lower, left, upper = (_number(frame, at + 8 + 4 * k, 4) for k in range(4))
    return lower - upper, right - left


def _of_jpeg(frame: bytes) -> tuple[int, int] | None:
    at = 2
    while at + 9 <= len(frame) and frame[at] == 0xFF:
        marker = frame[at + 1]
        if marker in _FRAME_HEADERS:
            return _number(frame, at + 5, 2), _number(frame, at + 7, 2)
        if marker == _SCAN:
            return None
        at += 1 if marker == 0xFF else 2 if marker in _WITHOUT_LENGTH else 2 + _number(frame, at + 2, 2)
    return None


def _number(frame: bytes, at: int, n_bytes: int) -> int:
    return int.from_bytes(frame[at : at + n_bytes], "big")
