"""Channels made along frequency against what holds without this program: power, and resonances of a line in the open."""

import numpy as np
import pytest

from elbowroom.base.constants import IMPEDANCE_OF_VACUUM, SPEED_OF_LIGHT, VACUUM_PERMEABILITY
from elbowroom.geometry.antennas import Antenna, Port
from elbowroom.geometry.directions import sphere_quadrature
from elbowroom.geometry.grounds import FreeSpace, MeshOnSoil, PerfectGround
from elbowroom.geometry.soils import LayeredSoil, Soil
from elbowroom.geometry.stations import Placed, Station
from elbowroom.geometry.wires import Wire
from elbowroom.job.band import SegmentChannels, SegmentPlan, solve_band
from elbowroom.system.band import BandSegment, SegmentSettings
from elbowroom.system.band_currents import CurrentSamples
from elbowroom.system.band_ground import GroundScan
from elbowroom.system.discretisation import discretise
from elbowroom.system.solving import solve_direct

CHANNELS = np.sort(np.concatenate([140e6 + 1e6 * np.arange(18), [140.5e6, 147.53e6, 155.5e6]]))


@pytest.fixture(scope="module")
def band():
    level = Antenna("dipole", [Wire((-0.47, 0.0, 0.8), (0.47, 0.0, 0.8), 0.002)], [Port("x", 0)])
    places = [(0.0, 0.0, 0.0), (1.5, 0.3, 0.0), (-0.6, 1.7, 0.0), (3.0, 3.5, 0.0)]
    station = Station([Placed(level, p) for p in places], PerfectGround())
    return list(solve_band(station, tuple(CHANNELS), tolerance=1e-4, solve_step_hz=1e6))


def test_power__of_channels_between_solved_ones_is_radiated(band):
    """A lossless station radiates what its ports accept.

    Identity: energy conservation, exact for straight wires, whose kernel and far field belong together.  Waves at random enter all
    ports at once.  What patterns err by, power errs by twice, times what waves of all ports have in common.
    """
    rng = np.random.default_rng(0)
    waves = rng.normal(size=(6, 4)) + 1j * rng.normal(size=(6, 4))
    seen = {"interpolated matrix": 0, "interpolated currents": 0}
    for solution in band:
        if solution.frequency_hz not in (140e6, 140.5e6, 147e6, 147.53e6, 155.5e6, 157e6):
            continue
        s = solution.scattering_matrix(100.0)
        accepted = np.sum(np.abs(waves) ** 2, axis=1) - np.sum(np.abs(waves @ s.T) ** 2, axis=1)
        reach = 2.0 * np.pi * solution.frequency_hz / SPEED_OF_LIGHT * 5.0
        sphere = sphere_quadrature(2 * int(reach + 20.0), hemisphere=True)
        field = solution.beam(waves, sphere.theta_rad, sphere.phi_rad, termination=100.0)
        wavelength = SPEED_OF_LIGHT / solution.frequency_hz
        gain = 4.0 * np.pi * IMPEDANCE_OF_VACUUM / 100.0 / wavelength**2 * np.sum(np.abs(field) ** 2, axis=-1)
        radiated = sphere.integrate(gain) / (4.0 * np.pi)
        error = float(np.max(np.abs(radiated / accepted - 1.0)))
        print(f"{solution.frequency_hz / 1e6:g} MHz, {solution.statistics.origin}: radiated over accepted - 1 = {error:.1e}, "
              f"stated {solution.statistics.pattern_error:.1e}")  # fmt: skip
        assert error < 4.0 * solution.statistics.pattern_error < 1e-3
        seen[solution.statistics.origin] += 1
    assert seen == {"interpolated matrix": 3, "interpolated currents": 3}


def test_power__the_check_would_see_a_neighbouring_channel(band):
    """Port quantities of the next solved channel, a megahertz away, break the balance of the one before by far more."""
    one, other = band[0], band[2]
    waves = np.array([1.0, 0.3j, -0.5, 0.2])
    powers = [1.0 - np.sum(np.abs(s.scattering_matrix(100.0) @ waves) ** 2) / np.sum(np.abs(waves) ** 2) for s in (one, other)]
    assert abs(powers[1] / powers[0] - 1.0) > 4e-3


