"""One antenna alone: directivities, widths and efficiencies against closed forms and exact power balances."""

import csv

import numpy as np
import pytest

from elbowroom.base.errors import GeometryError, ModelRangeError
from elbowroom.geometry.antennas import Antenna, Port
from elbowroom.geometry.directions import hemisphere_grid
from elbowroom.geometry.grounds import PerfectGround
from elbowroom.geometry.networks import Branch, FeedPoint, Network
from elbowroom.geometry.wires import Wire
from elbowroom.job.oneantenna import (
    MEANINGS,
    SKY_STEP_DEG,
    alone,
    antenna_figures,
    is_stored,
    largest_lobe_width_deg,
    pattern_cuts,
    problems_of,
    solve_alone,
    sphere_for,
    write_figures,
)
from helpers import cluster, dipole

WAVELENGTH_150 = 299792458.0 / 150e6


def level(half_length, radius=1e-5, **changes):
    """A level dipole along x in free space."""
    wires = [Wire((-half_length, 0.0, 0.0), (half_length, 0.0, 0.0), radius, **changes)]
    return Antenna("level", wires, [Port("p", 0)])


def figures(antenna, ground=None, frequency=150e6, mesh="default", **options):
    return antenna_figures(solve_alone(alone(antenna, ground), frequency, mesh), **options)


def test_short_dipole__is_that_of_every_textbook():
    """An infinitesimal dipole: D = 3/2, half-power width 90 deg, cross-polar component -sin cos phi (1 - cos theta).

    C. A. Balanis, Antenna Theory, 3rd ed., section 4.2; Ludwig's third components of (cos theta cos phi, -sin phi).  A length of
    0.02 wavelengths changes the directivity by (k l)^2 / 25 or less, 0.003 dB.
    """
    row = figures(level(0.01 * WAVELENGTH_150))[0]
    assert row.peak_directivity_db == pytest.approx(10 * np.log10(1.5), abs=0.003)
    assert row.zenith_directivity_db == row.peak_directivity_db
    assert row.width_along_deg == pytest.approx(90.0, abs=0.1)
    # every direction across is as good: the one at the zenith is told, and no width
    assert row.peak_zenith_angle_deg == pytest.approx(0.0, abs=1e-4)
    assert np.isnan(row.width_across_deg)
    assert row.front_to_back_db == pytest.approx(0.0, abs=1e-9)
    sky = hemisphere_grid(SKY_STEP_DEG)
    power = 1.0 - np.sin(sky.theta_rad) ** 2 * np.cos(sky.phi_rad) ** 2
    cross = np.sin(sky.phi_rad) * np.cos(sky.phi_rad) * (1.0 - np.cos(sky.theta_rad))
    within = power >= 0.505
    assert row.cross_polar_db == pytest.approx(10 * np.log10(np.max(cross[within] ** 2)), abs=0.1)


def test_half_wave_dipole__and_quarter_wave_monopole():
    """Thin half-wave dipole: D = 1.643, width 78 deg; monopole on the ground: twice that (Balanis, sections 4.6 and 4.7).

    The sinusoidal current these stand for is that of a vanishing radius; at a millionth of a wavelength it is good to a hundredth
    of a dB.
    """
    row = figures(level(0.25 * WAVELENGTH_150, 2e-6))[0]
    assert row.peak_directivity_db == pytest.approx(10 * np.log10(1.643), abs=0.02)
    assert row.width_along_deg == pytest.approx(78.0, abs=0.5)
    mast = Antenna("mast", [Wire((0, 0, 0), (0, 0, 0.25 * WAVELENGTH_150), 2e-6)], [Port("p", 0, position=0.0)])
    row = figures(mast, PerfectGround())[0]
    assert row.peak_directivity_db == pytest.approx(10 * np.log10(2 * 1.643), abs=0.02)
    assert row.peak_zenith_angle_deg == pytest.approx(90.0, abs=1e-6)
    assert row.zenith_directivity_db < -100.0
    assert np.isnan([row.width_along_deg, row.front_to_back_db, row.cross_polar_db, row.coupling_db]).all()


@pytest.mark.parametrize("ground", [None, PerfectGround()])
def test_efficiency__of_a_lossless_antenna_is_one(ground):
    """Power balance: what a port accepts leaves through the sphere; the thin straight wire leaves 1e-6 of it unaccounted."""
    row = figures(dipole(height=1.0, direction=(1.0, 0.0, 0.0)), ground, termination=75 - 30j)[0]
    assert row.radiation_efficiency == pytest.approx(1.0, abs=5e-6)
    z, seen = row.resistance_ohm + 1j * row.reactance_ohm, 75 - 30j
    assert row.reflection == pytest.approx(abs((z - seen.conjugate()) / (z + seen)), rel=1e-9)
    gain = row.peak_directivity_db + 10 * np.log10(1.0 - row.reflection**2)
    assert row.peak_realised_gain_db == pytest.approx(gain, abs=1e-4)


