"""How the process handles freed memory."""

from __future__ import annotations

import ctypes

__all__ = ["keep_freed_memory"]

_M_TRIM_THRESHOLD, _M_MMAP_THRESHOLD = -1, -3  # from glibc's malloc.h


def keep_freed_memory() -> bool:
    """Let glibc reuse freed arrays of up to 32 MB instead of returning them to the kernel.

    Matrices of a few hundred rows are made and dropped thousands of times; fetching their pages
    anew each time takes longer than the arithmetic. Returns whether the setting was taken; other C
    libraries are left alone.
    """
    try:
        mallopt = ctypes.CDLL(None).mallopt
    except (AttributeError, OSError, TypeError):
        return False
    return bool(mallopt(_M_MMAP_THRESHOLD, 32 << 20) and mallopt(_M_TRIM_THRESHOLD, 128 << 20))
