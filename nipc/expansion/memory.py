"""Arrays too large for this machine are refused by name and size before they are made."""

from __future__ import annotations

import os
from functools import cache

from nipc.errors import FitError


@cache
def physical_memory() -> int:
    """Bytes of main memory of this machine (4 GiB where the system does not tell)."""
    try:
        return int(os.sysconf("SC_PAGE_SIZE")) * int(os.sysconf("SC_PHYS_PAGES"))
    except (AttributeError, ValueError, OSError):
        return 4 * 2**30


def refuse_beyond_memory(n_bytes: int, what: str) -> None:
    """Raise FitError when `what` would take more than three quarters of the main memory."""
    limit = 3 * physical_memory() // 4
    if n_bytes > limit:
        raise FitError(
            f"{what} would take {n_bytes / 2**30:.1f} GiB, more than the {limit / 2**30:.1f} GiB "
            "that may be used here; lower the degree or the norm exponent, or limit interactions"
        )
