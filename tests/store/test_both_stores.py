"""What holds of every store, run on the one in a folder and on the one in memory."""

from __future__ import annotations

import numpy as np
import pytest

from elbowroom.base.arrays import ArraySpec
from elbowroom.base.errors import StoreError
from elbowroom.store import Record, Schema
from store.samples import SCHEMA, SPECS, assert_same, key_of, record_of


def test_store__gives_back_what_was_put(any_store, reports):
    for unit in range(3):
        any_store.put(key_of(unit), record_of(unit))
    for unit in range(3):
        assert_same(any_store.get(key_of(unit)), record_of(unit))
        assert any_store.verify(key_of(unit)) is None
        assert key_of(unit) in any_store
    assert any_store.keys() == sorted(key_of(unit) for unit in range(3))
    assert reports == []


def test_store__empty(any_store):
    assert any_store.get(key_of(0)) is None
    assert key_of(0) not in any_store
    assert any_store.verify(key_of(0)) == "not in the store"
    assert any_store.keys() == []
    assert any_store.remove(key_of(0)) is False


def test_store__remove(any_store):
    any_store.put(key_of(0), record_of(0))
    any_store.put(key_of(1), record_of(1))
    assert any_store.remove(key_of(0)) is True
    assert any_store.get(key_of(0)) is None
    assert any_store.keys() == [key_of(1)]


def test_store__put_again_replaces(any_store):
    any_store.put(key_of(0), record_of(0))
    any_store.put(key_of(0), record_of(5, n_ports=7))
    assert_same(any_store.get(key_of(0)), record_of(5, n_ports=7))


def test_store__awkward_arrays_come_back_bit_for_bit(any_store):
    payload = np.array([0x7FF8000000000123, 0xFFF0000000000000, 0x8000000000000000, 1], dtype=np.uint64)
    impedance = np.zeros((2, 2), dtype=complex)
    impedance.real.flat = payload.view(np.float64)
    record = Record(
        {
            "impedance": impedance,
            "position_m": np.asfortranarray(np.arange(6, dtype=">f4").reshape(2, 3))[:, ::-1],
            "port_name": np.array(["é", ""], dtype="<U7"),
            "weight": np.array(3, dtype=">i2"),
        }
    )
    any_store.put(key_of(0), record)
    assert_same(any_store.get(key_of(0)), record)
    assert not np.array_equal(impedance, impedance)  # nan: equality of numbers would not have told


def test_store__arrays_without_entries(any_store):
    record = Record(
        {
            "impedance": np.zeros((0, 0), dtype=np.complex64),
            "position_m": np.zeros((0, 3)),
            "port_name": np.array([], dtype="<U1"),
        }
    )
    any_store.put(key_of(0), record)
    assert_same(any_store.get(key_of(0)), record)


def test_store__attributes_come_back(any_store):
    attributes = {
        "text": "two\nlines é",
        "empty": "",
        "long": "x" * 200_000,
        "zero byte": "a\0b",
        "half a pair": "\ud800",
        "whole": -3,
        "beyond 64 bits": 2**80,
        "real": 0.1,
        "yes": True,
        "nothing": None,
        "nested": {"list": [1, 2.5, None, {"x": "y"}], "empty": {}},
        "attributes_in_json": "a name of our own",
        "in/path": "1",
    }
    record = record_of(0)
    any_store.put(key_of(0), Record(record.arrays, attributes))
    found = any_store.get(key_of(0)).attributes
    assert found == attributes
    assert {name: type(value) for name, value in found.items()} == {n: type(v) for n, v in attributes.items()}


def test_store__tuples_come_back_as_lists(any_store):
    any_store.put(key_of(0), Record(record_of(0).arrays, {"pair": (1, 2)}))
    assert any_store.get(key_of(0)).attributes == {"pair": [1, 2]}


def test_store__says_where_a_record_came_from(any_store):
    any_store.put(key_of(0), record_of(0))
    provenance = any_store.get(key_of(0)).provenance
    assert provenance["numpy_version"] == np.__version__
    assert provenance["key"] == key_of(0)
    assert provenance["conventions"] == SCHEMA.conventions
    assert {"program_version", "python_version", "scipy_version", "h5py_version", "created_utc"} <= set(provenance)