def test_efficiency__behind_a_resistor_is_the_share_of_the_radiation_resistance():
    """R_a / (R_a + R), whatever the termination."""
    wires = [Wire((-0.45, 0.0, 1.0), (0.45, 0.0, 1.0), 1e-3)]
    resistor = Network(branches=(Branch("in", "gap", resistance_ohm=12.0),))
    lossy = Antenna("lossy", wires, [Port("p", node="in")], feeds=[FeedPoint("gap", 0)], network=resistor)
    plain = figures(Antenna("plain", wires, [Port("p", 0)]))[0]
    row = figures(lossy, termination=30.0)[0]
    assert row.resistance_ohm == pytest.approx(plain.resistance_ohm + 12.0, rel=1e-9)
    assert row.radiation_efficiency == pytest.approx(plain.resistance_ohm / row.resistance_ohm, abs=2e-5)
    assert row.peak_directivity_db == pytest.approx(plain.peak_directivity_db, abs=1e-9)


def test_efficiency__what_the_other_port_takes_is_not_radiated():
    """Two parallel dipoles without loss: radiated = 1 - |S11|^2 - |S21|^2."""
    wires = [Wire((-0.45, y, 1.0), (0.45, y, 1.0), 1e-3) for y in (0.0, 0.4)]
    pair = Antenna("pair", wires, [Port("a", 0), Port("b", 1)])
    for row in figures(pair, PerfectGround(), termination=60.0):
        coupled = 10.0 ** (row.coupling_db / 10.0)
        assert coupled > 0.05
        expected = 1.0 - coupled / (1.0 - row.reflection**2)
        assert row.radiation_efficiency == pytest.approx(expected, abs=1e-5)


def test_changes__vanish_against_itself_and_show_the_coarse_mesh():
    station = alone(dipole(height=1.0, direction=(1.0, 0.0, 0.0)), PerfectGround())
    coarse, fine = solve_alone(station, 150e6), solve_alone(station, 150e6, "refined")
    same = antenna_figures(fine, fine)[0]
    changes = [same.impedance_change, same.reflection_change, same.directivity_change_db]
    np.testing.assert_allclose(changes, 0.0, atol=1e-13)
    assert same.pattern_change_db == -300.0
    row = antenna_figures(coarse, fine)[0]
    z = [s.impedance_matrix()[0, 0] for s in (coarse, fine)]
    assert row.impedance_change == pytest.approx(abs(z[1] / z[0] - 1.0), rel=1e-6)
    assert 1e-4 < row.impedance_change < 0.02
    assert -90.0 < row.pattern_change_db < -40.0
    assert row.finer_unknowns > row.unknowns
    none = antenna_figures(coarse)[0]
    assert np.isnan([none.impedance_change, none.pattern_change_db]).all()
    assert none.finer_unknowns == 0


def test_store__gives_the_same_figures_and_is_no_jobs_solution():
    """Nothing is stated of the mesh's error here, so a job of the same station, which states it, must not find this."""
    from elbowroom.base.errors import StoreError
    from elbowroom.job.solve import SOLUTION_SCHEMA, solve
    from elbowroom.store import MemoryStore

    station, store = alone(level(0.4)), MemoryStore(SOLUTION_SCHEMA)
    assert not is_stored(station, 150e6, "default", store)
    first = solve_alone(station, 150e6, store=store)
    assert is_stored(station, 150e6, "default", store)
    assert not is_stored(station, 150e6, "refined", store)
    again = solve_alone(station, 150e6, store=store)
    assert again is not first
    np.testing.assert_equal(vars(antenna_figures(again)[0]), vars(antenna_figures(first)[0]))
    assert np.isnan(again.statistics.mesh_error)
    with pytest.raises(StoreError, match="150 MHz is not in the store"):
        solve(station, 150e6, solver="direct", precision="double", store=store, only_stored=True)


def test_sphere__integrates_power_to_many_digits():
    """Twice the degree gives the same radiated power."""
    from elbowroom.geometry.directions import sphere_quadrature

    solution = solve_alone(alone(dipole(half_length=1.3, height=2.0, direction=(1.0, 0.3, 0.2)), PerfectGround()), 200e6)
    powers = []
    for sphere in (sphere_for(solution), sphere_quadrature(90, hemisphere=True)):
        field = solution.embedded_patterns(sphere.theta_rad, sphere.phi_rad)[0]
        powers.append(sphere.integrate(np.sum(np.abs(field) ** 2, axis=-1)))
    assert powers[0] == pytest.approx(powers[1], rel=1e-9)


