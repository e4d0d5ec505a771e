"""What a station can stand on.

These classes only say which ground it is and what follows for geometry; the fields they cause are in
``elbowroom.kernels.grounds``.  A new ground model is one class here and one there, and everything else asks their properties.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar


@dataclass(frozen=True)
class FreeSpace:
    """No ground at all."""

    name: ClassVar[str] = "free-space"
    open_below: ClassVar[bool] = True
    """Whether waves arrive from, and go, below the horizon, and wires may reach below z = 0."""
    conducting: ClassVar[bool] = False
    """Whether wires may end on z = 0 and are joined to the ground there."""


@dataclass(frozen=True)
class PerfectGround:
    """A perfectly conducting plane at z = 0 without end."""

    name: ClassVar[str] = "perfect"
    open_below: ClassVar[bool] = False
    conducting: ClassVar[bool] = True


Ground = FreeSpace | PerfectGround

GROUNDS: dict[str, Ground] = {ground.name: ground for ground in (PerfectGround(), FreeSpace())}
"""Grounds by the names that job files and commands use."""
