"""Design specifications refuse what no optimiser could work with, and know what they are."""

import numpy as np
import pytest

from voxelmat.errors import InputError
from voxelmat.model.design_spec import (
    Compliance,
    DesignSpec,
    MassLimit,
    Projection,
    ResinLimit,
    TargetDeflection,
    VolumeLimit,
)
from voxelmat.model.goal import AtLeast, AtMost, Maximise, Minimise
from voxelmat.model.measure import Displacement
from voxelmat.model.measure_amount import Mass

SHAPE = (4, 3, 2)


def spec(**kw):
    base = {
        "resins": ("rigid",),
        "objective": Compliance(),
        "filter_radius": 1.6,
        "limits": (VolumeLimit(fraction=0.5),),
    }
    return DesignSpec(**{**base, **kw})


def general_specs():
    """One with each way of asking for a measure; all different."""
    nodes = np.zeros((2, 5, 4, 3), bool)
    nodes[0, 0], nodes[1, 1] = True, True
    measures = [Displacement(nodes=n, of=of) for n in nodes for of in ("mean", "largest")]
    measures += [Compliance(load_cases=("a",)), Mass(), Mass(with_kept=True)]
    goals = [spec(objective=kind(measure=m)) for m in measures for kind in (Minimise, Maximise)]
    limits = [
        spec(limits=(kind(measure=m, value=value),))
        for m in measures
        for kind in (AtMost, AtLeast)
        for value in (0.5, 0.6)
    ]
    return goals + limits


def test_a_measure_alone_is_minimised():
    assert spec(objective=Minimise(measure=Compliance())).objective == Compliance()
    assert spec(objective=Minimise(measure=Compliance())).digest == spec().digest
    lightest = spec(objective=Minimise(measure=Mass()), limits=(AtMost(measure=Compliance(),
                                                                       value=2.0),))  # fmt: skip
    assert [type(m) for m in lightest.measures] == [Mass, Compliance]
    for bad in ({"measure": Mass}, {"measure": 3.0}):
        with pytest.raises(InputError, match="takes a measure"):
            Maximise(**bad)
    with pytest.raises(InputError, match="finite number"):
        AtMost(measure=Mass(), value=float("nan"))
    with pytest.raises(InputError, match="scale of a limit"):
        AtMost(measure=Mass(), value=1.0, scale=0.0)


def test_digest_follows_what_the_design_depends_on():
    one = np.zeros(SHAPE, bool)
    one[0] = True
    target = TargetDeflection(nodes=np.ones((5, 4, 3), bool), target=np.ones((5, 4, 3)))
    other = TargetDeflection(nodes=target.nodes, target=2 * target.target)
    different = [
        spec(),
        spec(penalty=2.0),
        spec(solid=one),
        spec(solid=~one),
        spec(empty=one),
        spec(fixed_resin={"rigid": one}),
        spec(objective=target),
        spec(objective=other),
        spec(limits=()),
        *general_specs(),
    ]
    assert len({s.digest for s in different}) == len(different)
    assert spec(solid=one).digest == spec(solid=one.copy(), iterations=3, levels=8).digest


def test_projection_stages():
    p = Projection(sharpness=(0.0, 2.0, 8.0), every=10)
    assert [p.stage(n) for n in (0, 9, 10, 19, 20, 500)] == [0, 0, 1, 1, 2, 2]


def test_arrays_are_owned_and_read_only():
    mask = np.ones(SHAPE, bool)
    kept = spec(solid=mask).solid
    mask[:] = False
    assert kept.all()
    with pytest.raises(ValueError, match="read-only"):
        kept[0, 0, 0] = False


@pytest.mark.parametrize(
    ("changes", "message"),
    [
        ({"resins": ()}, "at least one"),
        ({"resins": ("rigid", "rigid")}, "once"),
        ({"void": False}, "nothing to design"),
        ({"filter_radius": 0.0}, "filter radius"),
        ({"filter_radius": float("nan")}, "filter radius"),
        ({"penalty": 0.5}, "penalty"),
        ({"void_stiffness": 0.0}, "empty voxels"),
        ({"iterations": 0}, "at least 1 iteration"),
        ({"symmetry": ("w",)}, "Symmetry"),
        ({"method": "newton"}, "method"),
        ({"void_law": "simp"}, "void law"),
        ({"solid": np.ones(SHAPE)}, "true and false"),
        ({"protected_depth": -1.0}, "protected"),
        ({"limits": (VolumeLimit(fraction=0.5), VolumeLimit(fraction=0.4))}, "twice"),
    ],
)
def test_specifications_are_checked(changes, message):
    with pytest.raises(InputError, match=message):
        spec(**changes)


@pytest.mark.parametrize("fraction", [0.0, 1.0, -1.0, float("nan")])
def test_limits_are_checked(fraction):
    for make in (lambda: VolumeLimit(fraction=fraction),
                 lambda: ResinLimit(resin="soft", fraction=fraction)):  # fmt: skip
        with pytest.raises(InputError, match="between 0 and 1"):
            make()
    with pytest.raises(InputError, match="mass limit"):
        MassLimit(mass=0.0)
    with pytest.raises(InputError, match="rise"):
        Projection(sharpness=(4.0, 2.0))
