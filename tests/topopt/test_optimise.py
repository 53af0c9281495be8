"""The public call: small designs end to end, their outline, stopping, resuming, bad input."""

import numpy as np
import pytest

from voxelmat.errors import Cancelled, InputError
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.design_spec import (
    Compliance,
    DesignSpec,
    MassLimit,
    Projection,
    ResinLimit,
    TargetDeflection,
    VolumeLimit,
)
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.loadcase import BodyForce, Force, LoadCase, Pressure, Support
from voxelmat.model.material import Constant, Material
from voxelmat.model.part import Part
from voxelmat.model.region import Box, FaceRegion
from voxelmat.topopt.optimise import optimise

SHAPE = (12, 3, 6)


def resin(name, E, nu, density=1e-9, kind="rigid"):
    return Material(
        name=name, kind=kind, E=Constant(value=E, unit="MPa"), nu=Constant(value=nu),
        density=Constant(value=density, unit="tonne/mm3"),
    )  # fmt: skip


SOFT, RIGID = resin("soft", 1.0, 0.49, 0.4e-9, "elastomer"), resin("rigid", 2000.0, 0.35)
MIDDLE = resin("middle", 40.0, 0.4, 0.7e-9)


def block(shape=SHAPE, resins=(SOFT, RIGID, MIDDLE), **kw):
    grid = VoxelGrid(shape=shape, spacing=(1.0, 1.0, 1.0))
    labels = np.ones(shape, np.uint16)
    palette = (EMPTY, Blend.pure(resins[0].name))
    return Part(grid=grid, resins=resins, palette=palette, labels=labels, **kw)


def tip(part=None):
    """Clamped at x-, pulled down along the lower edge of x+."""
    hx, _, _ = (part or block()).grid.upper
    return LoadCase(
        name="tip",
        supports=(Support(region=FaceRegion(name="wall", side="x-")),),
        loads=(
            Force(region=Box(name="edge", low=(hx - 1.1, -1, -1), high=(hx + 1, 99, 1.1)),
                  vector=(0, 0, -1)),
        ),
    )  # fmt: skip


def spec(**kw):
    base = {
        "resins": ("rigid",), "objective": Compliance(), "filter_radius": 1.6,
        "limits": (VolumeLimit(fraction=0.5),), "iterations": 12,
        "projection": Projection(sharpness=(0.0, 4.0), every=6),
    }  # fmt: skip
    return DesignSpec(**{**base, **kw})


class Watch:
    def __init__(self, cancel_at=None):
        self.stages, self.cancel_at, self.last = set(), cancel_at, {}

    def report(self, stage, *, done, total, **figures):
        self.stages.add(stage)
        if figures:
            self.last = {"done": done, "total": total, **figures}
        if self.cancel_at is not None and done >= self.cancel_at:
            raise Cancelled("enough")


@pytest.fixture(scope="module")
def solid_or_empty():
    watch = Watch()
    return optimise(block(), [tip()], spec(iterations=24), monitor=watch), watch


def test_solid_or_empty_design(solid_or_empty):
    result, watch = solid_or_empty
    assert result.history[-1].objective < 0.6 * result.history[0].objective
    assert result.feasible
    (volume,) = result.constraints
    assert volume.name == "solid volume"
    assert volume.value == pytest.approx(0.5, abs=0.01)
    assert watch.stages == {"optimising"}
    assert set(watch.last) == {
        "done", "total", "objective", "violation", "grey", "change", "cg_iterations", "time_left_s",
    }  # fmt: skip
    assert any("carry a load" in n for n in result.notes)
    assert any("held in all directions" in n for n in result.notes)
    assert result.part.palette[1:] == (Blend.pure("rigid"),)
    assert result.palette_error == 0
    assert result.objective_of_palette == pytest.approx(result.objective, rel=1e-5)
    assert "DesignResult(compliance" in repr(result)
    assert "stopped because" in result._repr_html_()


def test_outline_is_joined_with_the_shape(solid_or_empty):
    part = solid_or_empty[0].part
    filled = part.fill.sum() / np.prod(SHAPE)
    # The outline at the half level holds what the densities hold, within the grey that is left.
    assert filled == pytest.approx(float(solid_or_empty[0].density.mean()), abs=0.06)
    # No stairs: voxels that the outline cuts are partly filled, by many different amounts.
    cut = part.occupancy[(part.occupancy > 0) & (part.occupancy < 255)]
    assert len(np.unique(cut)) > 10
    assert part.distance is not None
    # Where the distance says solid by more than a voxel's half diagonal, the voxel is full.
    assert np.all(part.occupancy[part.distance < -14] == 255)
    assert np.all(part.occupancy[part.distance > 14] == 0)
    assert np.all((part.labels > 0) == (part.occupancy > 0))


