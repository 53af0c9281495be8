"""Measures on parts: known values, and words for what does not fit."""

import numpy as np
import pytest
from measured_part import (
    RIGID,
    SHAPE,
    SOFT,
    block,
    constant,
    nodes_at,
    problem_of,
    pulled,
    spec,
)

from voxelmat.errors import InputError, ResourceError
from voxelmat.fea.interfaces import interface_tractions
from voxelmat.fea.static import solve
from voxelmat.model.design_spec import Compliance, ResinLimit
from voxelmat.model.goal import Minimise
from voxelmat.model.interface import Bond
from voxelmat.model.loadcase import Force, LoadCase, Support
from voxelmat.model.measure import (
    Displacement,
    InterfaceTraction,
    Stress,
    Stretch,
    TargetDeflection,
    WorstCompliance,
)
from voxelmat.model.measure_amount import (
    CentreOfMass,
    Cost,
    InterfaceArea,
    Mass,
    Perimeter,
    ResinVolume,
    Volume,
)
from voxelmat.model.region import FaceRegion
from voxelmat.topopt import measures

BOND = Bond(first="soft", second="rigid", tensile=constant(1.0, "MPa"), shear=constant(2.0, "MPa"))


def test_amounts_are_what_they_say():
    part = block()
    problem, value = problem_of(part, [pulled(part)], spec())
    f = problem.physics.fields
    density, cost = np.array([1.1e-9, 1.2e-9]), np.array([3e5, 2e5])
    each = f.rho * np.tensordot(density, f.w, 1)
    assert value(Volume()) == pytest.approx(f.rho.mean())
    assert value(Mass()) == pytest.approx(each.sum())
    assert value(Cost()) == pytest.approx((f.rho * np.tensordot(density * cost, f.w, 1)).sum())
    assert value(ResinVolume(resin="rigid")) == pytest.approx((f.rho * f.w[1]).mean())
    x = np.arange(8) + 0.5
    assert value(CentreOfMass(axis="x")) == pytest.approx((each * x).sum() / each.sum())
    half = np.zeros(SHAPE, bool)
    half[:4] = True
    assert value(Volume(region=half)) == pytest.approx(f.rho[..., :4].mean())
    assert value(Mass(region=half)) == pytest.approx(each[..., :4].sum())
    with pytest.raises(InputError, match=r"shape \(2, 2, 2\); the grid has"):
        value(Volume(region=np.ones((2, 2, 2), bool)))
    with pytest.raises(InputError, match="not among the resins of the design"):
        value(ResinVolume(resin="plain"))


def test_kept_voxels_weigh():
    part = block()
    labels = part.labels.copy()
    labels[6:] = 2
    part = part.replace(labels=labels)
    keep = np.zeros(SHAPE, bool)
    keep[6:] = True
    problem, value = problem_of(part, [pulled(part)], spec(keep=keep))
    f = problem.physics.fields
    own = (f.rho * np.tensordot([1.1e-9, 1.2e-9], f.w, 1)).sum(axis=(0, 1))
    kept = 16 * 1.2e-9
    assert value(Mass()) == pytest.approx(own.sum())
    assert value(Mass(with_kept=True)) == pytest.approx(own.sum() + kept)
    centre = ((own * (np.arange(8) + 0.5)).sum() + 7.0 * kept) / (own.sum() + kept)
    assert value(CentreOfMass(axis="x")) == pytest.approx(centre)


def test_motions_are_those_of_the_solver():
    part = block()
    cases = [pulled(part), pulled(part, (0, 0.3, 0), "side")]
    problem, value = problem_of(part, cases, spec())
    u = [problem.physics.displacement(n) for n in (0, 1)]
    tip = nodes_at(part, i=8)
    assert value(Displacement(nodes=tip, load_case="tip")) == pytest.approx(u[0][2, ..., 8].mean())
    side = Displacement(nodes=tip, load_case="side", direction=(0, 2, 0), of="largest")
    assert value(side) == pytest.approx(np.abs(u[1][1, ..., 8]).max())
    target = np.full(part.grid.node_shape, -0.2)
    worst = TargetDeflection(nodes=tip, target=target, load_case="tip", error="worst")
    assert value(worst) == pytest.approx(np.abs(u[0][2, ..., 8] + 0.2).max() / 0.2)
    work = [float((c.force * v).sum()) for c, v in zip(problem.physics.cases, u, strict=True)]
    assert value(WorstCompliance()) == pytest.approx(max(work))
    assert value(Compliance(load_cases=("side",))) == pytest.approx(work[1])
    with pytest.raises(InputError, match="must name its load case; there are tip, side"):
        value(Displacement(nodes=tip))
    with pytest.raises(InputError, match="names load case 'top'"):
        value(Compliance(load_cases=("top",)))


def uniform_bar():
    """A bar that slides on its symmetry planes and is pulled by 1 MPa along x; all solid."""
    part = block()
    _, hy, hz = part.grid.upper
    planes = tuple(
        Support(region=FaceRegion(name=s, side=s), displacement=d)
        for s, d in (("x-", (0, None, None)), ("y-", (None, 0, None)), ("z-", (None, None, 0)))
    )
    end = Force(region=FaceRegion(name="end", side="x+"), vector=(hy * hz, 0, 0))
    return part, LoadCase(name="pull", supports=planes, loads=(end,))


