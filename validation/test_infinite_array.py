"""Reactions between many antennas, as assembly computes them, against Floquet's closed form of the infinite array.

A sinusoid is expanded in the basis of a straight antenna; its reactions with its copies on a lattice are taken from self blocks
and from the Gauss-point blocks that fill the matrix of every station; sums over growing, tapered lattices must tend to the scan
impedance of the infinite array.  The closed form is a sum over plane waves and shares nothing with the sum over antennas.

References
----------
.. [1] A. A. Oliner, R. G. Malech, in R. C. Hansen (ed.), Microwave Scanning Antennas vol. II, 1966, chapter 3: infinite arrays by
   Floquet modes.  From memory; formula derived in `references_array`.
.. [2] R. F. Harrington, Time-Harmonic Electromagnetic Fields, 1961, section 3-4: images.  From memory.
"""

from itertools import pairwise

import numpy as np
import pytest

import references
from elbowroom.base.constants import IMPEDANCE_OF_VACUUM, SPEED_OF_LIGHT
from elbowroom.geometry.antennas import Antenna, Port
from elbowroom.geometry.grounds import FreeSpace, PerfectGround
from elbowroom.geometry.mesh import MeshSettings
from elbowroom.geometry.stations import Placed, Station
from elbowroom.geometry.wires import Wire, segment_distances
from elbowroom.system.assembly import PairFiller
from elbowroom.system.discretisation import discretise
from independent import local_functions
from references_array import floquet_scan_impedance

pytestmark = pytest.mark.validation

FLOQUET = "Floquet modes (Oliner and Malech 1966; from memory, derived)"

# All lengths in metres at a wavelength of one metre.
FREQUENCY_HZ = SPEED_OF_LIGHT
K = 2.0 * np.pi
# Thin: neighbours are filaments to us and tubes on one axis to the closed form, which differ by (ka)^2 = 4e-7.
HALF_LENGTH, RADIUS = 0.2, 1e-4
ACROSS, ALONG, HEIGHT = 0.55, 0.5, 0.28
SIZES = np.array([8, 16, 32, 64])
# Phase gradients across and along the dipoles; no grating lobe radiates in either.
SCANS = {"broadside": (0.0, 0.0), "scanned": (0.3 * K, 0.25 * K)}
GROUNDS = {"free space": FreeSpace(), "perfect ground": PerfectGround()}
CHUNK = 400


# Smooth but for its middle, the sinusoid needs no elements that shrink towards ends and gaps.
MESH = MeshSettings(order=8, end_radii=1e4, gap_radii=1e4)


def expanded_sinusoid(mesh):
    """Return the unknowns (N,) of sin k(h - |s|), 1 A at most for h above a quarter wave, and their largest error [A].

    Every function is fixed by its values at the nodes and the Legendre moments of its slope: the integrated polynomials
    have orthogonal slopes.  The expansion of the mesh is then inverted, which it is where the current is continuous.
    """
    u, w = np.polynomial.legendre.leggauss(20)
    place = mesh.start[:, :1] + 0.5 * (u + 1.0) * (mesh.end - mesh.start)[:, :1]
    sign = mesh.tangent[:, 0]
    wanted = np.empty((mesh.n_elements, mesh.order + 1))
    for side, points in enumerate((mesh.start, mesh.end)):
        wanted[:, side] = sign * np.sin(K * (HALF_LENGTH - abs(points[:, 0])))
    slope = -0.5 * mesh.length[:, None] * np.sign(place) * K * np.cos(K * (HALF_LENGTH - abs(place)))
    for n in range(2, mesh.order + 1):
        legendre = np.polynomial.legendre.Legendre.basis(n - 1)(u)
        # slope = sum c_n sqrt((2n - 1)/2) P_{n-1}, and the square of P_{n-1} integrates to 2/(2n - 1).
        wanted[:, n] = np.sqrt(0.5 * (2 * n - 1)) * (slope @ (w * legendre))
    unknowns, *_ = np.linalg.lstsq(mesh.expansion.reshape(wanted.size, -1), wanted.ravel(), rcond=None)
    made = (mesh.expansion @ unknowns) @ local_functions(mesh.order, u).T
    return unknowns, float(abs(made - sign[:, None] * np.sin(K * (HALF_LENGTH - abs(place)))).max())


