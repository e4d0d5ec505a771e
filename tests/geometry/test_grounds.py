"""Grounds: what they refuse, what they are at a frequency, soil tables from files."""

import numpy as np
import pytest
from numpy.testing import assert_allclose

from elbowroom.base.errors import JobFileError, ModelRangeError
from elbowroom.geometry.grounds import GROUND_TYPES, FreeSpace, MeshOnSoil, PerfectGround
from elbowroom.geometry.soil_tables import read_soil_table
from elbowroom.geometry.soils import LayeredSoil, MoistSoil, Soil, TabulatedSoil

TABLE = TabulatedSoil((50e6, 150e6, 350e6), (12.0, 10.0, 8.0), (0.01, 0.02, 0.04))


@pytest.mark.parametrize(
    ("make", "told"),
    [
        (lambda: Soil(0.9, 0.01), "relative_permittivity 0.9: expected a number from 1 to 100"),
        (lambda: Soil(10.0, -0.1), "conductivity_s_per_m -0.1"),
        (lambda: Soil(np.nan, 0.1), "relative_permittivity"),
        (lambda: Soil(10.0, np.inf), "conductivity_s_per_m"),
        (lambda: Soil(10.0, 0.01, 0.1), "tolerance"),
        (lambda: MoistSoil(0.6, 0.01), "water_content 0.6"),
        (lambda: MoistSoil(0.2, -0.01), "conductivity_s_per_m"),
        (lambda: TabulatedSoil((1e8, 1e8), (10.0, 10.0), (0.0, 0.0)), "rise"),
        (lambda: TabulatedSoil((1e8,), (10.0, 10.0), (0.0, 0.0)), "for each frequency"),
        (lambda: TabulatedSoil((), (), ()), "for each frequency"),
        (lambda: TabulatedSoil((1e8,), (0.5,), (0.0,)), "relative_permittivity"),
        (lambda: MeshOnSoil(Soil(10.0, 0.01), 0.1, 0.02), "wire_radius_m 0.02"),
        (lambda: MeshOnSoil(Soil(10.0, 0.01), 0.1, 0.0), "wire_radius_m"),
        (lambda: MeshOnSoil(Soil(10.0, 0.01), np.nan, 0.001), "pitch_m"),
        (lambda: MeshOnSoil(Soil(10.0, 0.01), 0.1, 0.001, 0.0), "wire_conductivity_s_per_m"),
        (lambda: MeshOnSoil(Soil(10.0, 0.01), 0.1, 0.001, 1e6, 0.5), "wire_relative_permeability"),
        (lambda: MeshOnSoil(PerfectGround(), 0.1, 0.001), "expected Soil"),
        (lambda: LayeredSoil((), Soil(10.0, 0.01)), "1 to 10 above the last, which has no end, got 0"),
        (lambda: LayeredSoil(((0.5, Soil(4.0, 0.0)),) * 11, Soil(10.0, 0.01)), "got 11"),
        (lambda: LayeredSoil(((0.5, Soil(4.0, 0.0)), (0.0, Soil(5.0, 0.0))), Soil(10.0, 0.01)), "thickness of layer 2"),
        (lambda: LayeredSoil(((np.nan, Soil(4.0, 0.0)),), Soil(10.0, 0.01)), "thickness of layer 1"),
        (lambda: LayeredSoil(((0.5, PerfectGround()),), Soil(10.0, 0.01)), "layer 1"),
        (lambda: LayeredSoil(((0.5, Soil(4.0, 0.0)),), MeshOnSoil(Soil(4.0, 0.0), 0.1, 1e-3)), "layer without end"),
        (lambda: LayeredSoil(((0.5, Soil(4.0, 0.0)),), Soil(10.0, 0.01), 1.0), "tolerance 1.0"),
    ],
)
def test_grounds__refuse_what_cannot_be(make, told):
    with pytest.raises(ModelRangeError, match=told):
        make()


def test_tabulated_soil__is_interpolated_and_never_extrapolated():
    assert TABLE.at(150e6) == Soil(10.0, 0.02)
    here = TABLE.at(250e6)
    assert_allclose([here.relative_permittivity, here.conductivity_s_per_m], [9.0, 0.03], rtol=1e-12)
    with pytest.raises(ModelRangeError, match="outside its 50 to 350 MHz"):
        TABLE.at(49e6)
    mesh = MeshOnSoil(TABLE, 0.1, 0.001)
    assert mesh.at(150e6) == MeshOnSoil(Soil(10.0, 0.02), 0.1, 0.001)
    assert mesh.tolerance == TABLE.tolerance


def test_moist_soil__follows_the_published_polynomial():
    """Topp, Davis and Annan 1980, equation 7, from memory; their figure puts water contents of 0.1, 0.2, 0.4 near 5.3, 10.1, 25."""
    found = [MoistSoil(t, 0.01).at(150e6).relative_permittivity for t in (0.0, 0.1, 0.2, 0.4)]
    assert_allclose(found, [3.03, 5.3433, 10.1164, 25.2012], rtol=1e-6)
    # the inverse polynomial of the same paper (equation 7 for the water content), from memory, agrees within its stated 0.013
    ka = np.array(found)
    back = -5.3e-2 + 2.92e-2 * ka - 5.5e-4 * ka**2 + 4.3e-6 * ka**3
    assert_allclose(back[1:], [0.1, 0.2, 0.4], atol=0.013)
    with pytest.raises(ModelRangeError, match="outside 1 to 1000 MHz"):
        MoistSoil(0.2, 0.01).at(1.2e9)