def test_strength_in_uniaxial_tension():
    # 1 MPa of uniaxial stress: von Mises stress 1 MPa, equivalent strain 1 / (3 G).
    part, case = uniform_bar()
    for n, (strength, elongation, shear) in enumerate(
        ((2.0, 1.5, 1 / 2.98), (50.0, 0.1, 2000 / 2.7))
    ):
        s = spec(void=False, limits=(ResinLimit(resin="rigid", fraction=0.9),))
        _, value = problem_of(part, [case], s, x=np.full(64, float(n)))
        assert value(Stress()) == pytest.approx(1 / strength, rel=1e-6)
        assert value(Stretch()) == pytest.approx(1 / (3 * shear) / elongation, rel=1e-6)
        only = Stress(resins=("rigid",))
        assert value(only) == pytest.approx(n / 50.0, abs=1e-9)
    # A kept half of the bar is judged by its own record.
    labels = part.labels.copy()
    labels[4:] = 2
    keep = np.zeros(SHAPE, bool)
    keep[4:] = True
    s = spec(void=False, keep=keep, limits=(ResinLimit(resin="rigid", fraction=0.9),))
    twin = RIGID.replace(name="soft", strength=constant(25.0, "MPa"))
    half = block(resins=(twin, RIGID)).replace(labels=labels)
    _, value = problem_of(half, [case], s, x=np.zeros(32))
    assert value(Stress(region=keep)) == pytest.approx(1 / 50.0, rel=1e-6)
    assert value(Stress()) == pytest.approx(1 / 25.0, rel=1e-6)
    with pytest.raises(InputError, match="needs the strength of 'plain'"):
        problem_of(
            part, [case], spec(resins=("soft", "plain"), objective=Minimise(measure=Stress()))
        )


def test_interfaces_agree_with_the_solved_part(monkeypatch):
    # Rigid x > 4, soft below, pulled by 1 MPa across.
    part, case = uniform_bar()
    labels = part.labels.copy()
    labels[4:] = 2
    part = part.replace(labels=labels)
    s = spec(void=False, filter_radius=0.5, limits=(ResinLimit(resin="rigid", fraction=0.9),))
    x = np.zeros((4, 2, 8))
    x[..., 4:] = 1.0
    measure = InterfaceTraction(bonds=(BOND,), exponent=16.0)
    _, value = problem_of(part, [case], s, x=x.ravel())
    checked = interface_tractions(solve(part, case), (BOND,))
    # Poisson's ratios differ, so shear joins the pull, and both ways see it a little differently.
    assert value(measure) == pytest.approx(float(np.nanmax(checked.utilisation)), rel=0.1)
    # With one Poisson's ratio and one modulus in the other direction nothing but 1 MPa crosses.
    twin = RIGID.replace(name="soft", strength=SOFT.strength)
    same = block(resins=(twin, RIGID)).replace(labels=labels)
    _, value = problem_of(same, [case], s, x=x.ravel())
    assert value(measure) == pytest.approx(1.0, rel=1e-6)
    # Graded over four voxels it is judged by a quarter.
    x = np.clip((np.arange(8) - 1.5) / 4, 0, 1) * np.ones((4, 2, 1))
    _, value = problem_of(same, [case], s, x=x.ravel())
    assert value(measure) == pytest.approx(0.25, rel=1e-6)
    with pytest.raises(InputError, match="needs a bond of 'soft' and 'rigid'"):
        value(InterfaceTraction(bonds=()))
    monkeypatch.setattr(measures, "_MOST_FACES", 100)
    with pytest.raises(ResourceError, match=r"2 resins in 1 load cases takes 1.9e.02"):
        value(measure)


@pytest.mark.parametrize("normal", [(1, 0, 0), (1, 1, 0), (1, 2, 3)])
def test_areas_of_planes(normal):
    # Half the block beyond a plane through its middle, blurred over some voxels.
    part = block((24, 24, 24))
    n = np.array(normal) / np.linalg.norm(normal)
    p = np.stack(np.meshgrid(*3 * [np.arange(24) - 11.5], indexing="ij"))
    along = np.einsum("d,dijk->ijk", n, p).T
    blurred = 0.5 + 0.5 * np.tanh(along / 1.5)
    # The size of the gradient of the blur, integrated on a grid four times finer.
    fine = np.stack(np.meshgrid(*3 * [np.linspace(-12, 12, 97)[:-1] + 0.125], indexing="ij"))
    area = (np.cosh(np.einsum("d,dijk->ijk", n, fine) / 1.5) ** -2).sum() / 3.0 * 0.25**3
    problem, value = problem_of(part, [pulled(part)], spec())
    f = problem.physics.fields
    f.rho[:] = blurred
    assert value(Perimeter()) == pytest.approx(area, rel=0.03)
    f.rho[:] = 1.0
    f.w[0], f.w[1] = 1 - blurred, blurred
    assert value(InterfaceArea()) == pytest.approx(area, rel=0.03)
    if normal == (1, 0, 0):
        f.rho[:] = along > 0
        assert value(Perimeter()) == pytest.approx(576.0, rel=2e-3)
        f.rho[:], f.w[1] = 1.0, along > 0
        f.w[0] = 1 - f.w[1]
        assert value(InterfaceArea()) == pytest.approx(576.0, rel=2e-3)
