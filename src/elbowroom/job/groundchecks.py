"""Doubts about a real ground under a station, with their numbers."""

from __future__ import annotations

from collections.abc import Iterator, Sequence

import numpy as np

from elbowroom.base.constants import VACUUM_PERMITTIVITY, wavelength_of, wavenumber_of
from elbowroom.base.errors import ModelRangeError
from elbowroom.geometry.grounds import FreeSpace, MeshOnSoil, PerfectGround
from elbowroom.geometry.soils import EvenSoil, LayeredSoil, Soil
from elbowroom.geometry.stations import Station

LOWEST_OVER_SOIL_M = 0.04
"""Height of wires over soil below which its kernels turn logarithmic: tables grow and lose digits [m]."""

LATERAL_NEPERS = 3.0
"""Attenuation in the soil across the station below which the wave that runs in it is still there on the other side."""

LOW_BEAM_DEG = 80.0
"""Zenith angle from which the far field over soil is no longer what is met at finite range."""

HORIZON_NOTE = (
    "Over soil the far field vanishes at the horizon; close to it the next term of the field, falling as the square of the "
    "range, is what is met: at 150 MHz, a zenith angle of 85 degrees and a range of 100 m it is a tenth of the far field in "
    "vertical polarisation over soil (10, 0.01 S/m), a quarter over mesh on it."
)


def ground_doubts(station: Station, frequencies_hz: Sequence[float]) -> Iterator[str]:
    """Yield what is doubtful about the ground of a station, one line each; nothing over free space or a perfect plane.

    Parameters
    ----------
    station : Station
        Antennas and ground.
    frequencies_hz : sequence of float
        Frequencies it is to be solved at [Hz].
    """
    ground = station.ground
    if isinstance(ground, FreeSpace | PerfectGround):
        return
    low, lowest = _lowest_wire(station)
    if low < LOWEST_OVER_SOIL_M:
        yield (
            f"{lowest} comes within {low * 1e3:.3g} mm of the soil; below {LOWEST_OVER_SOIL_M * 1e3:g} mm the tables of its "
            "kernels grow, and real soil is neither flat nor even on that scale"
        )
    if isinstance(ground, MeshOnSoil) and low < ground.pitch_m:
        yield (
            f"{lowest} comes within {low * 1e3:.3g} mm of the mesh, less than its pitch ({ground.pitch_m * 1e3:.3g} mm); so low "
            "an antenna meets single wires of it, which the model averages"
        )
    if isinstance(ground, MeshOnSoil) and isinstance(ground.soil, LayeredSoil) and ground.soil.layers[0][0] < ground.pitch_m:
        yield (
            f"top layer of the soil {ground.soil.layers[0][0]:.3g} m, thinner than the pitch of the mesh on it "
            f"({ground.pitch_m:.3g} m); the fields of single wires reach below it, and the model counts the top layer alone"
        )
    yield from _quick_reflection(station, frequencies_hz)
    worst: dict[str, tuple[float, str]] = {}
    for frequency in frequencies_hz:
        try:
            here = ground.at(frequency)
        except ModelRangeError:
            # told where the job is read, and again where it is solved
            continue
        assert isinstance(here, Soil | LayeredSoil | MeshOnSoil)
        indices = [_index(soil.at(frequency), frequency) for _, soil in here.strata]
        inside = wavelength_of(frequency) / float(indices[0].real)
        if isinstance(here, MeshOnSoil) and here.pitch_m > 0.25 * inside:
            text = (
                f"pitch of the mesh {here.pitch_m * 1e3:.4g} mm, at {frequency / 1e6:.6g} MHz {here.pitch_m / inside:.3g} "
                f"wavelengths in the soil ({inside:.3g} m); the averaged boundary condition holds up to a quarter"
            )
            _keep(worst, "pitch", here.pitch_m / inside, text)
        across = _width(station)
        # The layer that carries a wave farthest; soil that is air carries none of its own.
        index = min((n for n in indices if n.real > 1.0), key=lambda n: -n.imag, default=None)
        if index is None:
            continue
        nepers, inside = -float(index.imag) * wavenumber_of(frequency) * across, wavelength_of(frequency) / float(index.real)
        if nepers < LATERAL_NEPERS and across > 2.0 * inside:
            text = (
                f"soil that hardly loses power: at {frequency / 1e6:.6g} MHz a wave in it falls by {nepers * 8.686:.2g} dB "
                f"across the station's {across:.3g} m, over {across / inside:.3g} wavelengths; tables of the kernels grow to "
                "follow it"
            )
            _keep(worst, "lateral", 1.0 / max(nepers, 1e-9), text)
    for _, text in worst.values():
        yield text


def _quick_reflection(station: Station, frequencies_hz: Sequence[float]) -> Iterator[str]:
    """Yield what the integration of radiated power cannot follow, at the lowest or the highest frequency.

    Echoes of layers turn more quickly the higher the frequency, the fields along a fine mesh the lower.
    """
    from elbowroom.kernels.lossy_grounds import ground_response
    from elbowroom.radiation.power_quadrature import reflection_degree, unresolved_reflection

    for frequency in sorted({min(frequencies_hz), max(frequencies_hz)}, reverse=True):
        try:
            response = ground_response(station.ground, frequency)
        except ModelRangeError:
            continue  # told where the job is read
        text = unresolved_reflection(*reflection_degree(response.reflection))
        if text is not None:
            yield f"at {frequency / 1e6:.6g} MHz {text}"
            return


def _index(soil: EvenSoil, frequency_hz: float) -> complex:
    """Return the refractive index of even soil at a frequency [Hz]."""
    here = soil.at(frequency_hz)
    loss = here.conductivity_s_per_m / (2.0 * np.pi * frequency_hz * VACUUM_PERMITTIVITY)
    return complex(np.sqrt(here.relative_permittivity - 1j * loss))


def _keep(worst: dict[str, tuple[float, str]], kind: str, size: float, text: str) -> None:
    if kind not in worst or size > worst[kind][0]:
        worst[kind] = (size, text)


def _lowest_wire(station: Station) -> tuple[float, str]:
    """Return the smallest height of a wire [m], and which it is."""
    best, where = np.inf, ""
    for placed in station:
        heights = placed.to_station(np.array([[w.start, w.end] for w in placed.antenna.wires]))[..., 2].min(axis=1)
        index = int(np.argmin(heights))
        if heights[index] < best:
            best, where = float(heights[index]), f"antenna {placed.name!r} ({placed.antenna.name!r}), wire {index}"
    return best, where


def _width(station: Station) -> float:
    """Return the diagonal of the rectangle that holds the antennas [m]."""
    return float(np.hypot(*np.ptp(station.positions[:, :2], axis=0)))
