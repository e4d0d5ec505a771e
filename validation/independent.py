"""What a check needs of a solved station, written a second time: basis, fields and circuits by other means than the package's.

Taken over from the package are the mesh, the expansion of unknowns in local functions and the assembled matrix.  The local
functions, integrals along and around the wires, incident fields, gap means, open circuits and moved stations are done here.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.polynomial import legendre
from scipy.special import j0

from elbowroom.base.constants import IMPEDANCE_OF_VACUUM
from elbowroom.geometry.antennas import Antenna
from elbowroom.geometry.grounds import PerfectGround
from elbowroom.geometry.stations import Placed, Station
from elbowroom.geometry.wires import Wire
from elbowroom.system.assembly import assemble

RING = (np.arange(12) + 0.5) * (2.0 * np.pi / 12)
"""Angles round a wire: twelve integrate exp(j x cos) to J0(x) within 2 J12(x), below 1e-12 for x = ka sin psi < 0.6."""


def local_functions(order, u):
    """Return (Q, order+1): (1 - u)/2, (1 + u)/2 and integrated Legendre polynomials at u in [-1, 1]."""
    columns = [0.5 * (1.0 - u), 0.5 * (1.0 + u)]
    for n in range(2, order + 1):
        high, low = (legendre.legval(u, np.eye(order + 1)[m]) for m in (n, n - 2))
        columns.append((high - low) / np.sqrt(2.0 * (2 * n - 1)))
    return np.stack(columns[: order + 1], axis=1)


def local_slopes(order, u):
    """Return (Q, order+1): derivatives of the local functions by u; that of an integrated Legendre polynomial is P_{n-1}."""
    columns = [np.full_like(u, -0.5), np.full_like(u, 0.5)]
    columns += [np.sqrt(0.5 * (2 * n - 1)) * legendre.legval(u, np.eye(order + 1)[n - 1]) for n in range(2, order + 1)]
    return np.stack(columns[: order + 1], axis=1)


@dataclass(frozen=True)
class Sampled:
    """One antenna of a station at Gauss points on its axes, in the station frame.

    points, tangent (Q, 3); weight (Q,) [m]; current, slope (Q, N): every unknown's current and its derivative along the wire
    [1/m]; radius, element (Q,).
    """

    points: np.ndarray
    tangent: np.ndarray
    weight: np.ndarray
    current: np.ndarray
    slope: np.ndarray
    radius: np.ndarray
    element: np.ndarray


def sampled_antenna(discretisation, antenna, n_points=24):
    """Return the unknowns of one antenna at Gauss points: 24 on an element integrate exp(jk s) to rounding."""
    placed = discretisation.station.placed[antenna]
    mesh = discretisation.kinds[discretisation.kind_of[antenna]].mesh
    u, w = legendre.leggauss(n_points)
    start, end = placed.to_station(mesh.start), placed.to_station(mesh.end)
    length = np.linalg.norm(end - start, axis=1)

    def expanded(values):
        return np.einsum("qf,efn->eqn", values, mesh.expansion).reshape(len(length) * n_points, -1)

    return Sampled(
        points=(start[:, None] + 0.5 * (1.0 + u)[None, :, None] * (end - start)[:, None]).reshape(-1, 3),
        tangent=np.repeat((end - start) / length[:, None], n_points, axis=0),
        weight=(0.5 * length[:, None] * w).ravel(),
        current=expanded(local_functions(mesh.order, u)),
        slope=expanded(local_slopes(mesh.order, u)) * np.repeat(2.0 / length, n_points)[:, None],
        radius=np.repeat(mesh.radius, n_points),
        element=np.repeat(np.arange(len(length)), n_points),
    )


def gap_means(discretisation, antenna, gaps):
    """Return (len(gaps), N): the mean current over each gap, by integration over the elements inside it."""
    placed = discretisation.station.placed[antenna]
    s = sampled_antenna(discretisation, antenna)
    rows = []
    for gap in gaps:
        wire = placed.antenna.wires[gap.wire]
        foot, along = placed.to_station(np.array(wire.start)), placed.orientation @ wire.direction
        offset = s.points - foot
        position = offset @ along
        on_wire = np.linalg.norm(offset - position[:, None] * along, axis=1) < 1e-9 * wire.length
        inside = on_wire & (position > gap.low) & (position < gap.high) & (abs(s.tangent @ along) > 1.0 - 1e-9)
        sign = s.tangent[inside] @ along
        rows.append((s.weight[inside] * sign) @ s.current[inside] / gap.width)
    return np.array(rows)


def port_rows(discretisation):
    """Return (P, N): the port currents of the station's unknowns."""
    rows = np.zeros((discretisation.n_ports, discretisation.n_unknowns))
    for a, placed in enumerate(discretisation.station):
        own = gap_means(discretisation, a, placed.antenna.port_gaps)
        rows[discretisation.ports_of(a), discretisation.unknowns_of(a)] = own
    return rows


