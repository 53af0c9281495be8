"""What is hidden, a ghost, or drawn onto the part: masks, arrows, stripes, a weak region."""

from __future__ import annotations

import numpy as np
import pytest

from voxelmat.errors import InputError
from voxelmat.model.loadcase import (
    BodyForce,
    Force,
    GroundSpring,
    LoadCase,
    Plate,
    Pressure,
    Support,
)
from voxelmat.model.region import Box, FaceRegion
from voxelmat.workbench.groups import groups_of, mask_of
from voxelmat.workbench.look import Look
from voxelmat.workbench.marks import marks_of, tinted
from voxelmat.workbench.shown import in_materials
from voxelmat.workbench.shownresult import of_result
from voxelmat.workflow.verdicts import safety_factors


@pytest.fixture
def grip(made_up):
    part = made_up.grip()
    left = np.zeros(part.grid.shape, dtype=bool)
    left[:12] = part.solid[:12]
    steel = (part.labels == 1) & part.solid
    return part.replace(bodies={"left half": left, "shaft": steel})


def test_groups_hold_every_voxel_once_and_bodies_beside(grip):
    groups = groups_of(grip)
    names = [g.name for g in groups]
    assert names[:3] == ["rigid-example", "soft-example", "steel-example"]
    assert "5 % rigid-example + 95 % soft-example" in names
    assert names[-1] == "body left half"  # the shaft is all of the steel: it has a name already
    labels = np.sum([g.labels for g in groups], axis=0)
    occurring = np.bincount(grip.labels.ravel(), minlength=len(grip.palette)) > 0
    occurring[0] = False
    assert (labels == occurring).all()


def test_many_blends_of_the_same_resins_are_one_group(made_up):
    part = made_up.grip()
    more = [made_up.Blend.of({"soft-example": 1 - f, "rigid-example": f}) for f in (0.4, 0.5, 0.6)]
    labels = part.labels.copy()
    first = len(part.palette)
    labels[20:, 6, 5:8] = np.arange(first, first + 3)
    part = part.replace(palette=(*part.palette, *more), labels=labels, occupancy=None)
    names = [g.name for g in groups_of(part)]
    assert "blends of rigid-example, soft-example" in names
    assert not any("%" in n for n in names)


@pytest.mark.parametrize("how", ["hidden", "ghost"])
def test_what_is_hidden_or_a_ghost_has_no_opaque_face(grip, how):
    solid = in_materials(grip)
    look = Look().seen("rigid-example", how).seen("body left half", how)
    gone = mask_of(grip, solid.groups, {"rigid-example", "body left half"})
    assert (gone == ((grip.labels == 2) | grip.bodies["left half"])).all()
    surface = solid.surface(look)
    assert not gone[tuple(surface.quads.voxel.T)].any()
    # what is left is closed: its area vectors sum to nothing
    corner = surface.quads.points.reshape(-1, 4, 3).astype(float)
    area = np.cross(corner[:, 2] - corner[:, 0], corner[:, 3] - corner[:, 1])
    assert area.sum(axis=0) == pytest.approx(np.zeros(3), abs=1e-4)
    if how == "ghost":
        assert len(surface.ghost) > 0
        assert gone[tuple(surface.ghost.voxel.T)].all()
        assert surface.words == ("ghost: rigid-example, body left half",)
    else:
        assert len(surface.ghost) == 0
        assert surface.words == ("hidden: rigid-example, body left half",)


def test_names_that_are_not_there_hide_nothing(grip):
    solid = in_materials(grip)
    assert len(solid.surface(Look(hidden=frozenset(["gone"]))).quads) == len(
        solid.surface(Look()).quads
    )


def test_only_weak_voxels_are_opaque(made_up):
    result = made_up.made_up_result(made_up.grip(), made_up.palm_case())
    factors = safety_factors(result)
    limit = float(np.nanmedian(factors))
    shown = of_result(result, "stress over strength", below=limit)
    surface = shown.solid.surface(Look())
    with np.errstate(invalid="ignore"):
        weak = factors < limit
    assert weak[tuple(surface.quads.voxel.T)].all()
    assert not weak[tuple(surface.ghost.voxel.T)].any()
    assert f"{np.count_nonzero(weak):,} of" in shown.note
    with pytest.raises(InputError, match="above 0"):
        of_result(result, below=-1.0)


def arrows(solid, *loads, supports=(), plates=()):
    return marks_of(solid, LoadCase(name="case", loads=loads, supports=supports, plates=plates))


