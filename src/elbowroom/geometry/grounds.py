"""What a station can stand on.

These classes only say which ground it is; the fields they cause are in ``elbowroom.kernels.grounds``.  A new
ground model is one class here and one there.
"""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True)
class FreeSpace:
    """No ground at all."""

    name = "free-space"


@dataclass(frozen=True)
class PerfectGround:
    """A perfectly conducting plane at z = 0 without end."""

    name = "perfect"


Ground = FreeSpace | PerfectGround
