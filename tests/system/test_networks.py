"""Circuits inside an antenna, against chains evaluated to fifty digits and against exact identities."""

import mpmath as mp
import numpy as np
import pytest

from elbowroom.base.constants import SPEED_OF_LIGHT
from elbowroom.base.errors import GeometryError, SolveError
from elbowroom.geometry.antennas import Antenna, Port
from elbowroom.geometry.networks import Branch, FeedPoint, Line, Network, Stub, Transformer
from elbowroom.geometry.stations import Placed, Station
from elbowroom.geometry.wires import Wire
from elbowroom.system.networks import attach_ports

REFERENCE = 100.0


def rungs(count, length=0.5):
    return [Wire((-0.4, i * length, 1.0), (0.4, i * length, 1.0), 0.002) for i in range(count)]


def ladder(lengths, impedance=120.0, tail=None, **line):
    """An antenna of parallel dipoles on a crossed feeder, port at the first."""
    names = [f"d{i}" for i in range(len(lengths) + 1)]
    lines = [Line(a, b, impedance, length, crossed=True, **line) for a, b, length in zip(names, names[1:], lengths, strict=False)]
    stubs = [] if tail is None else [Stub(names[-1], impedance, tail)]
    feeds = [FeedPoint(n, i) for i, n in enumerate(names)]
    return Antenna("ladder", rungs(len(names)), [Port("x", node="d0")], feeds=feeds, network=Network(tuple(lines), tuple(stubs)))


def chain_in_fifty_digits(lengths, impedance, tail, frequency):
    """Loading, transfer and admittance of `ladder`, by chain matrices at fifty digits.

    A current put into node m sees, in parallel, what lies to its left (the port's resistance at the near end) and to its right
    (the shorted stub at the far end); voltages then follow along the line from node to node.  Textbook transmission-line theory,
    with tangents only as sines over cosines of a finite number of digits.
    """
    with mp.workdps(50):
        c, r, z = mp.mpf(SPEED_OF_LIGHT), mp.mpf(REFERENCE), mp.mpf(impedance)
        n = len(lengths) + 1

        def step(voltage, current, length):
            # voltage and current (towards the far end) at the other end of a crossed section
            a = 2 * mp.pi * mp.mpf(frequency) * mp.mpf(length) / c
            v, i = mp.cos(a) * voltage - 1j * z * mp.sin(a) * current, mp.cos(a) * current - 1j * mp.sin(a) / z * voltage
            return -v, -i

        def back(voltage, current, length):
            a = 2 * mp.pi * mp.mpf(frequency) * mp.mpf(length) / c
            v, i = mp.cos(a) * voltage + 1j * z * mp.sin(a) * current, mp.cos(a) * current + 1j * mp.sin(a) / z * voltage
            return -v, -i

        # waves that satisfy one end each: from the port to the right, from the stub to the left
        near = [(r, mp.mpc(-1))]
        for length in lengths:
            near.append(step(*near[-1], length))
        a = 2 * mp.pi * mp.mpf(frequency) * mp.mpf(tail) / c
        far = [(1j * z * mp.sin(a), mp.cos(a))]
        for length in reversed(lengths):
            far.append(back(*far[-1], length))
        far.reverse()
        loading = mp.matrix(n, n)
        for m in range(n):
            # amplitudes p, q: equal voltages at m; the currents differ by what is put in
            (vn, i_n), (vf, i_f) = near[m], far[m]
            determinant = vn * i_f - vf * i_n
            p, q = vf / determinant, vn / determinant
            for k in range(n):
                loading[k, m] = p * near[k][0] if k <= m else q * far[k][0]
        # a source behind r at node 0 is a current 1/r into it
        transfer = [loading[k, 0] / r for k in range(n)]
        return (
            np.array([[complex(loading[i, j]) for j in range(n)] for i in range(n)]),
            np.array([complex(t) for t in transfer]),
            complex((1 - transfer[0]) / r),
        )


LENGTHS = [0.31, 0.26, 0.5, 0.22]
HALF_WAVES = [SPEED_OF_LIGHT / (2 * length) for length in LENGTHS]


