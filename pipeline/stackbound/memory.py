"""Keep memory that was used once: new pages cost a tile as much time as half of the arithmetic in it."""

from __future__ import annotations

import numpy as np

LARGEST = 30 * 2**20
"""Bytes. Blocks up to this size are taken from memory in hand; the C library of Linux learns no larger value."""


def keep() -> None:
    """Let the C library keep freed blocks for the next tile.

    That of Linux asks the system anew for each block larger than the largest one freed so far, and gives memory back
    when twice as much is unused. Freeing one large block, which is never touched and so takes no memory, raises both.
    Elsewhere this does nothing.
    """
    np.empty(LARGEST, np.uint8)
