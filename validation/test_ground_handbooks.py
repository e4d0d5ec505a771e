"""Impedances over real ground against formulas and series that were printed before such fields were summed by computers.

- Monteath's compensation theorem (Proc. IEE 98 part IV, 1951, 23; Wait in Collin and Zucker, "Antenna Theory", part 2, chapter 23,
  1969; both from memory): an antenna over ground of small surface impedance Zs has the impedance it has over a perfect plane,
  and Zs/I^2 times the integral over the plane of the square of the magnetic field along it.
- Carson's earth-return impedance of an overhead wire (Bell System Technical Journal 5, 1926, 539), whose series stands in handbooks
  of power engineering (coefficients from memory; the integral beside it is Carson's too).
- A horizontal dipole that lies on a dielectric: the power in waves without a vertical electric field, in closed form (Lukosz and
  Kunz, J. Opt. Soc. Am. 67, 1977, 1607; from memory, and an elementary integral).
"""

from __future__ import annotations

import numpy as np
import pytest
from scipy.integrate import quad

from elbowroom.base.constants import IMPEDANCE_OF_VACUUM, VACUUM_PERMITTIVITY, wavenumber_of
from elbowroom.geometry.antennas import Antenna, Port, Wire
from elbowroom.geometry.grounds import FreeSpace, PerfectGround
from elbowroom.geometry.soils import Soil
from elbowroom.geometry.stations import Placed, Station
from elbowroom.kernels.soil.response import bare_soil
from elbowroom.kernels.soil.sommerfeld import kernels_at
from elbowroom.system.discretisation import discretise
from elbowroom.system.solving import solve_isolated

pytestmark = pytest.mark.validation

FREQUENCY_HZ = 150e6
K = wavenumber_of(FREQUENCY_HZ)
MU0 = IMPEDANCE_OF_VACUUM**2 * VACUUM_PERMITTIVITY


# --- compensation theorem


def magnetic_field_squared(heights, moments, k):
    """Integral over the plane of the square of the magnetic field that upright current elements and their images make there.

    Each element's field is moment sin(theta) (jk + 1/R) exp(-jkR)/(4 pi R), twice with the image.  The square turns as exp(-2jkR): it
    is summed along distances that bend into the lower half plane, where it decays.
    """
    total = 0.0
    nodes, weights = np.polynomial.legendre.leggauss(24)
    corner = 0.5 * heights.min()
    real = np.concatenate([np.linspace(0.0, corner, 5), np.geomspace(corner, 4.0 * heights.max(), 25)[1:]])
    bent = np.concatenate([[0.0], np.geomspace(0.02 / k, 20.0 / k, 24)])
    for edges, start, slope in ((real, 0.0, 1.0), (bent, real[-1], 1.0 - 1.0j)):
        for low, high in zip(edges[:-1], edges[1:], strict=True):
            t = 0.5 * (low + high) + 0.5 * (high - low) * nodes
            rho = start + slope * t
            distance = np.sqrt(rho[:, None] ** 2 + heights**2)
            wave = np.exp(-1j * k * distance) / (4.0 * np.pi * distance)
            field = 2.0 * ((rho[:, None] / distance) * (1j * k + 1.0 / distance) * wave) @ moments
            total += np.sum(field**2 * 2.0 * np.pi * rho * slope * weights) * 0.5 * (high - low)
    return total


@pytest.mark.parametrize("lowest_m", [0.06, 0.5])
def test_upright_dipole__over_ground_that_conducts_well_is_compensated_as_monteath_says(record, lowest_m):
    """The current is held; what is left falls with the surface impedance, of which the theorem knows the first power."""
    design = Antenna("upright", [Wire((0, 0, lowest_m), (0, 0, lowest_m + 0.96), 1e-4)], [Port("p", 0)])

    def placed(ground):
        return discretise(Station([Placed(design, (0, 0, 0))], ground), FREQUENCY_HZ).kinds[0]

    plane = placed(PerfectGround())
    station = discretise(Station([Placed(design, (0, 0, 0))], FreeSpace()), FREQUENCY_HZ)
    current = solve_isolated(station)[0].currents[:, 0]
    sampled = plane.samples(lowest_m, K, 1e-10)
    squared = magnetic_field_squared(sampled.points[2], sampled.currents[2] @ current, K)
    ratios = []
    for conductivity in (1e2, 1e4):
        eps = 1.0 - 1j * conductivity / (2.0 * np.pi * FREQUENCY_HZ * VACUUM_PERMITTIVITY)
        change = current @ (placed(Soil(1.0, conductivity, 1e-8)).self_block - plane.self_block) @ current
        ratios.append(complex(change / (IMPEDANCE_OF_VACUUM / np.sqrt(eps) * squared)))
    record(
        f"change of impedance of an upright dipole {lowest_m} m over conducting ground, over Monteath's", ratios[1], 1.0,
        absolute=6.0 / abs(np.sqrt(eps)) + 1e-3, wrong=[-1.0, 1.0j, 1.02], source="compensation theorem (Monteath 1951)",
    )  # fmt: skip
    assert abs(ratios[1] - 1.0) < 0.2 * abs(ratios[0] - 1.0) < 0.1


