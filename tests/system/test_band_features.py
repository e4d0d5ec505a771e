"""Resonances far narrower than the step of the channels are found, of a design alone and of the array."""

import numpy as np
import pytest

from elbowroom.geometry.antennas import Antenna, Port
from elbowroom.geometry.grounds import FreeSpace
from elbowroom.geometry.stations import Placed, Station
from elbowroom.geometry.wires import Wire
from elbowroom.system.band import BandSegment, SegmentSettings
from elbowroom.system.band_features import SINGLE_FIT, narrow_poles, scanned

STEP_HZ = 1e6


def resonator(f, poles, seed=0):
    """Answers of resonances at given poles over a smooth rest, as random sources inside would see them."""
    rng = np.random.default_rng(seed)
    out = np.zeros(6, dtype=complex)
    for pole in [*poles, 120e6 + 30e6j, 190e6 + 25e6j]:
        shape = rng.normal(size=6)
        out += 1e6 * shape / (f - pole)
    return out


@pytest.mark.parametrize("half_width", [1e5, 3e3, 10.0, 0.0])
def test_scan__finds_resonances_of_any_width(half_width):
    poles = [151.2345e6 + 1j * half_width, 158.4e6 + 5j * half_width]
    found = scanned(lambda f: resonator(f, poles), 140e6, 170e6, 1e6)
    assert len(found) == 2
    for (middle, width), pole in zip(found, poles, strict=True):
        assert middle == pytest.approx(pole.real, abs=max(1e-3 * pole.imag, 2.0))
        assert width == pytest.approx(pole.imag, rel=1e-3, abs=2.0)


def test_scan__sees_nothing_where_nothing_is():
    assert scanned(lambda f: resonator(f, []), 140e6, 170e6, 1e6) == []


def test_narrow_poles__are_found_through_rounding_of_single_precision():
    pole = 151.4321e6 + 2e3j
    nodes = np.arange(140e6, 170.1e6, STEP_HZ)
    values = np.array([resonator(f, [pole]) for f in nodes])
    values *= 1.0 + 1e-6 * np.random.default_rng(0).normal(size=values.shape)
    found = [p for p, height in narrow_poles(nodes, values, SINGLE_FIT, 0.5 * STEP_HZ) if height > 0.03]
    assert len(found) == 1
    # A step of a thousand half-widths away, rounding leaves a hundredth of the step.
    assert abs(found[0] - pole) < 0.01 * STEP_HZ


def pair_of_wires(spacing_m):
    """A dipole below which two thin wires run nearly across it, close together: as a line they hardly radiate."""
    wires = [Wire((-0.48, 0.0, 1.0), (0.48, 0.0, 1.0), radius=0.002)]
    wires += [Wire((-0.1 + y, -0.45, 0.75), (0.1 + y, 0.45, 0.75), radius=0.0005) for y in (0.0, spacing_m)]
    return Antenna("dipole over a line", wires=wires, ports=[Port("x", wire=0, position=0.5, gap=0.01)])


@pytest.fixture(scope="module")
def narrow_segment():
    antenna = pair_of_wires(0.008)
    return BandSegment(
        Station([Placed(antenna), Placed(antenna, (2.0, 0.3, 0.0))], FreeSpace()), 157e6, 167e6, SegmentSettings(1e-3)
    )


NAME = "dipole over a line"


def test_features__of_a_lossless_design_lie_where_the_station_answers_most(narrow_segment):
    features = narrow_segment.features(0.5 * STEP_HZ)
    assert [f.where for f in features] == [NAME]
    found = features[0]
    # A few thousandths of a step: no channel comes near it.
    assert 10.0 < found.half_width_hz < 5e-3 * STEP_HZ
    # Two such antennas have two resonances close by. The largest answer of sources inside, of all frequencies there, is theirs.
    frequencies = found.frequency_hz + found.half_width_hz * np.array([-300.0, -30.0, -8.0, -3.0, 0.0, 3.0, 8.0, 30.0, 300.0])
    answers = []
    for f in frequencies:
        narrow_segment.solve(float(f))
        answers.append(np.abs(narrow_segment.probed[float(f)]).max())
    assert 2 <= int(np.argmax(answers)) <= 6
    assert max(answers) > 10.0 * max(answers[0], answers[-1])


def test_features__of_the_array_are_found_from_channels_that_miss_them(narrow_segment):
    alone = next(f for f in narrow_segment.features(0.5 * STEP_HZ) if f.where == NAME)
    narrow_segment.probed.clear()
    channels = alone.frequency_hz + 0.5 * STEP_HZ * (np.arange(-9, 9) + 0.37)
    for f in channels[(channels > narrow_segment.low_hz) & (channels < narrow_segment.high_hz)]:
        narrow_segment.solve(float(f))
    of_array = [f for f in narrow_segment.features(0.5 * STEP_HZ) if f.where == "array"]
    assert of_array
    assert min(abs(f.frequency_hz - alone.frequency_hz) for f in of_array) < 0.02 * STEP_HZ
