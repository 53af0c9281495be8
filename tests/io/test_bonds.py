"""Records of bonds: shipped, of one's own, and wrong ones with file and key."""

import math

import numpy as np
import pytest

from voxelmat.errors import InputError
from voxelmat.io.bonds import load_bond
from voxelmat.io.materials import load_library, materials_folder
from voxelmat.model.interface import Bond, find_bond
from voxelmat.model.material import Constant

TEXT = """
format = 1
first = "elastomer-a40"
second = "rigid-tough"
[tensile_MPa]
value = 0.9
low = 0.5
high = 1.2
temperature_degC = 23.0
source = "peel tests of our own, batch 7"
[shear_MPa]
value = 1.5
low = 1.0
high = 2.0
temperature_degC = 23.0
source = "lap joints of our own, batch 7"
"""


def test_shipped_bonds_are_indicative_and_join_known_resins():
    library = load_library()
    assert len(library.bonds) == len(list((materials_folder() / "bonds").glob("*.toml"))) > 10
    assert all(b.indicative for b in library.bonds)
    assert all(name in library for b in library.bonds for name in b.pair)
    assert find_bond(library.bonds, "rigid-general", "elastomer-a40") is not None
    assert find_bond(library.bonds, "elastomer-a27", "elastomer-a40") is None
    assert all("bond" not in note for note in library.notes)


def test_a_bond_of_ones_own_replaces(tmp_path):
    path = tmp_path / "peel.toml"
    path.write_text(TEXT)
    assert not load_bond(path).indicative
    library = load_library([path])
    bond = find_bond(library.bonds, "rigid-tough", "elastomer-a40")
    assert (bond.tensile.value, bond.shear.band) == (0.9, (1.0, 2.0))
    assert any("peel.toml replaces" in note for note in library.notes)
    assert len(library.bonds) == len(load_library().bonds)


@pytest.mark.parametrize(
    ("old", "new", "key"),
    [
        ('second = "rigid-tough"', 'second = "rigid-tuff"', "second"),
        ('second = "rigid-tough"', 'second = "elastomer-a40"', "second"),
        ("value = 0.9", "value = 1.9", "tensile_MPa"),
        ("value = 1.5", "value = -1.5", "shear_MPa.value"),
        ("low = 1.0", "low = nan", "shear_MPa.low"),
        ("format = 1", "format = 1\npeel = 3", "peel"),
        ("[shear_MPa]", "[shear_mpa]", "shear_mpa"),
    ],
)
def test_wrong_records_name_file_and_key(tmp_path, old, new, key):
    assert old in TEXT
    path = tmp_path / "bad.toml"
    path.write_text(TEXT.replace(old, new))
    with pytest.raises(InputError) as caught:
        load_library([path])
    assert caught.value.key == key
    assert "bad.toml" in str(caught.value)


def test_tension_and_shear_interact_and_compression_is_free():
    bond = Bond(
        first="a",
        second="b",
        tensile=Constant(value=2.0, low=1.0, high=4.0),
        shear=Constant(value=5.0),
    )
    normal, shear = np.array([1.0, -9.0, 1.2]), np.array([0.0, 2.5, 4.0])
    np.testing.assert_allclose(bond.utilisation(normal, shear), (0.5, 0.5, 1.0))
    assert bond.utilisation(normal, shear, "low")[2] == pytest.approx(math.hypot(1.2, 0.8))
    assert bond.utilisation(normal, shear, "high")[2] == pytest.approx(math.hypot(0.3, 0.8))