# --- Carson's overhead wire


def carson_series(r):
    """Return P + jQ of Carson's series for one wire."""
    log = np.log(2.0 / r)
    p = np.pi / 8 - r / (3 * np.sqrt(2)) + r**2 / 16 * (0.6728 + log) + r**3 / (45 * np.sqrt(2)) - np.pi * r**4 / 1536
    q = -0.0386 + 0.5 * log + r / (3 * np.sqrt(2)) - np.pi * r**2 / 64 + r**3 / (45 * np.sqrt(2)) - r**4 / 384 * (log + 1.0895)
    return p + 1j * q


def carson_integral(r):
    """Return the integral of (sqrt(m^2 + j) - m) exp(-r m) over m from 0."""
    parts = [
        quad(lambda m, part=part: getattr((np.sqrt(m * m + 1j) - m) * np.exp(-r * m), part), 0.0, np.inf, epsabs=1e-11)[0]
        for part in ("real", "imag")
    ]
    return parts[0] + 1j * parts[1]


@pytest.mark.parametrize("r", [0.05, 0.3, 0.8])
def test_overhead_wire__has_carsons_impedance(record, r):
    """The kernel of horizontal currents, added up along a straight wire, at a frequency where displacement currents do not count."""
    frequency, conductivity = 1e4, 1.0
    k = wavenumber_of(frequency)
    omega = 2.0 * np.pi * frequency
    scale = np.sqrt(omega * MU0 * conductivity)
    height = 0.5 * r / scale
    response = bare_soil(k, 1.0 - 1j * conductivity / (omega * VACUUM_PERMITTIVITY))
    nodes, weights = np.polynomial.legendre.leggauss(16)
    edges = np.concatenate([[0.0], np.geomspace(0.5 * height, 2e5, 50)])
    middle, half = 0.5 * (edges[1:] + edges[:-1]), 0.5 * np.diff(edges)
    along = (middle[:, None] + half[:, None] * nodes).ravel()
    distance = np.sqrt(along**2 + (2.0 * height) ** 2)
    change = kernels_at(response, along, np.array([2.0 * height]))[0, :, 0] + np.exp(-1j * k * distance) / distance
    found = 2.0 * np.sum(change * (half[:, None] * weights).ravel())
    # j omega mu0/(4 pi) times it is the impedance per length; Carson's is omega mu0/pi (P + jQ)
    found = 0.25j * found
    record(
        f"earth-return impedance of a wire, r = {r}, over omega mu0/pi", found, carson_integral(r),
        relative=1e-4, wrong=[carson_integral(r).conjugate(), carson_integral(1.01 * r)], source="Carson 1926, integral",
    )  # fmt: skip
    record(
        f"earth-return impedance of a wire, r = {r}, over omega mu0/pi", found, carson_series(r),
        # the next term of both, r^5/(1575 sqrt(2)), twice for what follows it, and four printed digits
        absolute=1e-4 + 2.0 * r**5 / 1575, wrong=[carson_series(r).conjugate(), carson_series(1.01 * r)],
        source="Carson's series as in handbooks",
    )  # fmt: skip


# --- a dipole on a dielectric


@pytest.mark.parametrize("permittivity", [2.25, 4.0, 12.0])
def test_horizontal_dipole__on_a_dielectric_radiates_as_lukosz_and_kunz_say(record, permittivity):
    index = np.sqrt(permittivity)
    heights = np.array([4e-4, 2e-4])
    kernel = kernels_at(bare_soil(K, permittivity), np.array([0.0]), heights)[0, 0]
    power = 0.75 * (1.0 - kernel.imag / K)
    expected = 0.5 * (index**2 + index + 1.0) / (index + 1.0)
    record(
        f"power of a horizontal dipole on a dielectric of {permittivity}, transverse electric part", 2.0 * power[1] - power[0], expected,
        absolute=1e-5, wrong=[0.75, 0.999 * expected], source="Lukosz and Kunz 1977",
    )  # fmt: skip