def test_shape_with_its_own_distance_keeps_it_where_nothing_was_cut():
    distance = np.full(SHAPE, -40, np.int8)
    occupancy = np.full(SHAPE, 255, np.uint8)
    occupancy[:, :, -1], distance[:, :, -1] = 128, 0
    part = block(distance=distance, occupancy=occupancy)
    result = optimise(part, [tip()], spec(iterations=4))
    assert np.all(result.part.distance >= distance)
    assert np.all(result.part.occupancy <= occupancy)
    assert np.any(result.part.distance > distance)
    blend_only = spec(
        resins=("soft", "rigid"), void=False, limits=(ResinLimit(resin="rigid", fraction=0.4),),
        iterations=3,
    )  # fmt: skip
    result = optimise(part, [tip()], blend_only)
    np.testing.assert_array_equal(result.part.distance, distance)
    np.testing.assert_array_equal(result.part.occupancy, occupancy)


def test_blend_of_two_resins_without_voids():
    s = spec(
        resins=("soft", "rigid"), void=False, limits=(ResinLimit(resin="rigid", fraction=0.4),),
        iterations=25, levels=16,
    )  # fmt: skip
    result = optimise(block(), [tip()], s)
    assert result.feasible
    assert result.history[-1].objective < 0.5 * result.history[0].objective
    assert 3 < len(result.part.palette) <= 17
    assert np.all(result.part.labels > 0)
    assert result.objective_of_palette == pytest.approx(result.objective, rel=0.02)
    assert 0 < result.palette_error < 0.2
    used = result.part.volumes()["rigid"] / np.prod(SHAPE)
    assert used == pytest.approx(result.constraints[0].value, abs=0.01)


def test_three_resins_with_voids_under_a_mass_limit():
    limit = 0.35 * np.prod(SHAPE) * 1e-9
    s = spec(resins=("soft", "middle", "rigid"), limits=(MassLimit(mass=limit),), iterations=20)
    result = optimise(block(), [tip()], s)
    assert result.feasible
    assert result.constraints[0].unit == "tonne"
    assert result.history[-1].objective < result.history[0].objective
    assert result.fractions.shape == (3, *SHAPE)
    np.testing.assert_allclose(result.fractions.sum(0), 1, rtol=1e-5)


@pytest.mark.parametrize("void", [True, False])
def test_identical_resins_give_the_single_resin_answer(void):
    # Invariant: blending a resin with its twin changes nothing.
    twins = (resin("a", 100.0, 0.3), resin("b", 100.0, 0.3), SOFT)
    limits = (VolumeLimit(fraction=0.5),) if void else (ResinLimit(resin="a", fraction=0.4),)
    part = block(resins=twins)
    two = optimise(part, [tip()], spec(resins=("a", "b"), limits=limits, void=void, iterations=8,
                                       method="mma"))  # fmt: skip
    if not void:
        # The one design there is: a homogeneous block.
        assert two.history[0].objective == pytest.approx(two.history[-1].objective, rel=1e-5)
        return
    one = optimise(part, [tip()], spec(resins=("a",), limits=limits, iterations=8, method="mma"))
    assert two.objective == pytest.approx(one.objective, rel=1e-5)


@pytest.mark.parametrize("resins", [("soft", "rigid"), ("soft", "middle", "rigid")])
def test_the_order_of_resins_does_not_matter(resins):
    limits = (MassLimit(mass=0.6 * np.prod(SHAPE) * 1e-9),)
    found = [
        optimise(block(), [tip()], spec(resins=order, void=False, limits=limits, iterations=10))
        for order in (resins, resins[::-1])
    ]
    assert found[0].objective == pytest.approx(found[1].objective, rel=1e-5)
    np.testing.assert_allclose(found[0].fractions, found[1].fractions[::-1], atol=1e-3)


