"""The printing tables of a design: halftone, interfaces, dimensions, and what is refused."""

import pytest

from voxelmat.errors import InputError
from voxelmat.io.design import load_design
from voxelmat.model.halftone import Halftone

PRINT = """
halftone = "error diffusion"
order = ["measured-soft", "measured-hard"]
job_number = "A-17"

[[print.interface]]
first = "measured-soft"
second = "measured-hard"
width_mm = 0.4

[[dimension]]
name = "length"
kind = "outside"
nominal_mm = 12.0
lower_mm = -0.1
upper_mm = 0.1
point_mm = [6.0, 4.0, 3.0]
direction = [1.0, 0.0, 0.0]

[[dimension]]
name = "soft"
kind = "volume"
nominal_mm3 = 288.0
lower_mm3 = -10.0
upper_mm3 = 10.0
resin = "measured-soft"
"""


def test_what_is_said_is_read(small_design):
    small_design.write_text(small_design.read_text() + PRINT)
    design = load_design(small_design)
    assert design.printing.halftone == Halftone(
        method="error diffusion",
        order=("measured-soft", "measured-hard"),
        interface_width_mm={("measured-soft", "measured-hard"): 0.4},
    )
    assert design.printing.job_number == "A-17"
    length, soft = design.dimensions
    assert (length.nominal, length.lower, length.unit) == (12.0, -0.1, "mm")
    assert (soft.unit, soft.resin) == ("mm^3", "measured-soft")


@pytest.mark.parametrize(
    ("old", "new", "message"),
    [
        ("nominal_mm = 12.0", "nominal_mm3 = 12.0", "takes nominal_mm"),
        ("lower_mm = -0.1", "lower_mm = 0.2", "lower one comes first"),
        ('name = "soft"', 'name = "length"', "length"),
        ("direction = [1.0", "direction = [0.0", "no direction"),
        ("width_mm = 0.4", "width_mm = -1", "width_mm"),
        ('halftone = "error diffusion"', 'halftone = "noise"', "halftone"),
        ("job_number", "interface_width_mm = 1\njob_number", "not both"),
        ('second = "measured-hard"', 'second = "measured-soft"', "two resin names"),
    ],
)
def test_what_cannot_be_is_named(small_design, old, new, message):
    assert old in PRINT
    small_design.write_text(small_design.read_text() + PRINT.replace(old, new))
    with pytest.raises(InputError, match=message) as caught:
        load_design(small_design)
    assert caught.value.key