def test_store__holds_a_copy(any_store):
    record = record_of(0)
    any_store.put(key_of(0), record)
    record.arrays["impedance"][:] = 0
    any_store.get(key_of(0)).arrays["position_m"][:] = 0
    assert_same(any_store.get(key_of(0)), record_of(0))


def _changed(**arrays) -> Record:
    record = record_of(0)
    record.arrays.update(arrays)
    return Record({name: array for name, array in record.arrays.items() if array is not None})


@pytest.mark.parametrize(
    ("record", "message"),
    [
        (_changed(impedance=None), "array 'impedance' is missing"),
        (_changed(impedance=np.zeros((3, 3))), "'impedance': expected a type of kind 'c', got float64"),
        (
            _changed(impedance=np.zeros(3, complex)),
            r"'impedance': expected 2 axes \(port, port\), got \(3,\)",
        ),
        (_changed(impedance=np.zeros((3, 4), complex)), "expected length 3 along 'port'.*, got 4"),
        (
            _changed(port_name=np.array(["a", "b"])),
            "'port_name': expected length 3 along 'port' as in 'impedance'",
        ),
        (
            _changed(port_name=np.array(["a", "b", "\ud800"])),
            "'port_name': text that cannot be written as UTF-8",
        ),
        (_changed(impedanse=np.zeros(1)), "'impedanse' is not declared.*did you mean 'impedance'"),
        (_changed(position_m=[[0.0, 0.0, 0.0]]), "'position_m': expected a plain numpy array, got list"),
        (
            _changed(position_m=np.ma.zeros((2, 3))),
            "'position_m': expected a plain numpy array, got MaskedArray",
        ),
        (
            _changed(position_m=np.zeros((2, 3), np.longdouble)),
            "'position_m': expected at most double precision",
        ),
        (Record(record_of(0).arrays, {"bad": float("nan")}), "attribute 'bad': expected finite numbers"),
        (Record(record_of(0).arrays, {"bad": np.zeros(2)}), "attribute 'bad': expected finite numbers"),
        (Record(record_of(0).arrays, {"": 1}), "attribute name: expected text, got ''"),
    ],
)
def test_store__refuses_records_that_do_not_fit(any_store, record, message):
    with pytest.raises(StoreError, match=message):
        any_store.put(key_of(0), record)
    assert any_store.keys() == []


def test_store__names_all_problems_together(any_store):
    with pytest.raises(StoreError, match=r"(?s)'extra' is not declared.*'impedance' is missing.*'position_m'"):
        any_store.put(key_of(0), Record({"extra": np.zeros(1), "position_m": np.zeros(3)}))


@pytest.mark.parametrize("key", ["", "abc", "../" + "a" * 61, "A" * 64, "a" * 63 + "\n", "a" * 65, None, 7])
@pytest.mark.parametrize("call", ["get", "verify", "remove", "path_of", "__contains__"])
def test_store__refuses_what_is_not_a_key(any_store, key, call):
    with pytest.raises(StoreError, match="not a key: expected 64 hexadecimal digits"):
        getattr(any_store, call)(key)
    with pytest.raises(StoreError, match="not a key"):
        any_store.put(key, record_of(0))


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (("Upper", 1, SPECS), "schema name: expected lower-case"),
        (("../x", 1, SPECS), "schema name: expected lower-case"),
        (("good", 0, SPECS), "schema version: expected a whole number from 1, got 0"),
        (("good", 1, (SPECS[0], SPECS[0])), "array 'impedance' is declared twice"),
        (("good", 1, (ArraySpec("a/b", (), "f", "1", ""),)), "array name: expected letters"),
        (("good", 1, (ArraySpec("record_attributes", (), "f", "1", ""),)), "array name"),
        (("good", 1, (ArraySpec("a", (), "O", "1", ""),)), "array 'a': expected kinds among"),
    ],
)
def test_schema__refuses_bad_declarations(arguments, message):
    with pytest.raises(ValueError, match=message):
        Schema(*arguments)