def test_symmetry_frozen_regions_and_kept_voxels():
    part = block()
    labels = part.labels.copy()
    labels[5:7, 1, 2:4] = 2
    part = part.replace(palette=(*part.palette, Blend.pure("middle")), labels=labels)
    keep, solid, empty, fixed = (np.zeros(SHAPE, bool) for _ in range(4))
    keep[5:7, 1, 2:4] = True
    solid[3, :, 5], empty[8:10, :, 2:4], fixed[4, 0, 0] = True, True, True
    s = spec(
        resins=("soft", "rigid"), keep=keep, solid=solid, empty=empty, symmetry=("y",),
        fixed_resin={"soft": fixed}, iterations=6,
        protected=np.ones(SHAPE, bool) & (np.arange(6) == 5), protected_depth=0.6,
    )  # fmt: skip
    result = optimise(part, [tip()], s)
    new = result.part
    assert np.all(result.density[solid] == 1)
    assert np.all(new.labels[solid] > 0)
    assert np.all(result.density[:, :, 5] == 1)
    assert np.all(result.density[empty] == 0)
    assert np.all(new.fill[9, :, 2:4] < 0.5)
    for voxel in ((4, 0, 0), (4, 2, 0)):  # symmetry mirrors the fixed voxel too
        assert new.palette[new.labels[voxel]] == Blend.pure("soft")
    assert all(new.palette[n] == Blend.pure("middle") for n in new.labels[keep])
    np.testing.assert_allclose(result.density, result.density[:, ::-1], atol=1e-6)
    np.testing.assert_allclose(result.fractions, result.fractions[:, :, ::-1], atol=1e-6)


def pressed(shape):
    part = block(shape)
    case = LoadCase(
        name="press",
        supports=(Support(region=FaceRegion(name="floor", side="z-")),),
        loads=(Pressure(region=FaceRegion(name="top", side="z+"), pressure=0.1),),
    )
    nodes = FaceRegion(name="top", side="z+").nodes(part)
    return part, case, nodes


def test_small_pad_gives_way_by_the_target_map():
    part, case, nodes = pressed((8, 8, 5))
    x = np.linspace(-1, 1, 9)[:, None, None]
    target = -0.12 * (1 + 0.3 * x) * np.ones(part.grid.node_shape)
    s = DesignSpec(
        resins=("soft", "rigid"), void=False, filter_radius=1.5, iterations=60,
        objective=TargetDeflection(nodes=nodes, target=target),
        limits=(ResinLimit(resin="rigid", fraction=0.6),),
    )  # fmt: skip
    result = optimise(part, [case], s)
    assert result.objective <= 0.002
    assert result.objective_name == "relative error of the deflection"
    assert result.feasible


def test_resumed_equals_uninterrupted_bit_for_bit(tmp_path):
    path = tmp_path / "design.npz"
    s = spec(resins=("soft", "rigid"), iterations=9)
    whole = optimise(block(), [tip()], s)
    part = optimise(block(), [tip()], s, monitor=Watch(cancel_at=4), checkpoint=path)
    assert part.cancelled
    assert part.reason == "stopped by the user after 4 iterations"
    assert part.iterations == 4
    rest = optimise(block(), [tip()], s, checkpoint=path)
    assert rest.iterations == 9
    np.testing.assert_array_equal(rest.density, whole.density)
    np.testing.assert_array_equal(rest.fractions, whole.fractions)
    assert rest.part.digest == whole.part.digest
    assert rest.objective == whole.objective
    with pytest.raises(InputError, match="another design"):
        optimise(block(), [tip()], spec(resins=("soft", "rigid"), penalty=2.0), checkpoint=path)


def test_cancel_before_the_first_design_gives_the_start():
    result = optimise(block(), [tip()], spec(), monitor=Watch(cancel_at=0))
    assert result.cancelled
    assert result.iterations == 0
    assert result.objective > 0


def mask(*at):
    out = np.zeros(SHAPE, bool)
    out[at] = True
    return out


