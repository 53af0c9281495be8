"""Pictures of the report: right colours, right places, factor in every deformed picture."""

from __future__ import annotations

import io

import numpy as np
import pytest
from PIL import Image

from voxelmat.errors import InputError
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.part import Part
from voxelmat.model.surface import carriers
from voxelmat.workflow.colours import OKABE_ITO, palette_rgb, resin_colours
from voxelmat.workflow.depth import Camera, draw_faces, faces_of_cut
from voxelmat.workflow.report_fields import (
    displacement_picture,
    field_plane,
    magnification,
    safety_picture,
    solver_picture,
    stress_picture,
)
from voxelmat.workflow.report_pictures import blend_picture, cut_picture, middle, space_picture
from voxelmat.workflow.report_pressure import pressure_picture


def pixels(picture):
    return np.asarray(Image.open(io.BytesIO(picture.png)).convert("RGB")).astype(int)


def has_colour(picture, text, tolerance=3):
    wanted = [int(text[a : a + 2], 16) for a in (1, 3, 5)]
    return bool((np.abs(pixels(picture) - wanted).max(axis=2) <= tolerance).sum() > 200)


def test_resins_with_one_colour_get_different_ones(made_up):
    part = made_up.grip()
    same = tuple(m.replace(colour="#E69F00") for m in part.resins)
    found = resin_colours(part.replace(resins=same))
    assert len(set(found.values())) == 3
    assert set(found.values()) <= set(OKABE_ITO)


def test_a_blend_lies_between_its_resins_and_empty_is_white(made_up):
    part = made_up.grip()
    rgb = palette_rgb(part).astype(int)
    assert (rgb[0] == 255).all()
    low, high = np.minimum(rgb[2], rgb[3]), np.maximum(rgb[2], rgb[3])
    assert ((rgb[5] >= low) & (rgb[5] <= high)).all()
    # exact: 15 % of the light of the stiff resin and 85 % of the soft one's
    light = (rgb[[2, 3]] / 255.0) ** 2.2
    assert rgb[5] == pytest.approx(255 * (0.15 * light[0] + 0.85 * light[1]) ** (1 / 2.2), abs=1)


def test_cuts_show_every_material_and_name_the_places(made_up):
    part = made_up.grip()
    picture = cut_picture(part)
    for colour in resin_colours(part).values():
        assert has_colour(picture, colour)
    for axis, at in enumerate(middle(part)):
        assert f"{'xyz'[axis]} = {part.grid.centres()[axis][at]:g} mm" in picture.alt


def test_the_share_picture_exists_only_where_something_is_blended(made_up):
    part = made_up.grip()
    assert "rigid-example" in blend_picture(part).caption
    pure = tuple(b if len(b.fractions) < 2 else Blend.pure("soft-example") for b in part.palette)
    assert blend_picture(part.replace(palette=pure)) is None


def test_pictures_come_out_the_same_twice(made_up):
    part = made_up.grip()
    assert cut_picture(part).png == cut_picture(part).png
    assert space_picture(part).png == space_picture(part).png


def test_a_part_without_material_has_a_picture_that_says_so(made_up):
    part = made_up.grip()
    bare = part.replace(
        labels=np.zeros_like(part.labels),
        occupancy=None,
        distance=np.full(part.grid.shape, 127, dtype=np.int8, order="F"),
        bodies={},
    )
    picture = space_picture(bare)
    assert picture.alt.startswith("No material")
    assert (pixels(picture) < 128).any()
    assert cut_picture(bare).png
    faces, _ = faces_of_cut(bare, np.ones(bare.grid.shape, dtype=bool))
    none = np.zeros((0, 3), dtype=np.uint8)
    with pytest.raises(InputError, match="nothing to draw"):
        draw_faces(faces, none, bare.grid.spacing)
    whole, _ = faces_of_cut(part, part.solid)
    assert (draw_faces(faces, none, part.grid.spacing, width=200, around=whole).rgb == 255).all()


def test_depth_picture_of_a_block_has_the_true_outline(made_up):
    grid = VoxelGrid(shape=(6, 4, 3), spacing=(1.0, 2.0, 3.0))
    labels = np.ones(grid.shape, dtype=np.uint16)
    resin = made_up.resin("plain", "rigid", 2000.0, 0.3, "#0072B2", 40.0)
    part = Part(grid=grid, resins=(resin,), palette=(EMPTY, Blend.pure(resin.name)), labels=labels)
    faces, cut = faces_of_cut(part, part.solid)
    assert not cut.any()
    assert len(faces) == 2 * (6 * 4 + 6 * 3 + 4 * 3)
    red = np.tile(np.array([[200, 0, 0]], dtype=np.uint8), (len(faces), 1))
    shot = draw_faces(faces, red, grid.spacing, camera=Camera(azimuth=-90, elevation=0), width=400)
    drawn = (shot.rgb < 255).any(axis=2)
    # Seen along y: 6 mm wide, 9 mm high, without a hole.
    assert drawn.sum() * shot.pixel**2 == pytest.approx(54.0, rel=0.03)
    rows, columns = np.nonzero(drawn)
    assert drawn[rows.min() : rows.max() + 1, columns.min() : columns.max() + 1].all()
    column, row = shot.place(np.array([0.0, 0.0, 9.0]))
    assert column == pytest.approx(columns.min(), abs=2)
    assert row == pytest.approx(rows.min(), abs=2)