def lattice_reactions(ground, n):
    """Return (2n+1, 2n+1) [ohm]: reactions of the middle sinusoid with those m across and m' along; and the expansion's error."""
    # Two wires joined at the middle, where the sinusoid has its corner.  The port that a design must have loads nothing.
    wires = [Wire((-HALF_LENGTH, 0, 0), (0, 0, 0), RADIUS), Wire((0, 0, 0), (HALF_LENGTH, 0, 0), RADIUS)]
    design = Antenna("straight", wires, [Port("p", 0, gap=0.05)])
    height = HEIGHT if isinstance(ground, PerfectGround) else 0.0
    # A quarter of the lattice, the middle first; the rest are mirror images of it.
    across, along = (x.ravel() for x in np.meshgrid(np.arange(n + 1), np.arange(n + 1), indexing="ij"))
    places = np.stack([ALONG * along, ACROSS * across, np.full(along.size, height)], axis=1)
    d = discretise(Station([Placed(design, tuple(place)) for place in places], ground), FREQUENCY_HZ, mesh=MESH)
    (kind,) = d.kinds
    current, error = expanded_sinusoid(kind.mesh)
    filler = PairFiller(d)
    half = np.array([HALF_LENGTH, 0.0, 0.0])
    distance = segment_distances(places[0] - half, places[0] + half, places - half, places + half)
    levels = np.array([filler.level_of(x) for x in distance])
    assert levels[1:].min() >= 0
    reactions = np.empty(len(places), dtype=complex)
    reactions[0] = current @ kind.self_block @ current
    for level in np.unique(levels[1:]):
        chosen = 1 + np.flatnonzero(levels[1:] == level)
        for first in range(0, len(chosen), CHUNK):
            part = chosen[first : first + CHUNK]
            reactions[part] = [current @ block @ current for block in filler.sampled_blocks(0, part, int(level))]
    steps = abs(np.arange(-n, n + 1))
    return reactions.reshape(n + 1, n + 1)[np.ix_(steps, steps)], error


def tapered_sum(reactions, n, scan):
    """Return the sum over -n..n both ways with the phases of a scan, tapered by the fourth power of a cosine."""
    middle = reactions.shape[0] // 2
    part = reactions[middle - n : middle + n + 1, middle - n : middle + n + 1]
    steps = np.arange(-n, n + 1)
    taper = np.cos(0.5 * np.pi * steps / (n + 1)) ** 4
    across, along = (
        taper * np.exp(-1j * gradient * spacing * steps) for gradient, spacing in zip(scan, (ACROSS, ALONG), strict=True)
    )
    return across @ part @ along


def image_scan_impedance(distance, scan, modes=12):
    """Return the scan impedance [ohm] between an infinite array and a parallel copy at a distance [m].

    The sum over the columns of the copy is, by Poisson's formula, sum H0^(2)(kappa sqrt((m d)^2 + y^2)) exp(-j q m d)
    = (2/d) sum exp(-j k_m y)/k_m, k_m^2 = kappa^2 - (q + 2 pi m/d)^2; evanescent waves decay by exp(-6) in the first step.
    """
    steps = np.arange(-modes, modes + 1)
    beta = scan[1] + 2.0 * np.pi / ALONG * steps
    transverse = K**2 - beta**2
    strength = 4.0 * K**2 * (np.cos(beta * HALF_LENGTH) - np.cos(K * HALF_LENGTH)) ** 2 / transverse
    square = transverse[:, None] - (scan[0] + 2.0 * np.pi / ACROSS * steps) ** 2
    normal = np.where(square > 0.0, 1.0, -1j) * np.sqrt(abs(square))
    rows = 2.0 / ACROSS * np.exp(-1j * normal * distance) / normal
    return complex(IMPEDANCE_OF_VACUUM / (4.0 * K * ALONG) * np.sum(strength[:, None] * rows))


def infinite_array(ground, scan, radius=RADIUS):
    """Return the scan impedance [ohm] of the infinite array: tubes for itself, axes for the others, less its image."""
    own = floquet_scan_impedance(
        HALF_LENGTH, radius, ACROSS, ALONG, K, scan_kx=scan[0], scan_kz=scan[1], self_kernel="exact", coupling="axis"
    )
    return own - (image_scan_impedance(2.0 * HEIGHT, scan) if isinstance(ground, PerfectGround) else 0.0)


@pytest.fixture(scope="module", params=GROUNDS.values(), ids=GROUNDS.keys())
def lattice(request):
    reactions, error = lattice_reactions(request.param, int(SIZES[-1]))
    return request.param, reactions, error


