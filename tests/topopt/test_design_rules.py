"""Rules in whole designs: pure, extruded, zones, few resins, skin, least sizes; bad input."""

import dataclasses

import numpy as np
import pytest

from voxelmat.errors import InputError
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.design_rules import ChosenZones, LoadScatter, Robust, Skin, Zones
from voxelmat.model.design_spec import (
    Compliance,
    DesignSpec,
    MassLimit,
    Projection,
    ResinLimit,
    VolumeLimit,
)
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.loadcase import Force, LoadCase, Support
from voxelmat.model.material import Constant, Material
from voxelmat.model.minimum_sizes import MinimumSizes
from voxelmat.model.part import Part
from voxelmat.model.region import Box, FaceRegion
from voxelmat.topopt.optimise import optimise
from voxelmat.topopt.setup import layout_problem
from voxelmat.topopt.sizes import (
    least_size,
    lost_to_opening,
    minimum_from_profile,
    size_figures,
)

SHAPE = (8, 2, 4)


def resin(name, E, nu, density):
    return Material(
        name=name, kind="rigid", E=Constant(value=E, unit="MPa"), nu=Constant(value=nu),
        density=Constant(value=density, unit="tonne/mm3"),
    )  # fmt: skip


RESINS = (resin("soft", 1.0, 0.49, 0.4e-9), resin("middle", 40.0, 0.4, 0.7e-9),
          resin("rigid", 2000.0, 0.35, 1e-9))  # fmt: skip


def block(shape=SHAPE, resins=RESINS):
    grid = VoxelGrid(shape=shape, spacing=(1.0, 1.0, 1.0))
    palette = (EMPTY, Blend.pure(resins[0].name))
    return Part(grid=grid, resins=resins, palette=palette, labels=np.ones(shape, np.uint16))


def tip(part):
    hx = part.grid.upper[0]
    return LoadCase(
        name="tip", supports=(Support(region=FaceRegion(name="wall", side="x-")),),
        loads=(Force(region=Box(name="edge", low=(hx - 0.1, -1, -1), high=(hx + 1, 99, 1.1)),
                     vector=(0, 0, -1)),),
    )  # fmt: skip


def spec(**kw):
    base = {
        "resins": ("soft", "rigid"), "objective": Compliance(), "filter_radius": 1.4,
        "limits": (ResinLimit(resin="rigid", fraction=0.4),), "void": False, "iterations": 10,
        "projection": Projection(sharpness=(0.0, 8.0, 24.0), every=4),
    }  # fmt: skip
    return DesignSpec(**{**base, **kw})


def test_only_pure_resins_are_left_where_only_those_may_be_printed():
    sharper = Projection(sharpness=(0.0, 4.0, 8.0, 16.0, 32.0), every=5)
    result = optimise(
        block(), [tip(block())], spec(blends="pure", iterations=30, projection=sharper)
    )  # fmt: skip
    pure = {Blend.pure("soft"), Blend.pure("rigid")}
    assert {b for b in result.part.palette if b != EMPTY} == pure
    w = result.fractions[1]
    assert float((4 * w * (1 - w)).mean()) < 0.1  # about half in the same design with free blends
    assert result.objective_of_palette == pytest.approx(result.objective, rel=0.3)


def test_an_extruded_design_does_not_change_along_its_axis():
    result = optimise(
        block(), [tip(block())],
        spec(extruded=("y",), void=True, limits=(VolumeLimit(fraction=0.5),), resins=("rigid",)),
    )  # fmt: skip
    assert np.ptp(result.density, axis=1).max() < 1e-6
    assert np.ptp(result.density) > 0.5


def test_protected_surfaces_never_move():
    protected = np.zeros(SHAPE, bool)
    protected[:, :, 3] = True
    result = optimise(
        block(), [tip(block())],
        spec(protected=protected, void=True, resins=("rigid",), iterations=6,
             limits=(VolumeLimit(fraction=0.6),)),
    )  # fmt: skip
    assert np.all(result.density[protected] == 1)
    assert np.all(result.part.occupancy[protected] == 255)


def test_zones_that_are_given_share_a_blend():
    zones = np.ones(SHAPE, int)
    zones[4:] = 2
    result = optimise(block(), [tip(block())], spec(zones=Zones(numbers=zones)))
    assert result.unknowns.shape == (2,)
    second = result.fractions[1]
    assert np.ptp(second[:4]) == np.ptp(second[4:]) == 0
    assert second[0, 0, 0] > second[7, 0, 0]  # stiff where the cantilever bends most
    assert len(result.part.palette) == 3


def test_zones_that_are_chosen_are_as_few_as_asked_for_and_better_than_one_blend():
    result = optimise(block(), [tip(block())], spec(zones=ChosenZones(count=3), iterations=20))
    blends = {tuple(np.round(w, 6)) for w in result.fractions.reshape(2, -1).T}
    assert 2 <= len(blends) <= 3
    assert any("grouped into 3 zones" in n for n in result.notes)
    one = optimise(block(), [tip(block())], spec(zones=ChosenZones(count=1)))
    assert result.objective < one.objective
    assert result.feasible


