"""Where power goes that the ports of a station accept: the sky, wires, loads and networks, and the ground."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from elbowroom.base.arrays import ComplexArray, FloatArray
from elbowroom.base.constants import IMPEDANCE_OF_VACUUM
from elbowroom.geometry.directions import Directions
from elbowroom.radiation.beams import current_beams
from elbowroom.radiation.patterns import CHUNK_DIRECTIONS, station_patterns
from elbowroom.radiation.power_quadrature import power_sphere
from elbowroom.system.discretisation import Discretisation, attachments, extent_of
from elbowroom.system.plane_waves import direction_frame
from elbowroom.system.self_block import lumped_loads, wire_loss
from elbowroom.system.spaces import CurrentSpace

POWER_DIGITS = 6.0
"""Digits of a field that the quadrature of its power is made for."""


@dataclass(frozen=True)
class PowerParts:
    """Powers of some excitations, each float64 (B,) [W], effective values.

    Attributes
    ----------
    accepted : float64 (B,)
        Net power into all ports; what terminations of other ports take is taken off.
    radiated : float64 (B,)
        Through the sky: by quadrature of the far field, unless it was to be the rest.
    wires : float64 (B,)
        Heat in the metal of the antennas' wires.
    loads : float64 (B,)
        Heat in lumped loads.
    networks : float64 (B,)
        Heat in feeds, lines and other networks.
    ground : float64 (B,)
        What goes into a lossy ground: the rest.  Zero over free space or a perfect plane.
    unaccounted : float64 (B,)
        The rest where no ground takes it: the error of the model's power balance.  Zero over a lossy ground, whose part holds it.
    """

    accepted: FloatArray
    radiated: FloatArray
    wires: FloatArray
    loads: FloatArray
    networks: FloatArray
    ground: FloatArray
    unaccounted: FloatArray

    def fraction(self, part: str) -> FloatArray:
        """Return a part over the accepted power; NaN where none is accepted."""
        accepted = np.where(self.accepted > 0.0, self.accepted, np.nan)
        return np.asarray(getattr(self, part) / accepted)

    @property
    def radiation_efficiency(self) -> FloatArray:
        """Radiated over accepted power."""
        return self.fraction("radiated")


def power_directions(discretisation: Discretisation) -> Directions:
    """Return directions and weights that integrate the power of any field of a station; see :func:`power_sphere`."""
    ground, extent = discretisation.station.ground, extent_of(discretisation.station)
    # an image stands as far below the ground as the antenna above
    tall = extent.highest_m if not ground.open_below else 0.5 * (extent.highest_m - extent.lowest_m)
    size = discretisation.wavenumber * float(np.hypot(0.5 * extent.widest_m, tall))
    return power_sphere(discretisation, size, POWER_DIGITS)


def power_parts(
    discretisation: Discretisation,
    space: CurrentSpace,
    currents: ComplexArray,
    reference_ohm: float,
    voltage: ComplexArray,
    current: ComplexArray,
    *,
    integrate_sky: bool = True,
) -> PowerParts:
    """Return where power goes for given voltages and currents of all ports.

    Parameters
    ----------
    discretisation : Discretisation
        The meshed station.
    space : CurrentSpace
        Coordinates of the currents.
    currents : complex128 (n, P)
        Of 1 V behind each port's reference resistance.
    reference_ohm : float
        That resistance [ohm].
    voltage, current : complex128 (B, P)
        At the ports [V], [A]; effective values.
    integrate_sky : bool, optional
        Whether to integrate the far field where no ground takes power, too, which tells the error of the power balance; without,
        what is left of the accepted power counts as radiated there.
    """
    d = discretisation
    source = (voltage + reference_ohm * current).T
    coordinates = currents @ source
    unknowns = space.unknowns(d, coordinates)
    accepted = np.sum((voltage * current.conj()).real, axis=1)
    attached = attachments(d, reference_ohm)
    wires, loads, entered = (np.zeros(len(voltage)) for _ in range(3))
    losses: dict[tuple[int, int], tuple[FloatArray, FloatArray]] = {}
    for a, k in enumerate(d.kind_of):
        kind, mine = d.kinds[k], unknowns[d.unknowns_of(a)]
        key = (id(kind.antenna), id(kind.mesh))
        if key not in losses:
            losses[key] = (
                wire_loss(kind.antenna, kind.mesh, d.frequency_hz).real,
                lumped_loads(kind.antenna, kind.mesh, d.frequency_hz).real,
            )
        for total, matrix in zip((wires, loads), losses[key], strict=True):
            total += np.sum((mine.conj() * (matrix @ mine)).real, axis=0)
        ports = attached[kind.antenna]
        gap_current = kind.mesh.gap_vectors @ mine
        gap_voltage = ports.transfer @ source[d.ports_of(a)] - ports.loading @ gap_current
        entered += np.sum((gap_voltage * gap_current.conj()).real, axis=0)
    lossy = d.station.ground.lossy
    radiated = _radiated(d, space, coordinates) if lossy or integrate_sky else entered - wires - loads
    rest = entered - radiated - wires - loads
    nothing = np.zeros_like(rest)
    return PowerParts(
        accepted, radiated, wires, loads, accepted - entered, rest if lossy else nothing, nothing if lossy else rest
    )


def _radiated(d: Discretisation, space: CurrentSpace, coordinates: ComplexArray) -> FloatArray:
    """Return the power (B,) [W] that effective currents (n, B) send through the sky."""
    sky = power_directions(d)
    frame = direction_frame(sky.theta_rad, sky.phi_rad)
    assert sky.weights_sr is not None  # of a quadrature
    weights = sky.weights_sr
    total = np.zeros(coordinates.shape[1])
    # Beam by beam, or all at once: the second pays from about a dozen on.
    evaluate = current_beams if coordinates.shape[1] < 12 else station_patterns
    for first in range(0, frame.count, CHUNK_DIRECTIONS):
        rows = slice(first, min(first + CHUNK_DIRECTIONS, frame.count))
        field = evaluate(d, coordinates, frame.part(rows), space=space)
        total += np.sum(np.abs(field) ** 2, axis=-1) @ weights[rows]
    # |E| = k eta |F|/(4 pi r), and |E|^2/eta through the sphere
    return np.asarray(d.wavenumber**2 * IMPEDANCE_OF_VACUUM / (4.0 * np.pi) ** 2 * total)