def test_arrows_of_a_force_point_along_it_and_end_on_the_surface(grip):
    solid = in_materials(grip)
    end = FaceRegion(name="end", side="x+")
    marks = arrows(solid, Force(region=end, vector=(-3.0, 0.0, 4.0)))
    assert 1 < len(marks.arrows) <= 14
    faces = end.faces(grip)
    for arrow in marks.arrows:
        along = np.array(arrow.tip) - np.array(arrow.tail)
        assert along / np.linalg.norm(along) == pytest.approx((-0.6, 0.0, 0.8))
        assert np.linalg.norm(faces.centre - np.array(arrow.tip), axis=1).min() < 1e-9
    assert marks.notes == ("longest force arrow: 5.00 N",)
    # a force that pulls begins on the surface
    pulling = arrows(solid, Force(region=end, vector=(5.0, 0.0, 0.0))).arrows[0]
    assert np.linalg.norm(faces.centre - np.array(pulling.tail), axis=1).min() < 1e-9


def test_lengths_go_by_value_within_a_kind(grip):
    solid = in_materials(grip)
    top, end = FaceRegion(name="top", side="z+"), FaceRegion(name="end", side="x+")
    marks = arrows(
        solid,
        Force(region=end, vector=(-2.0, 0.0, 0.0)),
        Force(region=top, vector=(0.0, 0.0, -4.0)),
        Pressure(region=top, pressure=0.01),
        BodyForce(acceleration=(0.0, 0.0, -9806.65)),
    )
    length = {}
    for arrow in marks.arrows:
        along = np.array(arrow.tip) - np.array(arrow.tail)
        length.setdefault(tuple(np.rint(along / np.linalg.norm(along))), np.linalg.norm(along))
    assert length[(-1, 0, 0)] == pytest.approx(0.5 * length[(0, 0, -1)])
    assert marks.notes == (
        "longest force arrow: 4.00 N",
        "longest pressure arrow: 0.0100 MPa",
        "longest acceleration arrow: 9.81 m/s²",
    )


def test_a_map_has_its_longest_arrow_where_it_presses_most(made_up):
    part, case = made_up.grip(), made_up.palm_case()
    marks = marks_of(in_materials(part), case)
    load = case.loads[0]
    sizes = [np.linalg.norm(np.array(a.tip) - np.array(a.tail)) for a in marks.arrows]
    values = load.at(np.array([a.place for a in marks.arrows]))
    assert np.argmax(sizes) == np.argmax(values)
    every = load.at(load.region.faces(part).centre)
    assert values.max() == every.max()
    assert all(a.tail[2] > a.tip[2] for a in marks.arrows)  # from above


def test_supports_are_striped_and_a_region_is_tinted(grip):
    solid = in_materials(grip)
    held = FaceRegion(name="shaft end", side="x-")
    surface = solid.surface(Look())
    faces = surface.quads.faces
    marks = arrows(solid, supports=(Support(region=held),))
    rgb = tinted(solid, surface, marks.tints)
    changed = (rgb != surface.rgb).any(axis=1)
    on = (faces.axis == 0) & (faces.side < 0) & (faces.voxel[:, 0] == 0)
    assert changed.any()
    assert (changed <= on).all()
    assert (changed == (on & (faces.voxel.sum(axis=1) % 2 == 0))).all()
    assert "held (dark stripes): shaft end" in marks.notes
    pointed = marks_of(solid, None, held)
    rgb = tinted(solid, surface, pointed.tints)
    assert ((rgb != surface.rgb).any(axis=1) == on).all()
    assert pointed.notes == ("region 'shaft end' in purple",)
    (mark,) = pointed.lines  # a ring with its name, for where something lies before it
    assert mark.text == "shaft end"
    assert np.linalg.norm(held.faces(grip).centre - np.array(mark.places[0]), axis=1).min() < 1e-9


def test_motions_plates_and_springs_have_their_marks(grip):
    solid = in_materials(grip)
    end = FaceRegion(name="end", side="x+")
    marks = arrows(
        solid,
        GroundSpring(region=end, stiffness=(1.0, 0.0, 0.0)),
        supports=(Support(region=end, displacement=(None, None, -0.5)),),
        plates=(Plate(name="lid", region=end, point=(80.0, 0.0, 0.0), force=(0.0, 7.0, 0.0)),),
    )
    assert {"longest given motion arrow: 0.500 mm", "longest force arrow: 7.00 N"} <= set(
        marks.notes
    )
    assert "on springs (blue stripes): end" in marks.notes
    assert any(a.place == (80.0, 0.0, 0.0) for a in marks.arrows)


def test_a_region_inside_has_one_arrow_at_a_voxel(grip):
    inner = Box(name="inner", low=(30.0, -2.0, -2.0), high=(40.0, 2.0, 2.0))
    marks = arrows(in_materials(grip), Force(region=inner, vector=(0.0, 0.0, -1.0)))
    assert len(marks.arrows) == 1
