"""What a damaged input is, and the ways to damage bytes that all formats share."""

from __future__ import annotations

import struct
import zlib
from dataclasses import dataclass, field

HERE = "{here}"  # the case's own folder, in arguments


@dataclass
class Case:
    """One command on damaged files, and how it may end: 3 not readable; 1 read and refused; 0 done."""

    name: str
    files: dict[str, bytes]
    arguments: list[str]
    statuses: tuple[int, ...] = (3,)
    folders: list[str] = field(default_factory=list)


def put(data, at, form, *values):
    made = bytearray(data)
    struct.pack_into(form, made, at, *values)
    return bytes(made)


def cut(data, share):
    return data[: int(len(data) * share)]


def flipped(data, at, bit):
    made = bytearray(data)
    made[at] ^= 1 << bit
    return bytes(made)


def zeros_packed(megabytes):
    """A gzip stream of zeros that takes next to no time to make; its checksum is wrong, which comes last."""
    packer = zlib.compressobj(9, zlib.DEFLATED, -15)
    block = packer.compress(bytes(2**20)) + packer.flush(zlib.Z_FULL_FLUSH)
    return b"\x1f\x8b\x08\0\0\0\0\0\0\xff" + block * megabytes


def screened(name):
    return ["screen", f"{HERE}/{name}", "--quiet"]
