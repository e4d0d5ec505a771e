"""Mutual coupling, embedded element patterns and station beams of wire-antenna arrays.

The public names are loaded when they are first used, so that ``import elbowroom`` and ``elbowroom --help`` stay quick.
"""

from __future__ import annotations

from importlib import import_module
from typing import Any

__version__ = "0.1.0"

_HOMES = {
    "Wire": "elbowroom.geometry.wires",
    "Antenna": "elbowroom.geometry.antennas",
    "Port": "elbowroom.geometry.antennas",
    "Load": "elbowroom.geometry.antennas",
    "FeedPoint": "elbowroom.geometry.networks",
    "Network": "elbowroom.geometry.networks",
    "Line": "elbowroom.geometry.networks",
    "Stub": "elbowroom.geometry.networks",
    "Branch": "elbowroom.geometry.networks",
    "Transformer": "elbowroom.geometry.networks",
    "Placed": "elbowroom.geometry.stations",
    "Station": "elbowroom.geometry.stations",
    "FreeSpace": "elbowroom.geometry.grounds",
    "PerfectGround": "elbowroom.geometry.grounds",
    "Soil": "elbowroom.geometry.soils",
    "TabulatedSoil": "elbowroom.geometry.soils",
    "MoistSoil": "elbowroom.geometry.soils",
    "LayeredSoil": "elbowroom.geometry.soils",
    "MeshOnSoil": "elbowroom.geometry.grounds",
    "MeshSettings": "elbowroom.geometry.mesh",
    "crossed_dipoles": "elbowroom.geometry.shapes",
    "dipole": "elbowroom.geometry.shapes",
    "folded_dipole": "elbowroom.geometry.shapes",
    "bow_tie": "elbowroom.geometry.shapes",
    "polygonal_loop": "elbowroom.geometry.shapes",
    "monopole": "elbowroom.geometry.shapes",
    "log_periodic": "elbowroom.geometry.shapes",
    "read_antenna": "elbowroom.job.antennafile",
    "Layout": "elbowroom.geometry.layouts",
    "read_layout": "elbowroom.geometry.layouts",
    "write_layout": "elbowroom.geometry.layouts",
    "random_disc": "elbowroom.geometry.arrangements",
    "hemisphere_grid": "elbowroom.geometry.directions",
    "sphere_quadrature": "elbowroom.geometry.directions",
    "cut": "elbowroom.geometry.directions",
    "ludwig3": "elbowroom.geometry.directions",
    "SeriesCircuit": "elbowroom.system.terminations",
    "ParallelCircuit": "elbowroom.system.terminations",
    "SampledReflection": "elbowroom.system.terminations",
    "solve": "elbowroom.job.solve",
    "Solution": "elbowroom.radiation.solution",
    "ElbowroomError": "elbowroom.base.errors",
}

__all__ = [*_HOMES, "__version__"]


def __getattr__(name: str) -> Any:
    """Load a public name from where it lives."""
    if name not in _HOMES:
        msg = f"module 'elbowroom' has no attribute {name!r}"
        raise AttributeError(msg)
    return getattr(import_module(_HOMES[name]), name)


def __dir__() -> list[str]:
    """Return the public names."""
    return sorted(__all__)