@pytest.mark.parametrize("frequency", [55e6, 123.456e6, *HALF_WAVES, *(f + 1 for f in HALF_WAVES), *(f - 1 for f in HALF_WAVES)])
def test_feeder__equals_fifty_digits_at_and_beside_half_wave_sections(frequency):
    tail = 0.17
    found = attach_ports(ladder(LENGTHS, 120.0, tail), frequency, REFERENCE)
    loading, transfer, admittance = chain_in_fifty_digits(LENGTHS, 120.0, tail, frequency)
    np.testing.assert_allclose(found.loading, loading, rtol=0, atol=1e-9 * np.abs(loading).max())
    np.testing.assert_allclose(found.transfer[:, 0], transfer, rtol=0, atol=1e-9 * np.abs(transfer).max())
    assert abs(found.admittance[0, 0] - admittance) < 1e-9 * abs(1 / REFERENCE)


def test_feeder__a_section_longer_by_a_millimetre__is_seen():
    a = attach_ports(ladder(LENGTHS, 120.0, 0.17), 123e6, REFERENCE)
    b = attach_ports(ladder([0.311, *LENGTHS[1:]], 120.0, 0.17), 123e6, REFERENCE)
    assert np.abs(a.loading - b.loading).max() > 1e-4 * np.abs(a.loading).max()


@pytest.mark.parametrize("frequency", [60e6, 149.896229e6, 299.792458e6])
def test_lossless_network__passes_all_power(frequency):
    # With the gaps open and unit sources, power from the sources is what their own resistances take: S = 1 - 2 R Y0 is unitary.
    antenna = ladder(LENGTHS, 150.0, 0.3)
    found = attach_ports(antenna, frequency, REFERENCE)
    s = 1.0 - 2.0 * REFERENCE * found.admittance
    assert abs(abs(s[0, 0]) - 1.0) < 1e-12
    # Currents into the gaps: what the network delivers plus what the resistance takes is what the source gives.
    rng = np.random.default_rng(1)
    i_g = rng.normal(size=5) + 1j * rng.normal(size=5)
    v_s = np.array([rng.normal() + 1j * rng.normal()])
    v_g = found.transfer @ v_s - found.loading @ i_g
    i_p = found.transfer.T @ i_g + found.admittance @ v_s
    given = (v_s * i_p.conj()).real.sum() - REFERENCE * (np.abs(i_p) ** 2).sum()
    assert given == pytest.approx((v_g * i_g.conj()).real.sum(), abs=1e-10 * np.abs(v_g).max() * np.abs(i_g).max())


def test_loss__takes_power_and_grows_with_the_root_of_frequency():
    line = Line("a", "b", 100.0, 1.0, loss_db_per_m=0.5, loss_reference_hz=100e6)
    assert abs(line.propagation(100e6)) == pytest.approx(10 ** (-0.5 / 20))
    assert abs(line.propagation(400e6)) == pytest.approx(10 ** (-1.0 / 20))
    lossy = attach_ports(ladder(LENGTHS, 150.0, 0.3, loss_db_per_m=0.3), 123e6, REFERENCE)
    assert abs(1.0 - 2.0 * REFERENCE * lossy.admittance[0, 0]) < 1.0 - 1e-3


def one_gap(network, **port):
    return Antenna("one", rungs(1), [Port("x", node="in")], feeds=[FeedPoint("gap", 0)], network=network)


def test_matched_line__only_delays():
    found = attach_ports(one_gap(Network((Line("in", "gap", REFERENCE, 0.7, velocity_factor=0.8),))), 90e6, REFERENCE)
    delay = np.exp(-2j * np.pi * 90e6 * 0.7 / (0.8 * SPEED_OF_LIGHT))
    assert found.transfer[0, 0] == pytest.approx(delay)
    assert found.loading[0, 0] == pytest.approx(REFERENCE)


def test_quarter_wave_line__transforms_impedance():
    # Z0^2 / R, any text on transmission lines
    frequency = SPEED_OF_LIGHT / 4.0
    found = attach_ports(one_gap(Network((Line("in", "gap", 50.0, 1.0),))), frequency, REFERENCE)
    assert found.loading[0, 0] == pytest.approx(50.0**2 / REFERENCE)


