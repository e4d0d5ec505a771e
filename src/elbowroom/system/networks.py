r"""What the circuit inside an antenna does at a frequency, as seen from its gaps and from its ports.

Every port is driven by a voltage source behind the reference resistance.  With I_g the currents that enter the antenna through
its gaps,

.. math::
    V_g = T V_s - Z_n I_g, \qquad I_p = T^T I_g + Y_0 V_s,

whatever reciprocal network lies between.  A port that looks straight into a gap has T = 1, Z_n = R and Y_0 = 0.  Lines enter
through their travelling waves, which stay bounded at every length: no cotangent of a half-wave section is ever formed.
"""

from __future__ import annotations

import warnings
from dataclasses import dataclass

import numpy as np
from scipy.linalg import LinAlgWarning, solve

from elbowroom.base.arrays import ComplexArray, FloatArray
from elbowroom.base.errors import SolveError
from elbowroom.geometry.antennas import Antenna

CURRENT_SCALE_OHM = 100.0
"""Currents are unknowns in volts over this resistance, so that the equations have entries of like size."""


@dataclass(frozen=True, eq=False)
class PortAttachment:
    """How ports, under their reference resistance, hang on the gaps of an antenna.

    Attributes
    ----------
    loading : complex128 (G, G)
        Z_n: impedance across the gaps with all sources off [ohm]; symmetric.
    transfer : complex128 (G, P)
        T: open gap voltages for 1 V behind each port's resistance.
    admittance : complex128 (P, P)
        Y_0: port currents for 1 V behind each resistance, gaps open [S]; symmetric.
    """

    loading: ComplexArray
    transfer: ComplexArray
    admittance: ComplexArray

    def structure(self, gap_vectors: FloatArray) -> ComplexArray:
        """Return what the network adds to the impedance matrix of the antenna, (N, N) [ohm]."""
        return gap_vectors.T @ self.loading @ gap_vectors

    def excitations(self, gap_vectors: FloatArray) -> ComplexArray:
        """Return the right-hand sides of the ports' sources, (N, P)."""
        return gap_vectors.T @ self.transfer


def attach_ports(antenna: Antenna, frequency_hz: float, reference_ohm: float) -> PortAttachment:
    """Return how the ports of an antenna hang on its gaps at a frequency.

    Parameters
    ----------
    antenna : Antenna
        The design, with its network.
    frequency_hz : float
        [Hz].
    reference_ohm : float
        Resistance in series with each port's source [ohm]; zero or more.

    Raises
    ------
    SolveError
        If a lossless part of the network resonates at just this frequency, so that its voltages have no limit.

    Notes
    -----
    Modified nodal analysis; lines by their waves, V - Z_0 I leaving an end being exp(-gamma l) (V + Z_0 I) that entered at the
    other (for example D. M. Pozar, Microwave Engineering, 4th ed., 2012, sections 2.1 and 4.3).
    """
    n_gaps, n_ports = len(antenna.gaps), len(antenna.ports)
    if not antenna.network and antenna.port_nodes == antenna.nodes[:n_gaps]:
        # Every port looks straight into its own gap.
        return PortAttachment(
            np.eye(n_gaps) * complex(reference_ohm), np.eye(n_gaps, dtype=complex), np.zeros((n_ports, n_ports), dtype=complex)
        )
    node_of = {name: i for i, name in enumerate(antenna.nodes)}
    network, scale = antenna.network, CURRENT_SCALE_OHM
    n_nodes = len(antenna.nodes)
    branches = len(network.branches) + len(network.stubs) + len(network.transformers)
    size = n_nodes + n_ports + 2 * len(network.lines) + branches
    matrix = np.zeros((size, size), dtype=complex)
    right = np.zeros((size, n_gaps + n_ports), dtype=complex)
    # Rows of the nodes: currents into elements, less those from ports, plus those into the antenna, vanish.
    right[np.arange(n_gaps), np.arange(n_gaps)] = -scale
    at = n_nodes
    for p, node in enumerate(antenna.port_nodes):
        k = node_of[node]
        matrix[k, at] = -1.0
        matrix[at, k], matrix[at, at] = 1.0, reference_ohm / scale
        right[at, n_gaps + p] = 1.0
        at += 1
    for line in network.lines:
        a, b = node_of[line.start], node_of[line.end]
        i, j = at, at + 1
        sign = -1.0 if line.crossed else 1.0
        wave, z = line.propagation(frequency_hz), line.impedance_ohm / scale
        matrix[a, i] += 1.0
        matrix[b, j] += 1.0
        matrix[i, a], matrix[i, i], matrix[i, b], matrix[i, j] = 1.0, -z, -sign * wave, -sign * wave * z
        matrix[j, b], matrix[j, j], matrix[j, a], matrix[j, i] = sign, -sign * z, -wave, -wave * z
        at += 2
    for stub in network.stubs:
        k, z = node_of[stub.node], stub.impedance_ohm / scale
        back = stub.propagation(frequency_hz) ** 2 * (-1.0 if stub.shorted else 1.0)
        matrix[k, at] += 1.0
        matrix[at, k], matrix[at, at] = 1.0 - back, -z * (1.0 + back)
        at += 1
    for branch in network.branches:
        impedance = branch.impedance(frequency_hz)
        largest = max(1.0, abs(impedance) / scale)
        k = node_of[branch.start]
        matrix[k, at] += 1.0
        matrix[at, k], matrix[at, at] = 1.0 / largest, -impedance / (scale * largest)
        if branch.end is not None:
            k = node_of[branch.end]
            matrix[k, at] -= 1.0
            matrix[at, k] -= 1.0 / largest
        at += 1
    for transformer in network.transformers:
        a, b = node_of[transformer.start], node_of[transformer.end]
        matrix[a, at] += 1.0
        matrix[b, at] -= transformer.ratio
        matrix[at, a], matrix[at, b] = 1.0, -transformer.ratio
        at += 1
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("error", LinAlgWarning)
            found = solve(matrix, right)
    except (np.linalg.LinAlgError, LinAlgWarning) as cause:
        msg = (
            f"the network of antenna {antenna.name!r} has no finite answer at {frequency_hz:.12g} Hz: a part without loss "
            "resonates there by itself; give it loss, or another frequency"
        )
        raise SolveError(msg) from cause
    gaps, ports = slice(0, n_gaps), slice(n_nodes, n_nodes + n_ports)
    loading = -found[gaps, :n_gaps]
    transfer = 0.5 * (found[gaps, n_gaps:] + found[ports, :n_gaps].T / scale)
    admittance = found[ports, n_gaps:] / scale
    return PortAttachment(0.5 * (loading + loading.T), transfer, 0.5 * (admittance + admittance.T))
