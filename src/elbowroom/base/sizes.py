"""Numbers of bytes in words."""

from __future__ import annotations


def readable_bytes(count: float) -> str:
    """Return a number of bytes for people: ``3.2 GB``, powers of 1000."""
    for unit in ("byte", "kB", "MB", "GB"):
        if abs(count) < 999.5:
            return f"{count:.0f} {unit}" if unit == "byte" else f"{count:.3g} {unit}"
        count /= 1000.0
    return f"{count:.3g} TB"
