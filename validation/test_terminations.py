"""Terminations applied after the solve against the same circuits built into the structure before it.

Circuit theory knows no difference between a circuit at a port and the same circuit as lumped parts of the structure (substitution
theorem; for example C. A. Desoer and E. S. Kuh, Basic Circuit Theory, 1969, chapter 16; from memory).  The solver reaches the two on
different roads: one by algebra on port quantities of a solve that knows only resistances, the other through the matrix of the
field problem.  They may differ by the residual of the linear system, 1e-9, times the ratio of impedances, below 100 here.
"""

import numpy as np
import pytest

from elbowroom.geometry.antennas import Antenna, Load, Port
from elbowroom.geometry.directions import hemisphere_grid
from elbowroom.geometry.grounds import PerfectGround
from elbowroom.geometry.networks import Branch, FeedPoint, Network
from elbowroom.geometry.stations import Placed, Station
from elbowroom.geometry.wires import Wire
from elbowroom.job.solve import solve
from elbowroom.system.terminations import ParallelCircuit, SampledReflection, SeriesCircuit, termination_at

pytestmark = pytest.mark.validation

SOURCE = "substitution theorem (Desoer and Kuh 1969; from memory)"
SKY = hemisphere_grid(30.0)
FREQUENCIES_HZ = (60e6, 150e6, 251e6)
WIRES = [Wire((-0.45, 0.0, 1.0), (0.45, 0.0, 1.0), 0.003), Wire((-0.4, 0.35, 1.1), (0.4, 0.35, 1.1), 0.003)]
NEIGHBOUR = Antenna("neighbour", [Wire((0.0, -0.45, 1.0), (0.0, 0.45, 1.0), 0.004)], [Port("c", 0)])
SERIES, PARALLEL = SeriesCircuit(60.0, 150e-9, 8e-12), ParallelCircuit(220.0, 120e-9, 9e-12)
# in resonance at 150 MHz: short to the last digits, and open but for 10 megohms, which a network needs to have an answer
RESONANT_C = 1.0 / ((2.0 * np.pi * 150e6) ** 2 * 120e-9)
SHORTING, OPENING = SeriesCircuit(0.0, 120e-9, RESONANT_C), ParallelCircuit(1e7, 120e-9, RESONANT_C)


def with_parts(circuit):
    """Return the antenna with the circuit inside, across the gap of its second wire."""
    if isinstance(circuit, SeriesCircuit):
        load = Load(1, 0.5, circuit.resistance_ohm, circuit.inductance_h, circuit.capacitance_f)
        return Antenna("loaded", WIRES, [Port("a", 0)], [load])
    branches = [Branch("g", inductance_h=circuit.inductance_h), Branch("g", capacitance_f=circuit.capacitance_f)]
    if circuit.resistance_ohm is not None:
        branches.append(Branch("g", resistance_ohm=circuit.resistance_ohm))
    return Antenna("loaded", WIRES, [Port("a", 0)], feeds=[FeedPoint("g", 1)], network=Network(branches=tuple(branches)))


def station(antenna):
    return Station([Placed(antenna, name="A"), Placed(NEIGHBOUR, (1.1, 0.4, 0.0), 20.0, name="B")], PerfectGround())


@pytest.mark.parametrize("frequency", FREQUENCIES_HZ)
@pytest.mark.parametrize(
    ("name", "circuit"),
    [("series", SERIES), ("parallel", PARALLEL), ("series resonance", SHORTING), ("parallel resonance", OPENING)],
)
def test_circuit__after_the_solve_is_the_circuit_in_the_solve(record, name, circuit, frequency):
    outside = solve(station(Antenna("bare", WIRES, [Port("a", 0), Port("b", 1)])), frequency)
    inside = solve(station(with_parts(circuit)), frequency)
    termination = [100.0, termination_at(circuit, frequency), 100.0]
    found, expected = outside.port_matrix("Z", [0, 2], termination=termination), inside.impedance_matrix()
    # what a circuit that does not follow the frequency would give
    frozen = outside.port_matrix("Z", [0, 2], termination=[100.0, termination_at(circuit, 100e6), 100.0])
    largest = np.abs(expected).max()
    for row, column in ((0, 0), (0, 1), (1, 1)):
        record(
            f"Z{row + 1}{column + 1} beside a {name} circuit, {frequency / 1e6:g} MHz [ohm]",
            found[row, column],
            expected[row, column],
            source=SOURCE,
            absolute=1e-7 * largest,
            wrong=frozen[row, column],
        )
    pattern = outside.embedded_patterns(SKY.theta_rad, SKY.phi_rad, termination=termination)[[0, 2]]
    reference = inside.embedded_patterns(SKY.theta_rad, SKY.phi_rad, termination=100.0)
    np.testing.assert_allclose(pattern, reference, rtol=0, atol=1e-7 * np.abs(reference).max())


def test_sampled_circuit__settles_with_the_square_of_the_step(record):
    # linear interpolation: the error falls by 4 when the step is halved
    errors = []
    for count in (11, 21, 41):
        frequency = np.linspace(50e6, 250e6, count)
        exact = [SERIES.impedance(f) for f in frequency]
        sampled = SampledReflection(tuple(frequency), tuple((z - 50.0) / (z + 50.0) for z in exact), 50.0)
        fine = np.linspace(100e6, 200e6, 2001)
        exact_fine = np.array([(SERIES.impedance(f) - 50.0) / (SERIES.impedance(f) + 50.0) for f in fine])
        errors.append(np.abs([sampled.reflection_at(f) for f in fine] - exact_fine).max())
    record(
        "order of interpolation in steps", np.log2(errors[1] / errors[2]), 2.0, source="Taylor's theorem", absolute=0.1, wrong=1.0
    )
    assert errors[2] < 2e-3
