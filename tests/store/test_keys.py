from __future__ import annotations

import doctest
import hashlib
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from elbowroom.store import content_key, keys


@dataclass(frozen=True)
class Wire:
    radius_m: float
    ends_m: tuple


@dataclass(frozen=True)
class Rod:
    radius_m: float
    ends_m: tuple


def test_content_key__is_sha256_of_the_documented_bytes():
    text = (
        b"elbowroom canonical form 1\n"
        b"d4:s1:as2:\xc3\xa9s1:bl5:i1;r0x1.4000000000000p+1;nti-ff;s1:cci0;i1;"
        b"s1:dos4:Wired2:s6:ends_ml0:s8:radius_mr0x1.0000000000000p-1;"
    )
    value = {"d": Wire(0.5, ()), "b": [1, 2.5, None, True, -255.0], "a": "é", "c": 1j}
    assert content_key(value) == hashlib.sha256(text).hexdigest()


def test_content_key__array_bytes_are_as_documented():
    numbers = np.array([[1.0, -0.0]], dtype=">f8")
    text = b"elbowroom canonical form 1\nas2:f8l2:i1;i2;16:" + bytes.fromhex("000000000000f03f" + "00" * 8)
    assert content_key(numbers) == hashlib.sha256(text).hexdigest()


def test_content_key__examples_run():
    result = doctest.testmod(keys)
    assert result.attempted > 0
    assert result.failed == 0


@pytest.mark.parametrize(
    ("first", "second"),
    [
        ({"a": 1, "b": 2}, {"b": 2, "a": 1}),
        (1, 1.0),
        (1, 1 + 0j),
        (2**70, float(2**70)),
        (0.0, -0.0),
        (complex(1.5, -0.0), 1.5),
        ([1, "x"], (1, "x")),
        (np.float64(0.1), 0.1),
        (np.int16(7), 7),
        (np.bool_(True), True),
        (np.str_("x"), "x"),
        (np.float32(0.1), float(np.float32(0.1))),
        (np.arange(6.0).reshape(2, 3), np.asfortranarray(np.arange(6.0).reshape(2, 3))),
        (np.arange(6.0), np.arange(6.0).astype(">f8")),
        (np.arange(12.0)[::2], np.arange(0.0, 12.0, 2.0)),
        (np.array([0.0, 1j]), np.array([complex(-0.0, -0.0), complex(-0.0, 1.0)])),
        (np.array(["a", "b"]), np.array(["a", "b"], dtype="<U9")),
        (Wire(0.1, (1, 2)), Wire(0.1, [1.0, 2])),
    ],
)
def test_content_key__equal_inputs_agree(first, second):
    assert content_key({"value": first}) == content_key({"value": second})


@pytest.mark.parametrize(
    ("first", "second"),
    [
        (1, True),
        (0, False),
        (None, False),
        (1, "1"),
        ("", []),
        ([], {}),
        (0.1, np.nextafter(0.1, 1.0)),
        (2**53, 2**53 + 1),
        (5e-324, 0.0),
        (1.5, 1.5 + 5e-324j),
        (["ab", "c"], ["a", "bc"]),
        ([["a"], "b"], [["a", "b"]]),
        ({"a": {"b": 1}}, {"a": {}, "b": 1}),
        ([1, 2], [2, 1]),
        (np.array([1.0, 2.0]), [1.0, 2.0]),
        (np.array([1.0]), np.array(1.0)),
        (np.zeros((2, 3)), np.zeros((3, 2))),
        (np.zeros(3), np.zeros(3, dtype=np.float32)),
        (np.zeros(2), np.zeros(2, dtype=np.int64)),
        (np.zeros(0), np.zeros((0, 3))),
        (np.array([1.0, 2.0]), np.array([1.0, np.nextafter(2.0, 3.0)])),
        (np.array(["a"]), np.array([b"a"])),
        (Wire(0.1, (1, 2)), Rod(0.1, (1, 2))),
        (Wire(0.1, (1, 2)), {"radius_m": 0.1, "ends_m": (1, 2)}),
    ],
)
def test_content_key__different_inputs_differ(first, second):
    assert content_key(first) != content_key(second)


@pytest.mark.parametrize(
    ("value", "where"),
    [
        ({"mesh": {"kind": {1, 2}}}, r"inputs\['mesh'\]\['kind'\]: builtins.set"),
        ({"wires": [Wire(0.1, (b"raw",))]}, r"inputs\['wires'\]\[0\]\.ends_m\[0\]: builtins.bytes"),
        ({"file": Path("x")}, r"inputs\['file'\]: pathlib"),
        ({"inner": {1: "x"}}, r"inputs\['inner'\]: expected text as the keys of a dict, got 1"),
        ([Wire], r"inputs\[0\]: builtins.type"),
        ([np.array([None])], r"inputs\[0\]: a numpy array of type object"),
        (np.zeros(2, dtype=np.longdouble), "inputs: a numpy array of type"),
        (np.longdouble(1), "inputs: numpy.longdouble"),
        (np.ma.masked_array([1.0, 2.0], [True, False]), "inputs: a masked numpy array"),
        (np.zeros(2, dtype=[("a", "f8")]), "inputs: a numpy array of type"),
        (np.zeros(2, dtype="M8[s]"), "inputs: a numpy array of type datetime64"),
    ],
)
def test_content_key__unknown_types_name_the_place(value, where):
    with pytest.raises(TypeError, match=where):
        content_key(value)


@pytest.mark.parametrize(
    ("value", "where"),
    [
        ({"radius_m": float("nan")}, r"inputs\['radius_m'\]: expected a finite number, got nan"),
        ([1.0, float("-inf")], r"inputs\[1\]: expected a finite number, got -inf"),
        ([complex(0.0, float("nan"))], r"inputs\[0\]\.imag: expected a finite number"),
        (
            {"z": np.array([[1.0, 2.0], [3.0, np.inf]])},
            r"inputs\['z'\]\[1, 1\]: expected a finite number, got inf",
        ),
    ],
)
def test_content_key__numbers_that_are_not_finite_name_the_place(value, where):
    with pytest.raises(ValueError, match=where):
        content_key(value)


def test_content_key__a_structure_that_contains_itself_is_an_error():
    loop: list = []
    loop.append(loop)
    with pytest.raises(ValueError, match="does it contain itself"):
        content_key(loop)


_LEAVES = st.sampled_from([None, True, False, 0, 1, 1.0, -0.0, 0.5, 1j, "", "a", "1", ":", "l1:"])
_TREES = st.recursive(
    _LEAVES,
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(st.sampled_from(["", "a", "b"]), inner, max_size=3),
    max_leaves=5,
)


def _meaning(value):
    """Return what the key should depend on, in Python's own notion of equality."""
    if isinstance(value, list):
        return ("list", *(_meaning(item) for item in value))
    if isinstance(value, dict):
        return ("dict", frozenset((name, _meaning(item)) for name, item in value.items()))
    return ("bool" if isinstance(value, bool) else "other", value)


@settings(max_examples=200, deadline=None, derandomize=True, database=None)
@given(_TREES, _TREES)
def test_content_key__agrees_exactly_where_the_meaning_does(first, second):
    assert (content_key(first) == content_key(second)) == (_meaning(first) == _meaning(second))