def test_largest_lobe_width__closed_forms():
    angle = np.arange(-180.0, 180.1, 0.25)
    for middle in (0.0, 100.0, 180.0):
        cosine = np.cos(np.radians(angle - middle))
        assert largest_lobe_width_deg(angle, cosine**2) == pytest.approx(90.0, abs=1e-3)
    upper = np.arange(-90.0, 90.1, 0.25)
    assert largest_lobe_width_deg(upper, np.cos(2.0 * np.radians(upper - 30.0)) ** 2) == pytest.approx(45.0, abs=1e-2)
    assert np.isnan(largest_lobe_width_deg(upper, np.cos(np.radians(upper - 80.0)) ** 2))


def test_pattern_cuts__planes_and_components():
    free = pattern_cuts(solve_alone(alone(level(0.4)), 150e6), step_deg=10.0)
    assert [cut.plane for cut in free] == ["along", "across", "diagonal"]
    assert [cut.azimuth_phi_deg for cut in free] == pytest.approx([0.0, 90.0, 45.0])
    along, across, diagonal = free
    assert (along.angle_deg[0], along.angle_deg[-1], along.angle_deg.size) == (-180.0, 180.0, 37)
    # no field along the wire; none of the other component in the planes of symmetry
    at = np.abs(np.abs(along.angle_deg) - 90.0) < 1e-9
    assert along.co_gain[at].max() < 1e-9 * along.co_gain.max()
    assert max(along.cross_gain.max(), across.cross_gain.max()) < 1e-9 * along.co_gain.max()
    assert diagonal.cross_gain.max() > 0.01 * along.co_gain.max()
    ground = pattern_cuts(solve_alone(alone(dipole(height=1.0, direction=(1, 0, 0)), PerfectGround()), 150e6), step_deg=10.0)
    assert ground[0].angle_deg[-1] == 90.0


def test_bad_input__is_refused():
    with pytest.raises(ModelRangeError, match="one antenna alone, got a station of 3"):
        solve_alone(cluster(3), 150e6)
    solution = solve_alone(alone(level(0.4)), 150e6)
    for bad in (0.0, -50.0, np.nan, 20j):
        with pytest.raises(ModelRangeError, match="positive resistance"):
            antenna_figures(solution, termination=bad)
    with pytest.raises(GeometryError, match="height_m nan"):
        alone(level(0.4), height_m=np.nan)
    with pytest.raises(GeometryError, match="below the ground") as caught:
        problems_of(alone(level(0.4), PerfectGround(), height_m=-1.0), [150e6])
    assert len(caught.value.problems) == 1


def test_table__explains_every_column(tmp_path):
    rows = figures(level(0.4))
    write_figures(rows, tmp_path / "a.csv", ["made by\na test"])
    lines = (tmp_path / "a.csv").read_text().splitlines()
    head = [line for line in lines if line.startswith("#")]
    found = list(csv.DictReader(line for line in lines if not line.startswith("#")))
    assert head[0] == "# made by a test"
    assert "not a measurement" in head[1]
    assert len(found) == 1
    assert list(found[0]) == list(MEANINGS)
    for name in found[0]:
        assert any(line.startswith(f"# {name}: ") for line in head), name
    assert float(found[0]["resistance_ohm"]) == pytest.approx(rows[0].resistance_ohm, rel=1e-8)
    assert found[0]["impedance_change"] == "nan"


def test_figures__high_over_a_ground__find_the_peak_between_its_many_lobes():
    # 0.4 m dipole 6.4 m up at 350 MHz: lobes of a few degrees
    design = Antenna("high", [Wire((-0.2, 0, 6.4), (0.2, 0, 6.4), 0.002)], [Port("x", 0)])
    solution = solve_alone(alone(design, PerfectGround()), 350e6)
    (figures,) = antenna_figures(solution)
    theta = np.radians(np.arange(0.0, 90.0, 0.02))
    field = solution.embedded_patterns(theta, np.full(theta.size, np.pi / 2), termination=100.0)[0]
    best = 10 * np.log10((4 * np.pi * 376.730313 * (np.abs(field) ** 2).sum(-1) / 100.0 / (299792458.0 / 350e6) ** 2).max())
    assert figures.peak_realised_gain_db == pytest.approx(best, abs=0.05)