def test_transformer__scales_impedance_by_the_square_of_its_ratio():
    found = attach_ports(one_gap(Network(transformers=(Transformer("in", "gap", 0.5),))), 100e6, REFERENCE)
    assert found.loading[0, 0] == pytest.approx(REFERENCE / 0.25)
    assert found.transfer[0, 0] == pytest.approx(2.0)


def test_branches__in_series_and_across():
    network = Network(branches=(Branch("in", "gap", resistance_ohm=30.0), Branch("gap", inductance_h=1e-7)))
    found = attach_ports(one_gap(network), 100e6, REFERENCE)
    coil = 2j * np.pi * 100e6 * 1e-7
    assert found.loading[0, 0] == pytest.approx(1.0 / (1.0 / 130.0 + 1.0 / coil))
    capacitor = Branch("a", resistance_ohm=1.0, inductance_h=2e-9, capacitance_f=3e-12)
    omega = 2 * np.pi * 50e6
    assert capacitor.impedance(50e6) == pytest.approx(1.0 + 1j * omega * 2e-9 + 1 / (1j * omega * 3e-12))


def test_shorted_and_open_stub__are_tangent_and_cotangent():
    frequency, length = 100e6, 0.4
    angle = 2 * np.pi * frequency * length / SPEED_OF_LIGHT
    for shorted, reactance in ((True, 75.0 * np.tan(angle)), (False, -75.0 / np.tan(angle))):
        network = Network((Line("in", "gap", REFERENCE, 1e-9),), (Stub("gap", 75.0, length, shorted=shorted),))
        found = attach_ports(one_gap(network), frequency, REFERENCE)
        assert found.loading[0, 0] == pytest.approx(1.0 / (1.0 / REFERENCE + 1.0 / (1j * reactance)), rel=1e-6)


def test_port_on_its_own_gap__through_the_general_path__is_the_plain_one():
    plain = Antenna("plain", rungs(2), [Port("x", 0), Port("y", 1)])
    along = Antenna("general", rungs(2), [Port("x", 0), Port("y", node="g")], feeds=[FeedPoint("g", 1)],
                    network=Network(branches=(Branch("g", resistance_ohm=1e12),)))  # fmt: skip
    a, b = attach_ports(plain, 100e6, REFERENCE), attach_ports(along, 100e6, REFERENCE)
    np.testing.assert_allclose(a.loading, b.loading, atol=1e-6)
    np.testing.assert_allclose(a.transfer, b.transfer, atol=1e-9)
    np.testing.assert_allclose(a.admittance, b.admittance, atol=1e-11)


def test_two_half_wave_shorts_in_parallel__short_the_gap():
    # the current that goes round between them is undetermined, but nothing outside depends on it
    network = Network((Line("in", "gap", 50.0, 0.3),), (Stub("gap", 75.0, 1.0), Stub("gap", 75.0, 1.0)))
    found = attach_ports(one_gap(network), SPEED_OF_LIGHT / 2.0, REFERENCE)
    assert abs(found.loading[0, 0]) < 1e-9
    assert abs(found.transfer[0, 0]) < 1e-9


def test_resonance_without_loss__is_refused_with_its_frequency():
    # nothing but an open half-wave stub across the second gap: no current can flow into it, whatever the voltage
    antenna = Antenna(
        "stuck",
        rungs(2),
        [Port("x", 0)],
        feeds=[FeedPoint("g", 1)],
        network=Network(stubs=(Stub("g", 75.0, 1.0, shorted=False),)),
    )
    with pytest.raises(SolveError, match=r"'stuck'.*149896229 Hz.*resonates"):
        attach_ports(antenna, SPEED_OF_LIGHT / 2.0, REFERENCE)
    assert np.isfinite(attach_ports(antenna, SPEED_OF_LIGHT / 2.0 + 10.0, REFERENCE).loading).all()


