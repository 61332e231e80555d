"""Keep the memory of freed arrays with the process."""

from __future__ import annotations

import ctypes
import sys

_TRIM_THRESHOLD, _TOP_PAD, _MMAP_THRESHOLD = -1, -2, -3  # of mallopt(3)
_MEGABYTE = 1 << 20


def keep_freed_memory() -> None:
    """Ask the C library not to hand freed blocks back to the system at once.

    The likelihood makes and frees arrays of about a megabyte all the time. Where glibc returns each of them, every
    new one is paid for in page faults: measured, 1.8 times the time of a fit. Elsewhere than on glibc nothing is done.
    """
    if sys.platform != "linux":
        return
    try:
        mallopt = ctypes.CDLL(None).mallopt
    except (OSError, AttributeError):  # another C library
        return
    for option, size in ((_MMAP_THRESHOLD, 32), (_TRIM_THRESHOLD, 512), (_TOP_PAD, 64)):
        mallopt(option, size * _MEGABYTE)
