"""Tables of real ground in the store: made once, read back bit for bit, remade if damaged, kept by pruning."""

import numpy as np
import pytest

import elbowroom as er
from elbowroom.job.groundtables import GROUND_SCHEMA, table_key
from elbowroom.job.solve import SOLUTION_SCHEMA, solve
from elbowroom.kernels.soil import table as soil_table
from elbowroom.store import Hdf5Store

SOIL = er.Soil(relative_permittivity=8.0, conductivity_s_per_m=0.01, tolerance=1e-4)
FREQUENCY_HZ = 80e6


def station(east_m=2.0, ground=SOIL, height_m=0.9):
    dipole = er.crossed_dipoles(arm_length_m=0.6, height_m=height_m, wire_radius_m=0.003, droop_deg=0.0)
    return er.Station([er.Placed(dipole, (0.0, 0.0, 0.0)), er.Placed(dipole, (east_m, 0.0, 0.0))], ground=ground)


@pytest.fixture
def made(monkeypatch):
    """Count the tables that are made."""
    count = []
    original = soil_table.build_table

    def counting(*arguments, **options):
        count.append(arguments)
        return original(*arguments, **options)

    monkeypatch.setattr(soil_table, "build_table", counting)
    return count


@pytest.fixture
def store(tmp_path):
    return Hdf5Store(tmp_path / "store", SOLUTION_SCHEMA)


def test_stations_of_like_size__share_tables(store, made):
    solve(station(2.0), FREQUENCY_HZ, store=store)
    after_one = len(made)
    alone = solve(station(2.3), FREQUENCY_HZ)
    before = len(made)
    shared = solve(station(2.3), FREQUENCY_HZ, store=store)

    assert after_one >= 1
    assert len(made) == before + after_one - 1  # the mesh error has a station of its own, without a store
    assert len(store.beside(GROUND_SCHEMA).keys()) == 1
    np.testing.assert_array_equal(shared.coupled.currents, alone.coupled.currents)


@pytest.mark.parametrize(
    "other", [station(2.0, SOIL, 1.1), station(9.0), station(ground=er.Soil(8.0, 0.02)), station(ground=er.Soil(8.0, 0.01))]
)
def test_tables__are_those_of_ground_extent_and_tolerance(other):
    assert table_key(other, FREQUENCY_HZ) != table_key(station(), FREQUENCY_HZ)


def test_tables__are_those_of_a_frequency():
    assert table_key(station(), FREQUENCY_HZ) != table_key(station(), FREQUENCY_HZ + 1.0)


def test_damaged_table__is_set_aside_and_made_again(store):
    reports = []
    expected = solve(station(), FREQUENCY_HZ, store=store)
    path = store.beside(GROUND_SCHEMA).path_of(table_key(station(), FREQUENCY_HZ))
    content = bytearray(path.read_bytes())
    content[len(content) // 2] ^= 1
    path.write_bytes(content)

    found = solve(station(2.1), FREQUENCY_HZ, store=Hdf5Store(store.folder.parent, SOLUTION_SCHEMA, report=reports.append))

    assert len(reports) == 1
    assert store.beside(GROUND_SCHEMA).verify(table_key(station(), FREQUENCY_HZ)) is None
    assert not np.array_equal(found.coupled.currents, expected.coupled.currents)


def test_grounds_without_tables__store_none(store):
    solve(station(ground=er.PerfectGround()), FREQUENCY_HZ, store=store)

    assert not store.beside(GROUND_SCHEMA).folder.exists()
