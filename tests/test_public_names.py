"""Names that the package shows: each loads, and those of antennas are all there."""

import elbowroom
from elbowroom.geometry.shapes import SHAPES


def test_public_names__all_load():
    for name in elbowroom.__all__:
        assert getattr(elbowroom, name) is not None, name
    assert set(elbowroom.__all__) == set(dir(elbowroom))


def test_public_names__have_every_shape():
    assert {function.__name__ for function in SHAPES.values()} <= set(elbowroom.__all__)