def test_few_resins_are_left_and_the_notes_say_what_that_cost():
    s = spec(
        resins=("soft", "middle", "rigid"), most_resins=2, void=True,
        limits=(MassLimit(mass=0.35 * 64e-9),), blends="pure",
    )  # fmt: skip
    result = optimise(block(), [tip(block())], s)
    used = [n for n, v in result.part.volumes().items() if v > 0]
    assert 1 <= len(used) <= 2
    assert len(result.fractions) == 3 or any(n.startswith("Without ") for n in result.notes)


def test_a_skin_is_of_its_resin_and_as_deep_as_asked_for():
    part = block((8, 5, 6))
    problem, _ = layout_problem(part, [tip(part)], spec(skin=Skin(resin="soft", thickness=1.0)))
    c = problem.unknowns.choice
    surface = np.ones(part.grid.shape[::-1], bool)
    surface[1:-1, 1:-1, 1:-1] = False
    np.testing.assert_array_equal(c.resin == 0, surface)
    region = np.zeros(part.grid.shape, bool)
    region[:, :, 5] = True
    top = Skin(resin="soft", thickness=1.0, region=region)
    problem, _ = layout_problem(part, [tip(part)], spec(skin=top))
    assert (problem.unknowns.choice.resin == 0).sum() == 8 * 5


def test_the_least_size_is_that_of_a_slab_that_just_survives_erosion():
    # Independent: a slab on a fine line, the cone summed over rings.
    margin, radius, h = 0.2, 1.0, 0.004
    x = np.arange(-3, 3, h)
    r = np.arange(0, 1, h / 2) + h / 4
    side = np.array([2 * np.pi * ((1 - np.hypot(t, r)).clip(0) * r).sum() * h / 2 for t in x])
    side /= side.sum()
    for raw in np.arange(0.2, 2.0, 0.01):
        filtered = np.convolve((np.abs(x) <= raw / 2).astype(float), side, "same")
        if filtered.max() >= 0.5 + margin:
            break
    assert least_size(radius, margin) == pytest.approx(h * (filtered > 0.5).sum(), abs=0.03)
    assert least_size(2.0, 0.3) > least_size(2.0, 0.2) > 0


def test_openings_lose_what_is_thinner_than_their_cube():
    mask = np.zeros((6, 6, 6), bool)
    mask[1:4, 1:4, 1:4] = True
    assert lost_to_opening(mask) == 0
    mask[5, 5, 5] = True
    assert lost_to_opening(mask) == pytest.approx(1 / 28)
    plate = np.zeros((6, 6, 6), bool)
    plate[:, :, 2] = True
    assert lost_to_opening(plate) == 1
    w = np.zeros((1, 6, 6, 6))
    w[0] = 1
    figures = size_figures(mask.astype(float), w, np.ones(mask.shape, bool), ("a",))
    assert figures.pieces == 2
    assert figures.gap == 0
    assert figures.phases["a"] == figures.solid
    slot = np.ones((6, 6, 6))
    slot[2, 2:4, 2:4] = 0
    figures = size_figures(slot, w, np.ones(mask.shape, bool), ("a",))
    assert figures.gap == 1
    assert "Pieces: 1" in str(figures)


class Profile:
    minimum = MinimumSizes(wall=0.4, gap=0.3, hole=0.5, strut=0.5, feature=0.3)


def test_the_filter_follows_from_the_printer():
    found = minimum_from_profile(Profile, margin=0.2, pure=True)
    assert least_size(found["filter_radius"], 0.2) == pytest.approx(0.5)
    assert least_size(found["blend_radius"], 0.2) == pytest.approx(0.3)
    assert found["robust"].margin == 0.2
    with pytest.raises(InputError, match="take a finer grid"):
        minimum_from_profile(Profile, spacing=(2.0, 2.0, 2.0))


def names(count):
    return tuple(f"r{n}" for n in range(count))


BAD = {
    "41 resins": ({"resins": names(41)}, "at most 40 resins; got 41"),
    "one resin, no void": ({"resins": ("rigid",)}, "nothing to design"),
    "blends": ({"blends": "some"}, "free or pure"),
    "pure and wide": ({"blends": "pure", "interface_width": 2.0}, "takes blends"),
    "zones and wide": (
        {"zones": ChosenZones(count=2), "interface_width": 2.0}, "contradict each other"
    ),
    "zones of one resin": (
        {"resins": ("rigid",), "void": True, "zones": ChosenZones(count=2)}, "only resin"
    ),
    "axis": ({"extruded": ("w",)}, "along x, y or z"),
    "repeated once": ({"repeated": {"x": 1}}, "at least 2 times"),
    "skin": ({"skin": Skin(resin="steel", thickness=1.0)}, "not among the resins"),
    "support without void": ({"support_angle": 45.0}, "no overhang"),
    "support angle": ({"support_angle": 5.0, "void": True}, "10 to 80 degrees"),
    "no resin left": ({"most_resins": 0}, "at least 1 resin"),
    "one resin left": ({"most_resins": 1}, "nothing to design"),
    "interface width": ({"interface_width": -1.0}, "above 0 mm"),
    "robust without borders": ({"robust": Robust()}, "borders that move"),
}  # fmt: skip


