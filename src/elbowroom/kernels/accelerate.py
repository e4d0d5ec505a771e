"""Compiler options of every compiled loop, in one place."""

from __future__ import annotations

from typing import Any

JIT_OPTIONS: dict[str, Any] = {"nogil": True, "error_model": "numpy", "cache": True}
"""Plain loops: the interpreter lock is released, so that two Python threads each run one; division is not checked,
because the check keeps a loop from being vectorised; compiled code is kept between runs."""

FAST_JIT_OPTIONS: dict[str, Any] = {**JIT_OPTIONS, "fastmath": {"contract", "reassoc", "nsz", "arcp", "afn"}}
"""Loops that may fuse and reorder operations.  The flags that let the compiler assume finite values are left out."""
