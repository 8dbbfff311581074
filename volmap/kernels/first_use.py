"""Whether this machine has compiled the kernels before."""

from __future__ import annotations

from pathlib import Path

from volmap.kernels.distortion import _distort


def not_compiled_yet() -> bool:
    """True when numba's cache does not hold the largest kernel for this Python yet."""
    cache = getattr(_distort, "_cache", None)
    folder = Path(getattr(cache, "cache_path", "") or ".")
    return not any(folder.glob("distortion._distort-*.nbi"))
