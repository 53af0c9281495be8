"""Loss factors of the shipped materials: there, in range, and called indicative."""

import pytest

from voxelmat.errors import FileFormatError, InputError
from voxelmat.io.materials import load_library, load_material, materials_folder


def test_every_shipped_material_has_an_indicative_loss_factor():
    for material in load_library().values():
        loss = material.loss_factor
        assert loss is not None, material.name
        assert loss.indicative
        assert 0 < loss.band[0] < loss.value < loss.band[1] < 2
        # A metal rings longest, an elastomer shortest.
        limit = {"bought-in": (0, 0.01), "elastomer": (0.1, 1.5)}.get(material.kind, (0.01, 0.5))
        assert limit[0] < loss.value < limit[1]


@pytest.mark.parametrize("value", ["0.0", "30.0"])
def test_impossible_loss_factor_in_a_file(tmp_path, value):
    text = (materials_folder() / "steel.toml").read_text()
    head, tail = text.split("[loss_factor]")
    tail = tail.replace("value = 0.001", f"value = {value}").replace("low = 0.0002", "low = 0.0")
    path = tmp_path / "steel.toml"
    path.write_text(head + "[loss_factor]" + tail.replace("high = 0.005", "high = 40.0"))
    with pytest.raises((InputError, FileFormatError), match=r"loss[_ ]factor"):
        load_material(path)
