"""The modulus that an indentation stands for."""

import numpy as np
import pytest

from voxelmat.errors import InputError
from voxelmat.fea.contact import contact
from voxelmat.fea.indentation import apparent_modulus
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.indenter import FlatPunch, SphereIndenter
from voxelmat.model.loadcase import LoadCase, Support
from voxelmat.model.part import Part
from voxelmat.model.region import FaceRegion

FLOOR = Support(region=FaceRegion(name="floor", side="z-"))
CASE = LoadCase(name="a", supports=(FLOOR,))


def block(resin, layers, n=32, h=0.5, modulus=4.0):
    grid = VoxelGrid(shape=(n, n, layers), spacing=(h, h, h), origin=(-n * h / 2,) * 2 + (0.0,))
    return Part.uniform(grid, resin(E=modulus, nu=0.4))


def test_a_thick_block_shows_its_modulus_and_a_thin_one_more(resin):
    found = []
    for layers in (24, 4):
        tool = SphereIndenter(position=(0.0, 0.0, layers * 0.5), radius=20.0)
        pressed = contact(block(resin, layers), CASE, tool, depth_mm=0.1)
        found.append(apparent_modulus(pressed, 0.4))
    # contact radius 1.4 on 12 mm of depth: about c a / L = .1 of the compliance is missing, and
    # Hertz has the 1.5th power of it; a sheet 2 mm thick feels its floor
    assert found[0] == pytest.approx(4.0, rel=0.2)
    assert found[0] > 0.9 * 4.0
    assert found[1] > 1.5 * found[0]


def test_in_proportion_to_the_modulus(resin):
    tool = FlatPunch(position=(0.0, 0.0, 3.0), radius=2.0)
    soft, hard = (
        apparent_modulus(contact(block(resin, 6, 12, modulus=E), CASE, tool, depth_mm=0.01), 0.4)
        for E in (1.0, 50.0)
    )
    assert hard == pytest.approx(50 * soft, rel=1e-6)
    assert np.isfinite(soft)


def test_what_has_no_formula(resin):
    part = block(resin, 4, 8)
    plane = contact(part, CASE, FlatPunch(position=(0.0, 0.0, 2.0)), depth_mm=0.01)
    with pytest.raises(InputError, match="a ball and for a round flat end"):
        apparent_modulus(plane, 0.3)
    deep = contact(part, CASE, SphereIndenter(position=(0, 0, 2.0), radius=1.0), depth_mm=0.5)
    with pytest.raises(InputError, match="too much for a ball"):
        apparent_modulus(deep, 0.3)
    with pytest.raises(InputError, match="Poisson"):
        apparent_modulus(deep, 0.7)
