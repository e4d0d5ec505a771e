"""Terminations over frequency: circuits, sampled reflections, and what is refused."""

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from elbowroom.base.errors import ModelRangeError
from elbowroom.system.terminations import (
    ActiveImpedance,
    ParallelCircuit,
    SampledReflection,
    SeriesCircuit,
    negative_resistance,
    port_termination_text,
    reflection_of,
    termination_at,
)


def test_series__is_the_sum_of_impedances():
    circuit = SeriesCircuit(50.0, 1e-7, 10e-12)
    omega = 2 * np.pi * 80e6
    assert circuit.impedance(80e6) == pytest.approx(50 + 1j * omega * 1e-7 + 1 / (1j * omega * 10e-12), rel=1e-14)
    assert SeriesCircuit(50.0).impedance(1e8) == 50.0


def test_parallel__is_the_sum_of_admittances():
    circuit = ParallelCircuit(200.0, 1e-7, 10e-12)
    omega = 2 * np.pi * 80e6
    expected = 1 / (1 / 200 + 1 / (1j * omega * 1e-7) + 1j * omega * 10e-12)
    assert circuit.impedance(80e6) == pytest.approx(expected, rel=1e-14)
    assert ParallelCircuit(resistance_ohm=200.0).impedance(1e8) == 200.0


def test_circuits__at_the_edge_are_open_and_short():
    assert termination_at(ParallelCircuit(), 1e8) == "open"
    assert termination_at(SeriesCircuit(), 1e8) == "short"
    assert termination_at(SampledReflection((1e8, 2e8), (1.0, 1.0), 50.0), 1.5e8) == "open"
    assert termination_at(SampledReflection((1e8, 2e8), (-1.0, -1.0), 50.0), 1.5e8) == "short"
    for plain in ("open", "short", 75.0, 3 - 4j):
        assert termination_at(plain, 1e8) == plain


def test_sampled__is_exact_at_samples_and_linear_in_the_reflection_between():
    sampled = SampledReflection((1e8, 2e8, 4e8), (0.5, -0.5j, 0.1 + 0.2j), 50.0)
    assert sampled.reflection_at(2e8) == -0.5j
    assert sampled.reflection_at(1.5e8) == pytest.approx(0.25 - 0.25j, rel=1e-14)
    assert sampled.impedance(1e8) == pytest.approx(150.0, rel=1e-14)
    # what counts in a station is the reflection against its own reference
    seen = reflection_of([termination_at(sampled, 3e8)], 1, 50.0)[0]
    assert seen == pytest.approx(0.05 - 0.15j, rel=1e-13)


@given(
    st.lists(st.tuples(st.floats(0, 1), st.floats(-np.pi, np.pi)), min_size=2, max_size=6),
    st.floats(0.0, 1.0),
    st.floats(1.0, 1e4),
)
def test_sampled__passive_samples_stay_passive_between(points, where, reference):
    reflection = [m * np.exp(1j * a) for m, a in points]
    frequency = 1e8 + 1e6 * np.arange(len(points))
    sampled = SampledReflection(tuple(frequency), tuple(reflection), reference)
    value = termination_at(sampled, frequency[0] + where * (frequency[-1] - frequency[0]))
    assert abs(reflection_of([value], 1, 100.0)[0]) <= 1.0 + 1e-12


@pytest.mark.parametrize("frequency", [0.9e8, 4.1e8])
def test_sampled__outside_its_range_is_an_error_that_names_it(frequency):
    sampled = SampledReflection((1e8, 4e8), (0.1, 0.2), 50.0, "lna.s1p")
    with pytest.raises(ModelRangeError, match=r"lna\.s1p: covers 100000000 to 400000000 Hz; .* Hz lies outside"):
        termination_at(sampled, frequency)


def test_sampled__printed_digits_may_round_beyond_one_but_no_more():
    rounded = SampledReflection((1e8,), (1.000004j,), 50.0)
    assert abs(rounded.reflection[0]) == pytest.approx(1.0, abs=1e-15)
    assert termination_at(rounded, 1e8).real >= 0.0
    with pytest.raises(ModelRangeError, match=r"negative resistance at 100000000 Hz \(reflection of magnitude 1\.001\)"):
        SampledReflection((1e8,), (1.001,), 50.0)


def test_negative_resistance__only_where_it_is_meant():
    with pytest.raises(ModelRangeError, match="resistance -5 ohm is negative"):
        reflection_of(-5.0, 1, 100.0)
    assert reflection_of(ActiveImpedance(-5.0), 1, 100.0)[0] == pytest.approx(-105 / 95)
    with pytest.raises(ModelRangeError, match="undoes the reference"):
        reflection_of(ActiveImpedance(-100.0), 1, 100.0)
    with pytest.raises(ModelRangeError, match="resistance_ohm"):
        SeriesCircuit(-5.0)
    for active in (
        SeriesCircuit(-5.0, allow_negative_resistance=True),
        ParallelCircuit(-5.0, allow_negative_resistance=True),
        SampledReflection((1e8,), (1.2,), 50.0, allow_negative_resistance=True),
        ActiveImpedance(-5.0),
    ):
        assert negative_resistance(active)
        value = termination_at(active, 1e8)
        assert value.real < 0.0
        assert abs(reflection_of([value], 1, 100.0)[0]) > 1.0
    for passive in (SeriesCircuit(5.0), ParallelCircuit(), "open", 5.0, SampledReflection((1e8,), (1.0,), 50.0)):
        assert not negative_resistance(passive)


@pytest.mark.parametrize(
    ("make", "match"),
    [
        (lambda: SeriesCircuit(math.nan), "resistance_ohm = nan"),
        (lambda: SeriesCircuit(1.0, -1e-9), "inductance_h"),
        (lambda: SeriesCircuit(1.0, 0.0, 0.0), "capacitance_f = 0.0: expected a positive"),
        (lambda: ParallelCircuit(0.0), "resistance_ohm = 0.0: expected a positive"),
        (lambda: ParallelCircuit(1.0, math.inf), "inductance_h = inf"),
        (lambda: ParallelCircuit(0.0, allow_negative_resistance=True), "resistance_ohm = 0.0"),
        (lambda: SeriesCircuit(1.0).impedance(0.0), "frequency_hz = 0.0"),
        (lambda: SampledReflection((), (), 50.0), "as many reflections"),
        (lambda: SampledReflection((1e8, 1e8), (0.0, 0.0), 50.0), "that rise"),
        (lambda: SampledReflection((1e8,), (math.nan,), 50.0), "finite"),
        (lambda: SampledReflection((1e8,), (0.0,), 0.0), "positive resistance"),
        (lambda: SampledReflection((1e8,), (0.0, 0.1), 50.0), "as many reflections"),
    ],
)
def test_bad_values__are_refused(make, match):
    with pytest.raises(ModelRangeError, match=match):
        make()


def test_text__says_the_parts():
    assert port_termination_text(SeriesCircuit(50.0, 1e-7, 1e-11)) == "50 ohm + 1e-07 H + 1e-11 F in series"
    assert port_termination_text(SeriesCircuit()) == "0 ohm in series"
    assert port_termination_text(ParallelCircuit(50.0)) == "50 ohm in parallel"
    assert port_termination_text(SampledReflection((1e8, 2e8), (0, 0), 50.0, "a.s1p")) == "a.s1p (100 to 200 MHz, 2 samples)"
    assert (port_termination_text(75.0), port_termination_text(75 + 2j), port_termination_text("open")) == (
        "75",
        "[75, 2]",
        "open",
    )
