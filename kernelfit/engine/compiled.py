"""How the hot loops are compiled: one decorator, machine code kept on disk between runs.

numba keys a kept function by the time stamp of its own file alone. A change in one file of this folder would leave
callers in other files running the old code, silently, also after an upgrade. So the key here is a digest of every
source file of the folder, and of the links, whose codes are frozen into the machine code.
"""

from __future__ import annotations

import hashlib
from collections.abc import Callable
from pathlib import Path
from typing import Any

from numba import njit

# reorder sums and contract products, always in the same way for the same shapes; NaN and inf keep their meaning
RELAXED = {"contract", "reassoc", "nsz"}


def _digest() -> str:
    here = Path(__file__).parent
    sources = [*sorted(here.glob("*.py")), here.parent / "model" / "links.py"]
    return hashlib.sha256(b"".join(p.read_bytes() for p in sources)).hexdigest()


_DIGEST = _digest()


def _compile(function: Callable[..., Any], relaxed: set[str], inline: str) -> Any:
    options: dict[str, Any] = {"nogil": True, "error_model": "numpy", "fastmath": relaxed, "inline": inline}
    dispatcher = njit(cache=True, **options)(function)
    try:
        dispatcher._cache._cache_file._source_stamp = _DIGEST
    except AttributeError:  # a numba that keeps its cache differently: compile anew rather than risk stale code
        return njit(**options)(function)
    return dispatcher


def compiled(function: Callable[..., Any]) -> Any:
    """Compile a loop for arrays; callable from other compiled code, releases the interpreter lock."""
    return _compile(function, RELAXED, "never")


def compiled_in_order(function: Callable[..., Any]) -> Any:
    """The same with every operation in the order written, for what rests on rounding."""
    return _compile(function, {"contract"}, "never")


def inlined(function: Callable[..., Any]) -> Any:
    """The same, its body copied into each caller: for what is called once a bin."""
    return _compile(function, RELAXED, "always")