def test_layered_soil__is_known_where_all_its_layers_are():
    layered = LayeredSoil(((0.4, MoistSoil(0.05, 1e-3, 1e-7)), (1.0, TABLE)), Soil(25.0, 0.05), 1e-6)
    here = layered.at(250e6)
    assert here == LayeredSoil(((0.4, MoistSoil(0.05, 1e-3).at(250e6)), (1.0, Soil(9.0, 0.03))), Soil(25.0, 0.05), 1e-6)
    assert [thickness for thickness, _ in here.strata] == [0.4, 1.0, np.inf]
    assert {soil.tolerance for _, soil in here.strata} == {1e-6}
    assert MeshOnSoil(layered, 0.1, 1e-3).at(250e6).strata == here.strata
    assert layered.kinks_hz == MeshOnSoil(layered, 0.1, 1e-3).kinks_hz == (50e6, 150e6, 350e6)
    with pytest.raises(ModelRangeError, match="outside its 50 to 350 MHz"):
        layered.at(40e6)


def test_layered_soil__echoes_come_from_as_deep_as_loss_lets_them():
    dry, wet = Soil(4.0, 1e-3), Soil(25.0, 0.05)
    assert_allclose(LayeredSoil(((0.5, dry),), wet).echo_path_m, 2.0 * 0.5 * 2.0, rtol=1e-12)
    # 20 m of the wet soil take exp(-20 0.05 377/5) = 1e-33 of what crosses it twice
    assert_allclose(LayeredSoil(((0.5, dry), (20.0, wet)), dry).echo_path_m, 2.0, rtol=1e-12)
    assert LayeredSoil(((20.0, wet),), dry).echo_path_m == 0.0
    assert_allclose(MeshOnSoil(LayeredSoil(((0.5, TABLE),), wet), 0.1, 1e-3).echo_path_m, np.sqrt(12.0), rtol=1e-12)
    assert all(g.echo_path_m == 0.0 for g in (FreeSpace(), PerfectGround(), wet, TABLE, MeshOnSoil(wet, 0.1, 1e-3)))


def test_all_grounds__say_what_they_are():
    grounds = [FreeSpace(), PerfectGround(), Soil(10.0, 0.01), TABLE, MoistSoil(0.2, 0.01), MeshOnSoil(TABLE, 0.1, 1e-3, 1e7)]
    grounds.append(LayeredSoil(((0.4, TABLE),), Soil(25.0, 0.05)))
    assert {type(g) for g in grounds} == set(GROUND_TYPES)
    assert len({g.describe() for g in grounds}) == len(grounds)
    for ground in grounds:
        assert ground.lossy == (not ground.open_below and not ground.conducting)
        # what a solution depends on has no frequency in it any more
        assert ground.at(150e6).at(50e6) == ground.at(150e6)
    assert grounds[0].at(1e8) is grounds[0]
    assert grounds[1].at(1e8) is grounds[1]


def test_soil_table__is_read_and_its_faults_are_told_together(tmp_path):
    path = tmp_path / "soil.csv"
    path.write_text("# measured\nfrequency_hz, relative_permittivity, conductivity_s_per_m\n50e6, 12, 0.01\n150e6, 10, 0.02\n")
    assert read_soil_table(path, 1e-6) == TabulatedSoil((50e6, 150e6), (12.0, 10.0), (0.01, 0.02), 1e-6)
    path.write_text("frequency_hz,relative_permittivity,conductivity_s_per_m\n150e6,10,\n50e6,0.5,0.01\n50e6,2,nan\n-1,3,x\n")
    with pytest.raises(JobFileError) as told:
        read_soil_table(path)
    assert [p.split(":")[0] for p in told.value.problems] == [
        "line 2",
        "line 3",
        "line 3",
        "line 4",
        "line 4",
        "line 5",
        "line 5",
    ]
    text = str(told.value)
    for part in ("a number in siemens per metre expected", "does not lie above", "from 1 to 100", "a positive frequency"):
        assert part in text
    path.write_text("frequency_hz,permittivity,conductivity_s_per_m\n")
    with pytest.raises(JobFileError, match="no frequencies below the header"):
        read_soil_table(path)


@pytest.mark.parametrize("wire", [(1e-300,), (0.0,), (1e-3, 1e-300), (1e-3, 0.0)])
def test_mesh__of_wires_that_are_none_is_refused(wire):
    with pytest.raises(ModelRangeError, match=r"wire_(radius_m|conductivity_s_per_m) .*: expected a number from 1"):
        MeshOnSoil(Soil(10.0, 0.01), 0.1, *wire)