@pytest.mark.parametrize(
    ("make", "words"),
    [
        (lambda: one_gap(Network((Line("in", "gapp", 50.0, 1.0),))), "nothing is connected to gap 'gap'"),
        (
            lambda: one_gap(Network((Line("in", "gap", 50.0, 1.0), Line("gap", "d11", 50.0, 1.0)))),
            "node 'd11' is named once only",
        ),
        (lambda: one_gap(Network((Line("in", "in", 50.0, 1.0),))), "begins and ends at node 'in'"),
        (lambda: Line("a", "b", -50.0, 1.0), "impedance_ohm -50"),
        (lambda: Line("a", "b", 50.0, 0.0), "length_m 0"),
        (lambda: Line("a", "b", 50.0, 1.0, velocity_factor=1.5), "at most 1"),
        (lambda: Line("a", "b", 50.0, 1.0, loss_db_per_m=float("nan")), "loss_db_per_m"),
        (lambda: Branch("a", resistance_ohm=-1.0), "resistance_ohm"),
        (lambda: Branch("a", capacitance_f=0.0), "capacitance_f"),
        (lambda: Transformer("a", "b", 0.0), "ratio"),
        (lambda: Port("x"), "either the wire"),
        (lambda: Port("x", 0, node="a"), "either the wire"),
        (lambda: Antenna("a", rungs(1), [Port("x", 0)], feeds=[FeedPoint("x", 0, 0.2)]), "2 gaps are called 'x'"),
    ],
)
def test_networks__that_cannot_be__are_refused(make, words):
    with pytest.raises(GeometryError, match=words):
        make()


def test_nearest_gap__is_the_electrically_nearest_behind_the_network():
    """A port at a free node; paths by hand: 2 m / 0.5 = 4 m to g0, 1 m + 1.5 m = 2.5 m over a free node to g2."""
    lines = [Line("in", "g0", 50.0, 2.0, velocity_factor=0.5), Line("in", "mid", 50.0, 1.0), Line("mid", "g2", 50.0, 1.5)]
    feeds = [FeedPoint(f"g{i}", i) for i in range(3)]

    def nearest(*more, **elements):
        network = Network((*lines, *more), **elements)
        antenna = Antenna("three", rungs(3), [Port("x", node="in")], feeds=feeds, network=network)
        assert antenna.port_gaps[0] == antenna.gaps[antenna.nearest_gap(antenna.ports[0])]
        return antenna.nearest_gap(antenna.ports[0])

    far = Line("g0", "g1", 50.0, 9.0)
    assert nearest(far) == 2
    assert nearest(Line("in", "g1", 50.0, 2.4)) == 1
    # branches in series and transformers take no time; a branch across a node leads nowhere
    assert nearest(far, branches=(Branch("mid", "g1", resistance_ohm=5.0),)) == 1
    assert nearest(far, transformers=(Transformer("in", "g0", 2.0),)) == 0
    assert nearest(far, branches=(Branch("in", capacitance_f=1e-12),)) == 2
    # a port with its own gap, or at a feed's node, looks into that one
    own = Antenna("own", rungs(2), [Port("x", 0), Port("y", node="g")], feeds=[FeedPoint("g", 1)],
                  network=Network((Line("x", "g", 50.0, 1.0),)))  # fmt: skip
    assert [own.nearest_gap(port) for port in own.ports] == [0, 1]


def test_nearest_gap__gives_a_port_behind_a_network_its_azimuth():
    wires = [Wire((-0.4, 0.0, 1.0), (0.4, 0.0, 1.0), 0.002), Wire((0.0, -0.4, 1.1), (0.0, 0.4, 1.1), 0.002)]
    feeds = [FeedPoint("a", 0), FeedPoint("b", 1)]
    network = Network((Line("in", "b", 50.0, 0.2), Line("b", "a", 50.0, 0.2)))
    antenna = Antenna("far", wires, [Port("p", node="in")], feeds=feeds, network=network)
    assert Station([Placed(antenna)]).port_nominal_phi_rad[0] == pytest.approx(np.pi / 2)


def test_ports__that_look_into_gaps_in_another_order__are_not_swapped():
    wires = [Wire((-0.4, 0, 1.0), (0.4, 0, 1.0), 0.002), Wire((-0.2, 2, 1.0), (0.2, 2, 1.0), 0.002)]
    antenna = Antenna("two", wires, [Port("p", node="f"), Port("q", 1)], feeds=[FeedPoint("f", 0)])
    # gaps: that of port q first, then the feed
    assert antenna.nodes == ("q", "f")
    found = attach_ports(antenna, 100e6, REFERENCE)
    np.testing.assert_allclose(found.transfer, [[0, 1], [1, 0]], atol=1e-12)
    np.testing.assert_allclose(found.loading, REFERENCE * np.eye(2), atol=1e-9)
