"""What a mesh refuses."""

import pytest

from elbowroom.base.errors import GeometryError
from elbowroom.geometry.antennas import Antenna, Load, Port
from elbowroom.geometry.mesh import MeshSettings, build_mesh
from elbowroom.geometry.wires import Wire


def dipole(radius=1e-3, gap=None, load_gap=None):
    wires = [Wire((0, 0, -0.24), (0, 0, 0.24), radius)]
    loads = [] if load_gap is None else [Load(0, 0.3, 50.0, gap=load_gap)]
    return Antenna("d", wires, [Port("p", 0, gap=gap)], loads)


@pytest.mark.parametrize(
    ("antenna", "what"),
    [(dipole(gap=1e-6), "port 'p'"), (dipole(radius=1e-10), "port 'p'"), (dipole(load_gap=5e-7), "load 0")],
    ids=["narrow gap", "hair-thin wire", "narrow load"],
)
def test_build_mesh__refuses_a_gap_it_would_lose(antenna, what):
    with pytest.raises(GeometryError, match=f"gap of {what} is .* too narrow"):
        build_mesh(antenna, 1.0, MeshSettings())


def test_build_mesh__cuts_out_a_gap_just_wide_enough():
    mesh = build_mesh(dipole(gap=3e-6), 1.0, MeshSettings())
    assert mesh.length.min() == pytest.approx(3e-6, rel=1e-6)