@pytest.mark.parametrize("conductivity", [3.0e6, 3.0e7])
def test_resonance__of_a_line_with_lossy_wires_is_as_wide_as_its_loss(conductivity):
    """Two parallel wires, open at both ends: half-width R'/(4 pi L') of any resonance of a line with series loss R' alone.

    Q = omega L'/R' for a line resonator with series loss (D. M. Pozar, Microwave Engineering, 4th ed., 2012, section 6.2, where
    Q = beta/2 alpha with alpha = R'/2 Z0), L' = Z0/c, Z0 = (eta/pi) arcosh(s/2a) (the same, table 2.1); R' of two round wires by
    the skin effect, R_s/(pi a) (the same section; the wire's curvature adds delta/(4 a) of it).  What remains is told apart by its
    size: the line's radiation, some kilohertz, the wires' proximity, of the order of (a/s)^2, and their inner inductance.
    """
    radius, spacing, length = 0.5e-3, 6e-3, 0.9
    wires = [Wire((-0.48, 0.0, 1.0), (0.48, 0.0, 1.0), radius=0.002)]
    wires += [
        Wire((x, -0.5 * length, 0.75), (x + 0.2, 0.5 * length, 0.75), radius=radius, conductivity=conductivity)
        for x in (-0.1, -0.1 + spacing)
    ]
    antenna = Antenna("dipole over a line", wires=wires, ports=[Port("x", wire=0, position=0.5, gap=0.01)])
    segment = BandSegment(Station([Placed(antenna)], FreeSpace()), 140e6, 175e6, SegmentSettings(1e-3))
    features = segment.features(3e6)
    assert len(features) == 1
    found = features[0]
    omega = 2.0 * np.pi * found.frequency_hz
    depth = np.sqrt(2.0 / (omega * VACUUM_PERMEABILITY * conductivity))
    resistance = 1.0 / (conductivity * depth) / (np.pi * radius) * (1.0 + depth / (4.0 * radius))
    # The wires are slightly askew to the axes; their distance is what counts.
    across = spacing * length / np.hypot(length, 0.2)
    line = IMPEDANCE_OF_VACUUM / np.pi * np.arccosh(0.5 * across / radius)
    expected = resistance * SPEED_OF_LIGHT / (4.0 * np.pi * line)
    middle = SPEED_OF_LIGHT / (2.0 * np.hypot(length, 0.2))
    print(f"half-width {found.half_width_hz / 1e3:.2f} kHz, from R' and L' {expected / 1e3:.2f} kHz; at {found.frequency_hz / 1e6:.3f} "
          f"MHz, of the bare length {middle / 1e6:.3f} MHz")  # fmt: skip
    assert found.half_width_hz == pytest.approx(expected, rel=0.03)
    # Open ends lengthen a line by about its spacing.
    assert 0.96 * middle < found.frequency_hz < middle


def test_resonance__channels_beside_a_narrow_one_meet_their_statement():
    """A lossless line of some kilohertz, channels a hundred times farther apart: what lies beside it is solved or made well.

    Identity: the same matrix, solved at the channel itself.  Currents of the solved channels know nothing of the resonance but its
    tail; without solves near it the channels there would be off by what it does.
    """
    wires = [Wire((-0.48, 0.0, 1.0), (0.48, 0.0, 1.0), radius=0.002)]
    wires += [Wire((0.1 + x, -0.45, 0.85), (0.3 + x, 0.45, 0.85), radius=0.0005) for x in (0.0, 0.008)]
    antenna = Antenna("dipole over a line", wires=wires, ports=[Port("x", wire=0, position=0.5, gap=0.01)])
    station = Station([Placed(antenna)], FreeSpace())
    segment = SegmentChannels(station, SegmentPlan(154e6, 170e6, tuple(np.arange(154e6, 170.1e6, 1e6))), 1e-3)
    found = segment.segment.features(5e5)[0]
    assert found.half_width_hz < 1e4
    plain = CurrentSamples(station.positions, segment.segment.space.offsets, np.array([0, 1]), [0])
    nodes = [segment.solved(f) for f in segment.plan.solved]
    for node in nodes:
        plain.add(node.frequency_hz, node.coupled.currents)
    worst = 0.0
    for offset in (-30.0, -6.0, -1.0, 0.4, 1.5, 10.0, 100.0):
        f = found.frequency_hz + offset * found.half_width_hz
        exact = segment.segment_solution(f)
        made = segment.solution(f)
        lagrange = plain._polynomial(f)
        blind = plain.combined_ports(f, lagrange, [nodes[i].coupled.loaded_admittance for i in lagrange.nodes])
        error, missed = (
            np.linalg.norm(y - exact.coupled.loaded_admittance) / np.linalg.norm(exact.coupled.loaded_admittance)
            for y in (made.coupled.loaded_admittance, blind)
        )
        print(f"{offset:+g} half-widths: {made.statistics.origin}, admittance off by {error:.1e}, stated "
              f"{made.statistics.pattern_error:.1e}; a polynomial through solved channels {missed:.1e}")  # fmt: skip
        assert error <= made.statistics.pattern_error
        worst = max(worst, missed)
    print(f"{segment.counts.solved} solved, {segment.counts.interpolated} interpolated, {segment.counts.assembled} assembled")
    assert worst > 1e-3


