"""New unique identifiers, the same for the same content, never those of an input.

A name is hashed and written as the decimal form of a UUID under the root 2.25 (PS3.5, B.2); the UUID is of
version 8, "custom", with SHA-256 as in RFC 9562, B.2.
"""

from __future__ import annotations

import hashlib
import re
from dataclasses import dataclass

from volmap.types.errors import InputError

_MOST_LETTERS = 64  # PS3.5, 9.1
_FORM = re.compile(r"(0|[1-9][0-9]*)(\.(0|[1-9][0-9]*))+")


@dataclass(frozen=True)
class ScanUids:
    """What all objects about one scan share.

    Parameters
    ----------
    study : str
        Study Instance UID.
    frame : str
        Frame of Reference UID.
    stated : bool
        True when the user named the frame of reference of their own images.
    """

    study: str
    frame: str
    stated: bool = False

    @property
    def origin(self) -> str:
        """Where the frame of reference comes from, in words."""
        return "as the user stated it" if self.stated else "new"


def new_uid(*words: str) -> str:
    """The identifier of these words, in this order.

    Parameters
    ----------
    *words : str
        Digests and roles.
    """
    hashed = bytearray(hashlib.sha256("\0".join(("volmap", *words)).encode("utf-8")).digest()[:16])
    hashed[6] = hashed[6] & 0x0F | 0x80  # version 8
    hashed[8] = hashed[8] & 0x3F | 0x80  # variant of RFC 9562
    return f"2.25.{int.from_bytes(bytes(hashed), 'big')}"


def uids_of_scan(sha256: str, *, frame_uid: str | None = None) -> ScanUids:
    """Study and frame of reference of a scan.

    Parameters
    ----------
    sha256 : str
        Digest of its voxels and affine.
    frame_uid : str, optional
        The frame of reference the user's own images of this scan are in; a new one otherwise.

    Raises
    ------
    InputError
        `frame_uid` is no UID.
    """
    if frame_uid is not None:
        return ScanUids(new_uid("study", sha256), required_uid(frame_uid), stated=True)
    return ScanUids(new_uid("study", sha256), new_uid("frame of reference", sha256))


def required_uid(text: str) -> str:
    """The text, if it is a UID.

    Raises
    ------
    InputError
    """
    if len(text) > _MOST_LETTERS or not _FORM.fullmatch(text):
        raise InputError(
            "is not a UID",
            where=text[:_MOST_LETTERS],
            expected="numbers between dots, no leading zeros, at most 64 characters",
            remedy="copy Frame of Reference UID (0020,0052) from the images",
        )
    return text