def polarisations(theta, phi):
    """Return r_hat, theta_hat, phi_hat, each (3,) for a direction or (3, D) for several."""
    ct, st, cp, sp = np.cos(theta), np.sin(theta), np.cos(phi), np.sin(phi)
    return np.array([st * cp, st * sp, ct]), np.array([ct * cp, ct * sp, -st]), np.array([-sp, cp, 0.0 * sp])


def plane_wave_vector(discretisation, theta, phi, *, arrives=1.0, reflection=1.0):
    """Return (N, 2): unknowns tested with unit plane waves from a direction, E along theta_hat and phi_hat.

    The wave from r_hat is e exp(+jk r_hat . r).  A perfect ground adds the mirrored wave with (-e_x, -e_y, +e_z), so that
    the tangential field vanishes at z = 0.  Tested on the surface of the tube, evenly around it.  ``arrives`` = -1 and
    ``reflection`` = -1 are the mistakes that the checks must see.
    """
    d = discretisation
    r_hat, *vectors = polarisations(theta, phi)
    flip = np.array([1.0, 1.0, -1.0])
    waves = [(r_hat, np.array(vectors))]
    if isinstance(d.station.ground, PerfectGround):
        waves.append((flip * r_hat, -reflection * flip * np.array(vectors)))
    tested = np.zeros((d.n_unknowns, 2), dtype=complex)
    for a in range(len(d.station)):
        s = sampled_antenna(d, a)
        aside = np.cross(s.tangent, np.where(abs(s.tangent[:, 2:]) < 0.9, [[0.0, 0.0, 1.0]], [[1.0, 0.0, 0.0]]))
        aside /= np.linalg.norm(aside, axis=1)[:, None]
        other = np.cross(s.tangent, aside)
        for unit, fields in waves:
            across = s.radius[:, None] * ((aside @ unit)[:, None] * np.cos(RING) + (other @ unit)[:, None] * np.sin(RING))
            phase = arrives * 1j * d.wavenumber * (s.points @ unit)
            wave = np.exp(phase[:, None] + arrives * 1j * d.wavenumber * across).mean(axis=1)
            along = (s.weight * wave)[:, None] * (s.tangent @ fields.T)
            tested[d.unknowns_of(a)] += s.current.T @ along
    return tested


@dataclass(frozen=True)
class Circuit:
    """The assembled matrix of a station without terminations, scaled to a unit diagonal, with its port rows.

    Unknowns x = scales y; matrix (N, N) acts on y; rows (P, N) give port currents from y.
    """

    matrix: np.ndarray
    scales: np.ndarray
    rows: np.ndarray

    def port_quantities(self, tested, load):
        """Return port voltages and currents (P, D) of tested incident fields (N, D) under what the ports see.

        ``load`` holds for every port an impedance [ohm], "open" or "short".  Unknowns are the currents and the port
        voltages v (v i is power into the antenna), with one equation a port: i = 0, v = 0, or v + Z i = 0.
        """
        n, p = self.matrix.shape[0], len(self.rows)
        system = np.zeros((n + p, n + p), dtype=complex)
        system[:n, :n] = self.matrix
        system[:n, n:] = -self.rows.T
        for port, seen in enumerate(load):
            equation = {"open": (1.0, 0.0), "short": (0.0, 1.0)}.get(seen) if isinstance(seen, str) else None
            # Divided by 100 ohm + |Z|, so that no row is large.
            of_current, of_voltage = equation or np.array([seen, 1.0]) / (100.0 + abs(seen))
            system[n + port, :n] = of_current * self.rows[port]
            system[n + port, n + port] = of_voltage
        right = np.zeros((n + p, tested.shape[1]), dtype=complex)
        right[:n] = self.scales[:, None] * tested
        solved = np.linalg.solve(system, right)
        return solved[n:], self.rows @ solved[:n]