def test_sinusoid__is_expanded_to_rounding_and_reacts_as_in_print(record, lattice):
    ground, reactions, error = lattice
    # Order 8 on elements of at most 0.2 wavelengths, u in [-1, 1]: (k h/2)^9/(9! 2^8) = 2e-10 of the current.
    assert 0.0 < error < 1e-9
    middle = len(reactions) // 2
    pairs = {"beside": (1, 0), "ahead": (0, 1), "askew": (2, -3)}
    for name, (across, along) in pairs.items():
        expected = (
            references.mutual_impedance(HALF_LENGTH, HALF_LENGTH, ACROSS * abs(across), ALONG * along, K)
            if across
            # One axis: the closed form needs a distance; a thousandth of the radius stands for none.
            else (references.mutual_impedance(HALF_LENGTH, HALF_LENGTH, 1e-3 * RADIUS, ALONG * along, K))
        )
        if isinstance(ground, PerfectGround):
            slant = np.hypot(ACROSS * across, 2.0 * HEIGHT)
            expected -= references.mutual_impedance(HALF_LENGTH, HALF_LENGTH, slant, ALONG * along, K)
        size = abs(references.self_impedance(HALF_LENGTH, RADIUS, K).real)
        # Gauss points good to 1e-6 of the kernel.
        record(
            f"reaction of sinusoids {name} [ohm], {ground.name}", reactions[middle + across, middle + along], expected,
            absolute=1e-6 * size, wrong=expected * (1.0 + 1e-5) + 1e-5 * size, source="induced-EMF closed form (Carter 1932; from memory)",
        )  # fmt: skip


def curvature(ground, scan, step=1e-2):
    """Return the sum of the second derivatives [ohm] of the scan impedance by the phases per cell, across and along."""
    total = 0.0
    for axis, spacing in enumerate((ACROSS, ALONG)):
        moved = [np.array(scan) + sign * np.eye(2)[axis] * step / spacing for sign in (1.0, -1.0)]
        total += sum(infinite_array(ground, tuple(m)) for m in moved) - 2.0 * infinite_array(ground, scan)
    return total / step**2


@pytest.mark.parametrize("scan_name", SCANS)
def test_growing_arrays__tend_to_the_infinite_one(record, lattice, scan_name):
    ground, reactions, _ = lattice
    scan = SCANS[scan_name]
    target = infinite_array(ground, scan)
    sums = np.array([tapered_sum(reactions, n, scan) for n in SIZES])
    deviations = abs(sums - target)
    # cos^4 is 1 - (pi t)^2/2 about the middle: the sum is short of its limit by pi^2/(2 (n+1)^2) times the curvature of the
    # scan impedance, in the closed form too; what is then left falls with the fourth power of the size.
    predicted = 0.5 * np.pi**2 / (SIZES + 1.0) ** 2 * curvature(ground, scan)
    left = abs(sums - target - predicted)
    orders = [
        np.log(a / b) / np.log((m + 1) / (n + 1)) for (a, b), (n, m) in zip(pairwise(deviations), pairwise(SIZES), strict=True)
    ]
    print(f"\n{ground.name}, {scan_name}: infinite array {target:.6f} ohm")
    for row in zip(SIZES, sums, deviations, [np.nan, *orders], left, strict=True):
        print(
            "  {:3d} on each side: {:.6f} ohm, off by {:.3e} ohm, order {:.2f}; but for the predicted part {:.1e} ohm".format(
                *row
            )
        )
    assert np.all(np.diff(deviations) < 0.0)
    assert np.all(np.diff(left) < 0.0)
    # By the largest pair the fourth power is less than a tenth of the square.
    assert abs(orders[-1] - 2.0) < 0.1
    wrong = [
        infinite_array(ground, scan, 1.01 * RADIUS),
        infinite_array(PerfectGround() if isinstance(ground, FreeSpace) else FreeSpace(), scan),
        infinite_array(ground, SCANS["broadside" if scan_name == "scanned" else "scanned"]),
        target + 1e-4 * abs(target),
    ]
    for n, value, part, before in zip(SIZES[1:], sums[1:], predicted[1:], left[:-1], strict=True):
        # A fourth power falls by 13 to 15 at each step; half of that is granted, for what is left of the ripple from the edges.
        # Below it all: Gauss points good to 1e-6 of some 1e2 ohm of neighbours that partly cancel.
        record(
            f"scan impedance [ohm] of {2 * n + 1} x {2 * n + 1} tapered, {scan_name}, {ground.name}", value - part, target,
            absolute=before / 7.0 + 1e-4, wrong=wrong if n == SIZES[-1] else [value - 2.0 * part, *wrong[1:3]], source=FLOQUET,
        )  # fmt: skip