LEVEL = Antenna("level", [Wire((-0.58, -0.12, 0.44), (0.58, 0.12, 0.56), 0.005)], [Port("x", 0)])
STANDING = [(0.0, 0.0, 0.0), (1.6, 0.3, 0.0), (10.0, 2.0, 0.0), (24.0, -3.0, 0.0)]


def over_ground(ground, low_hz, high_hz):
    return BandSegment(Station([Placed(LEVEL, p) for p in STANDING], ground), low_hz, high_hz, SegmentSettings(1e-4))


def port_error(segment, frequency_hz):
    """Return what a segment states of the ports at a frequency, what it errs by, and where its matrix came from."""
    made = segment.solve(frequency_hz)
    exact = solve_direct(discretise(segment.station, frequency_hz, mesh_hz=segment.high_hz), precision="double")[0]
    error = np.abs(made.currents.loaded_admittance - exact.loaded_admittance).max() / np.abs(exact.loaded_admittance).max()
    return made.statistics.port_matrix_error, float(error), made.statistics.origin


@pytest.mark.parametrize("nodes", ["as many as the ground asks for", "as few as over a plane"])
def test_ground__that_resonates_between_nodes_is_checked_there(nodes, monkeypatch):
    """Identity: the same station, mesh and ground, assembled and solved at the frequency itself.

    Dry sand under a tight mesh and over sea water is a cavity; its resonance lies between the frequencies that are checked anyway.
    """
    if nodes == "as few as over a plane":
        monkeypatch.setattr(GroundScan, "intervals", lambda self, least, factor, tolerance: (least, factor * least))
    cavity = MeshOnSoil(LayeredSoil(((1.0, Soil(3.0, 1e-5)),), Soil(80.0, 5.0)), 0.03, 1e-3)
    segment = over_ground(cavity, 71e6, 88.58e6)
    for frequency in (78.9e6, 85.4e6, 86.1e6):
        stated, error, origin = port_error(segment, frequency)
        print(f"{len(segment.nodes)} nodes, {frequency / 1e6:g} MHz, {origin}: ports off by {error:.1e}, stated {stated:.1e}")
        assert error <= stated <= 1e-4
    assert any(84e6 < f < 86.5e6 for f in segment.checked)


@pytest.mark.parametrize(
    ("ground", "low_hz", "high_hz"),
    [
        (LayeredSoil(((0.5, Soil(20.0, 1e-3)),), Soil(3.0, 1e-4)), 60e6, 72.6e6),
        (MeshOnSoil(LayeredSoil(((0.5, Soil(9.0, 1e-4)),), Soil(80.0, 5.0)), 0.2, 1e-3), 71e6, 89.7e6),
    ],
    ids=["wet layer on dry soil", "mesh on a wet layer over the sea"],
)
def test_ground__that_guides_waves_is_met_without_assembling_every_channel(ground, low_hz, high_hz):
    """Identity as above. With nodes for echoes alone most of these channels broke the tolerance, and were assembled."""
    segment = over_ground(ground, low_hz, high_hz)
    for part in (0.1, 0.3, 0.45, 0.62, 0.83):
        frequency = low_hz + part * (high_hz - low_hz)
        stated, error, origin = port_error(segment, frequency)
        print(f"{len(segment.nodes)} nodes, {frequency / 1e6:g} MHz, {origin}: ports off by {error:.1e}, stated {stated:.1e}")
        assert origin == "interpolated matrix"
        assert error <= stated <= 1e-4