def test_the_near_side_hides_the_far_side(made_up):
    grid = VoxelGrid(shape=(4, 4, 4), spacing=(1.0, 1.0, 1.0))
    labels = np.ones(grid.shape, dtype=np.uint16)
    resin = made_up.resin("plain", "rigid", 2000.0, 0.3, "#0072B2", 40.0)
    labels[:, 2:, :] = 2
    other = resin.replace(name="other")
    part = Part(
        grid=grid,
        resins=(resin, other),
        palette=(EMPTY, Blend.pure(resin.name), Blend.pure("other")),
        labels=labels,
    )
    colours = np.array([[0, 0, 0], [250, 0, 0], [0, 0, 250]], dtype=np.uint8)
    for azimuth, near in ((-90, 0), (90, 2)):
        faces, _ = faces_of_cut(part, part.solid)
        rgb = colours[labels[tuple(faces.voxel.T)]]
        shot = draw_faces(faces, rgb, grid.spacing, camera=Camera(azimuth=azimuth, elevation=0))
        inside = shot.rgb[shot.rgb.shape[0] // 2, shot.rgb.shape[1] // 2]
        assert inside[near] > 50
        assert inside[2 - near] == 0


def test_cut_faces_close_the_hole(made_up):
    part = made_up.grip()
    solid = carriers(part)
    shown = solid.copy()
    shown[:, :6, :] = False
    faces, cut = faces_of_cut(part, shown)
    area = faces.vector_area.sum(axis=0)
    assert area == pytest.approx(np.zeros(3), abs=1e-9)  # closed surface
    assert cut.sum() == (solid[:, 5, :] & shown[:, 6, :]).sum()


@pytest.mark.parametrize("scale", [1e-6, 0.003, 1.0, 77.0])
def test_magnification_is_round_and_shows_a_twelfth_at_most(made_up, scale):
    part = made_up.grip()
    result = made_up.made_up_result(part, made_up.turning_case())
    big = made_up.made_up_result(part, made_up.turning_case(), scale)
    factor = magnification(big)
    digits = f"{factor:.0e}"
    assert digits[0] in "125"
    assert float(digits) == pytest.approx(factor)
    assert factor * big.size.max() <= 72.0 / 12 * (1 + 1e-6)
    assert factor * big.size.max() > 72.0 / 12 / 2.5
    assert magnification(result) >= 1


def test_the_factor_is_said_with_every_deformed_picture(made_up):
    part = made_up.grip()
    for case in (made_up.palm_case(), made_up.turning_case()):
        result = made_up.made_up_result(part, case)
        picture = displacement_picture(result)
        words = f"deformed {magnification(result):g} times"
        assert words in picture.caption
        assert words in picture.alt
        assert pixels(picture).std() > 10


def test_the_cut_holds_the_longest_axis_and_the_movement(made_up):
    part = made_up.grip()
    palm = made_up.made_up_result(part, made_up.palm_case())
    turning = made_up.made_up_result(part, made_up.turning_case())
    assert field_plane(palm)[0] == 1  # x and z are seen
    assert field_plane(turning)[0] == 2  # x and y are seen


def test_a_part_that_does_not_move_is_drawn_without_a_fault(made_up):
    part = made_up.grip()
    still = made_up.made_up_result(part, made_up.turning_case(), 0.0)
    object.__setattr__(still, "displacement", np.zeros_like(still.displacement))
    object.__setattr__(still, "stress", np.zeros_like(still.stress))
    assert magnification(still) == 1
    assert displacement_picture(still).png
    assert stress_picture(still).png


def test_safety_without_any_strength_is_all_grey(made_up):
    part = made_up.grip()
    result = made_up.made_up_result(part, made_up.palm_case())
    nothing = np.full(part.grid.shape, np.nan, dtype=np.float32)
    assert "grey where the record states none" in safety_picture(result, nothing).caption


def test_pressure_map_names_resultant_centre_and_expectation(made_up):
    part = made_up.grip()
    load = made_up.palm_case().loads[0]
    picture = pressure_picture(part, load)
    assert f"{load.resultant:.1f} N" in picture.alt
    assert f"x = {load.centre[0]:.1f}" in picture.caption
    assert "expects 40.0 N" in picture.caption
    assert "−48 %" in picture.caption  # far from what is expected, and it is said


def test_solver_picture_only_with_a_history(made_up):
    result = made_up.made_up_result(made_up.grip(), made_up.palm_case())
    assert solver_picture({"palm": result})
    object.__setattr__(result, "history", ())
    assert solver_picture({"palm": result}) is None