def circuit_of(discretisation):
    """Return the station's assembled matrix with open ports, and our own port rows."""
    matrix, scales = assemble(discretisation, 0.0)
    return Circuit(matrix.dense(), scales, port_rows(discretisation) * scales)


def carried(station, matrix, shift=(0.0, 0.0, 0.0)):
    """Return a station whose every point p stands at ``matrix`` p + ``shift``: a turn, a mirror image, a shift.

    The coordinates of the wires are changed, not the attitudes of the antennas: a mirror image has none.
    """
    matrix = np.asarray(matrix)
    placed = []
    for p in station:
        turn = matrix @ p.orientation
        wires = [Wire(turn @ w.start, turn @ w.end, w.radius, w.conductivity, w.relative_permeability) for w in p.antenna.wires]
        design = Antenna(p.antenna.name, wires, p.antenna.ports, p.antenna.loads)
        placed.append(Placed(design, tuple(matrix @ p.position + shift), name=p.name))
    return Station(placed, station.ground)


def as_vectors(patterns, theta, phi):
    """Return patterns (..., D, 2) along theta_hat and phi_hat as vectors (..., D, 3)."""
    _, theta_hat, phi_hat = polarisations(theta, phi)
    return patterns[..., :1] * theta_hat.T + patterns[..., 1:] * phi_hat.T


def potential_overlap(discretisation, currents, directions):
    """Return (P, P) [ohm]: power overlaps of currents (N, P) from their vector and scalar potentials.

    With sin(kR)/R = (k/4 pi) integral of exp(jk r_hat . (r - r')) over the sphere, the real part of the mixed-potential
    reaction is k^2 eta/(16 pi^2) times the integral of A . A* - Q Q*/k^2; A and Q are the transforms of current and charge.
    """
    d, k = discretisation, discretisation.wavenumber
    unit = directions.unit_vectors()
    over_ground = isinstance(d.station.ground, PerfectGround)
    total = np.zeros((4, currents.shape[1], len(unit)), dtype=complex)
    for a in range(len(d.station)):
        s = sampled_antenna(d, a)
        current, slope = (s.weight[:, None] * part @ currents[d.unknowns_of(a)] for part in (s.current, s.slope))
        for flip, sign in (([1.0, 1.0, 1.0], 1.0), *([([1.0, 1.0, -1.0], -1.0)] if over_ground else [])):
            # The image of a current runs backwards but for its vertical part, which mirroring has turned over already.
            tangent = s.tangent * flip
            cosine = np.clip(tangent @ unit.T, -1.0, 1.0)
            wave = np.exp(1j * k * (s.points * flip) @ unit.T) * j0(k * s.radius[:, None] * np.sqrt(1.0 - cosine**2))
            for axis in range(3):
                total[axis] += sign * (current * tangent[:, axis : axis + 1]).T @ wave
            total[3] += sign * slope.T @ wave / (1j * k)
    weighted = total * np.sqrt(directions.weights_sr)
    products = np.einsum("cpd,cqd->cpq", weighted, weighted.conj(), optimize=True)
    return k**2 * IMPEDANCE_OF_VACUUM / (16.0 * np.pi**2) * (products[:3].sum(axis=0) - products[3])


def overlap(lengths, weights, wavenumber):
    """Return (P, P) [ohm]: the overlap of effective lengths (P, D, 2), k^2 eta/(16 pi^2) sum w l_i . conj(l_j).

    1 A into port i radiates |E| = k eta |l_i|/(4 pi r); the power of port currents i is (1/2) i^H (overlap)^T i.
    """
    flat = (lengths * np.sqrt(weights)[:, None]).reshape(len(lengths), -1)
    return wavenumber**2 * IMPEDANCE_OF_VACUUM / (16.0 * np.pi**2) * flat @ flat.conj().T