BAD = {
    "no load case": (lambda: ([], spec()), "no load case"),
    "no load": (lambda: ([LoadCase(name="n", supports=tip().supports)], spec()), "no load"),
    "body force": (
        lambda: ([LoadCase(name="n", supports=tip().supports,
                           loads=(BodyForce(acceleration=(0, 0, -9806.65)),))], spec()),
        "change with the design",
    ),
    "prescribed": (
        lambda: ([LoadCase(name="n", loads=tip().loads, supports=(
            Support(region=FaceRegion(name="w", side="x-"), displacement=(0, 0, 0.1)),))], spec()),
        "prescribes a displacement",
    ),
    "not held": (lambda: ([LoadCase(name="n", loads=tip().loads)], spec()), "not held"),
    "unknown resin": (lambda: ([tip()], spec(resins=("rigd",))), "Did you mean 'rigid'"),
    "limit on another resin": (
        lambda: ([tip()], spec(limits=(ResinLimit(resin="soft", fraction=0.2),))),
        "not among the resins of the design",
    ),
    "solid and empty": (
        lambda: ([tip()], spec(solid=mask(4), empty=mask(4, 0))), "must be empty at once"
    ),
    "two fixed resins": (
        lambda: ([tip()], spec(resins=("soft", "rigid"),
                               fixed_resin={"soft": mask(4), "rigid": mask(4, 1)})),
        "fixed both",
    ),
    "load on a voxel that must be empty": (
        lambda: ([tip()], spec(empty=mask(11))), "carry a load or a spring must be empty"
    ),
    "frozen beyond the limit": (
        lambda: ([tip()], spec(solid=mask(slice(0, 8)))), "already hold 0.7"
    ),
    "mass below the lightest design": (
        lambda: ([tip()], spec(resins=("soft", "rigid"), void=False,
                               limits=(MassLimit(mass=0.3e-9 * 216),))),
        "already hold",
    ),
    "resin limits that cannot fill": (
        lambda: ([tip()], spec(resins=("soft", "rigid"), void=False, limits=(
            ResinLimit(resin="soft", fraction=0.4), ResinLimit(resin="rigid", fraction=0.4)))),
        "limits sum to 0.8",
    ),
    "volume limit without voids": (
        lambda: ([tip()], spec(resins=("soft", "rigid"), void=False)), "allows no empty voxels"
    ),
    "empty region without voids": (
        lambda: ([tip()], spec(resins=("soft", "rigid"), void=False, empty=mask(4),
                               limits=(ResinLimit(resin="rigid", fraction=0.4),))),
        "allows no empty voxels",
    ),
    "no limit": (lambda: ([tip()], spec(limits=())), "without a limit"),
    "another shape": (lambda: ([tip()], spec(solid=np.ones((2, 2, 2), bool))), "has shape"),
    "empty region": (lambda: ([tip()], spec(solid=np.zeros(SHAPE, bool))), "holds no voxel"),
    "all kept": (lambda: ([tip()], spec(keep=np.ones(SHAPE, bool))), "Nothing is left to design"),
    "two cases of one name": (lambda: ([tip(), tip()], spec()), "name of its own"),
}  # fmt: skip


@pytest.mark.parametrize("what", BAD)
def test_contradictions_are_refused(what):
    make, message = BAD[what]
    cases, s = make()
    with pytest.raises(InputError, match=message):
        optimise(block(), cases, s)


def test_targets_are_checked():
    part, case, nodes = pressed((4, 4, 3))
    good = TargetDeflection(nodes=nodes, target=-0.1 * np.ones(nodes.shape), load_case="pres")
    s = DesignSpec(resins=("soft", "rigid"), void=False, filter_radius=1.5, objective=good)
    with pytest.raises(InputError, match="names load case 'pres'"):
        optimise(part, [case], s)
    labels = part.labels.copy()
    labels[0, 0] = 0
    with pytest.raises(InputError, match="1 of 25 nodes of the target deflection touch no"):
        optimise(part.replace(labels=labels), [case], s)
    with pytest.raises(InputError, match="no node"):
        TargetDeflection(nodes=nodes & False, target=good.target)
    with pytest.raises(InputError, match="no number"):
        TargetDeflection(nodes=nodes, target=np.nan * good.target)
    with pytest.raises(InputError, match="zero at every node"):
        TargetDeflection(nodes=nodes, target=0 * good.target)
    with pytest.raises(InputError, match="the same"):
        TargetDeflection(nodes=nodes, target=good.target[:-1])
    with pytest.raises(InputError, match="direction"):
        TargetDeflection(nodes=nodes, target=good.target, direction=(0, 0, 0))


def test_a_filter_that_does_nothing_is_said():
    result = optimise(block(), [tip()], spec(filter_radius=0.9, iterations=1))
    assert any("nothing is smoothed" in n for n in result.notes)


def test_asymmetric_shape_is_refused_under_symmetry():
    labels = np.ones(SHAPE, np.uint16)
    labels[5, 0, 5] = 0
    with pytest.raises(InputError, match="differs from the mirror image in 1 voxels"):
        optimise(block().replace(labels=labels), [tip()], spec(symmetry=("y",)))