@pytest.mark.parametrize("name", BAD)
def test_bad_rules_are_refused(name):
    change, words = BAD[name]
    with pytest.raises(InputError, match=words):
        spec(**change)


def masks(*at):
    mask = np.zeros(SHAPE, bool)
    mask[at] = True
    return mask


def zones(value, **at):
    numbers = np.ones(SHAPE, int)
    numbers[:2] = value
    return Zones(numbers=numbers)


CLASHES = {
    "frozen above the volume": (
        {"void": True, "solid": masks(slice(0, 6)), "limits": (VolumeLimit(fraction=0.3),)},
        "already hold",
    ),
    "no zone": ({"zones": zones(0)}, "belong to no zone"),
    "zones that are not symmetric": ({"zones": zones(2), "symmetry": ("x",)}, "mirror image"),
    "repeated": ({"repeated": {"x": 3}}, "cannot be divided into 3"),
    "skin beside": (
        {"skin": Skin(resin="soft", thickness=1.0, region=np.zeros(SHAPE, bool))}, "holds no voxel"
    ),
}  # fmt: skip


@pytest.mark.parametrize("name", CLASHES)
def test_rules_that_clash_with_the_part_are_refused(name):
    change, words = CLASHES[name]
    with pytest.raises(InputError, match=words):
        layout_problem(block(), [tip(block())], spec(**change))


def test_more_fixed_resins_than_allowed_are_refused():
    fixed = {"soft": masks(0), "middle": masks(7)}
    s = spec(resins=("soft", "middle", "rigid"), fixed_resin=fixed, most_resins=1, void=True)
    with pytest.raises(InputError, match="At most 1 resins are allowed, but soft, middle"):
        optimise(block(), [tip(block())], s)


def test_zone_numbers_are_whole():
    with pytest.raises(InputError, match="whole numbers"):
        Zones(numbers=np.ones(SHAPE))
    with pytest.raises(InputError, match="numbered 0"):
        Zones(numbers=np.full(SHAPE, -1))
    with pytest.raises(InputError, match="1 to 4096 zones"):
        ChosenZones(count=0)


def test_a_robust_design_resumes_to_the_bit_and_says_what_it_was_judged_by(tmp_path):
    s = spec(
        resins=("rigid",), void=True, limits=(VolumeLimit(fraction=0.5),), robust=Robust(),
        scatter=(LoadScatter(angle=10.0),), iterations=6,
    )  # fmt: skip
    whole = optimise(block(), [tip(block())], s)
    file = tmp_path / "state.npz"
    optimise(block(), [tip(block())], dataclasses.replace(s, iterations=3), checkpoint=file)
    resumed = optimise(block(), [tip(block())], s, checkpoint=file)
    np.testing.assert_array_equal(resumed.unknowns, whole.unknowns)
    assert any(n.startswith("Judged over 7 ways to come out: compliance") for n in whole.notes)


def test_a_self_supporting_design_has_no_overhangs():
    part = block((10, 2, 8))
    s = spec(
        resins=("rigid",), void=True, limits=(VolumeLimit(fraction=0.5),), support_angle=45.0,
        iterations=24, projection=Projection(sharpness=(1.0, 4.0, 16.0), every=6),
    )  # fmt: skip
    result = optimise(part, [tip(part)], s)
    solid = result.density > 0.5
    below = np.pad(solid, ((1, 1), (1, 1), (0, 0)))[:, :, :-1]
    held = (
        below[1:-1, 1:-1] | below[:-2, 1:-1] | below[2:, 1:-1] | below[1:-1, :-2] | below[1:-1, 2:]
    )
    over = solid[:, :, 1:] & ~held
    frozen = np.zeros(part.grid.shape, bool)
    frozen[0], frozen[-1] = True, True
    assert not (over & ~frozen[:, :, 1:]).any()
    assert result.feasible


def test_robust_borders_between_resins_keep_phases_and_end_pure():
    s = spec(
        resins=("middle", "rigid"), blends="pure", robust=Robust(margin=0.1), iterations=15,
        projection=Projection(sharpness=(0.0, 4.0, 16.0), every=5),
    )  # fmt: skip
    problem, _ = layout_problem(block(), [tip(block())], s)
    ensemble = problem.ensemble
    assert ensemble.eroded is None  # nothing may be empty
    assert [w.realisation.bias[0] > 0 for w in ensemble.phases] == [False, True]
    result = optimise(block(), [tip(block())], s)
    assert {b for b in result.part.palette if b != EMPTY} <= {
        Blend.pure("middle"), Blend.pure("rigid"),
    }  # fmt: skip
    assert any(n.startswith("Judged over 3 ways") for n in result.notes)
