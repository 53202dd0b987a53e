"""Two folders exchanged in one step, where the system can: there is no moment without either."""

from __future__ import annotations

import ctypes
import os
import sys
from pathlib import Path

_AT_FDCWD = {"linux": -100, "darwin": -2}
_EXCHANGE = 2
"""``RENAME_EXCHANGE`` of Linux (renameat2(2)), and ``RENAME_SWAP`` of macOS (renameatx_np(2))."""


def exchange_folders(first: Path, second: Path) -> bool:
    """Exchange two folders of one file system in one step.

    Returns
    -------
    bool
        Whether it was done; ``False`` where the system or the file system does not know how. Nothing is
        changed then.
    """
    call = {"linux": "renameat2", "darwin": "renameatx_np"}.get(sys.platform)
    rename = getattr(_library(), call, None) if call is not None else None
    if rename is None:
        return False
    here = _AT_FDCWD[sys.platform]
    rename.argtypes = [ctypes.c_int, ctypes.c_char_p, ctypes.c_int, ctypes.c_char_p, ctypes.c_uint]
    return bool(rename(here, os.fsencode(first), here, os.fsencode(second), _EXCHANGE) == 0)


def _library() -> ctypes.CDLL:
    return ctypes.CDLL(None, use_errno=True)
