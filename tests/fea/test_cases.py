"""Several load cases with one set-up give what separate solves give."""

import gc
import weakref

import numpy as np
import pytest

from voxelmat.errors import Cancelled, InputError
from voxelmat.fea import cases as module
from voxelmat.fea.cases import solve_cases
from voxelmat.fea.static import solve
from voxelmat.fea.system import LinearSystem
from voxelmat.model.loadcase import (
    BodyForce,
    Force,
    Foundation,
    GroundSpring,
    LoadCase,
    Plate,
    Pressure,
    Support,
)
from voxelmat.model.part import Part
from voxelmat.model.region import FaceRegion
from voxelmat.monitor import CancelFlag

ROOT = Support(region=FaceRegion(name="root", side="x-"))
MOVED = Support(region=FaceRegion(name="root", side="x-"), displacement=(0.1, 0.0, 0.0))
TOP, FLOOR, TIP = (FaceRegion(name=s, side=s) for s in ("z+", "z-", "x+"))


def all_cases():
    """Three held alike, one with other motion of the same support, and four held otherwise."""
    spring = GroundSpring(region=FLOOR, stiffness=(3.0, 3.0, 9.0))
    bed = Foundation(region=FLOOR, stiffness=2.0, acts="all")
    plate = Plate(name="stamp", region=TIP, force=(0.0, 0.0, -1.0))
    tilted = Plate(name="stamp", region=TIP, translation=(0.0, 0.0, -0.2))
    return (
        LoadCase(name="bend", supports=(ROOT,), loads=(Force(region=TIP, vector=(0, 0, -2.0)),)),
        LoadCase(name="float", loads=(spring, Force(region=TOP, vector=(0, 0, -2.0)))),
        LoadCase(name="press", supports=(ROOT,), loads=(Pressure(region=TOP, pressure=0.1),)),
        LoadCase(name="bed", loads=(bed, Force(region=TOP, vector=(0, 0, -2.0)))),
        LoadCase(name="weigh", supports=(ROOT,), loads=(BodyForce(acceleration=(0, 9.8e6, 0)),)),
        LoadCase(name="move", supports=(MOVED,), loads=(Force(region=TIP, vector=(0, 1.0, 0)),)),
        LoadCase(name="stamp", supports=(ROOT,), plates=(plate,)),
        LoadCase(name="sink", supports=(ROOT,), plates=(tilted,)),
    )


class Counted(LinearSystem):
    """Counts set-ups, and how many are alive at the time of the next."""

    made: list = []

    def __init__(self, *args, **kwargs):
        gc.collect()
        assert not [1 for r in self.made if r() is not None], "the last set-up is still held"
        super().__init__(*args, **kwargs)
        self.made.append(weakref.ref(self))


@pytest.fixture
def counted(monkeypatch):
    Counted.made = []
    monkeypatch.setattr(module, "LinearSystem", Counted)
    return Counted.made


def test_equal_to_separate_solves(grid, resin, counted):
    part = Part.uniform(grid(7, 4, 3), resin(E=200.0))
    cases = all_cases()
    together = solve_cases(part, cases, tol=1e-10)
    assert list(together) == [c.name for c in cases]
    assert len(counted) == 5  # root (4 cases), spring, bed, two plates
    for case in cases:
        alone, shared = solve(part, case, tol=1e-10), together[case.name]
        size = np.abs(alone.displacement).max()
        assert np.abs(shared.displacement - alone.displacement).max() <= 1e-7 * size
        assert shared.energy == pytest.approx(alone.energy, rel=1e-7)
        assert shared.balance < 1e-6
        assert shared.load_case is case
        for name, force in alone.reactions.items():
            np.testing.assert_allclose(shared.reactions[name], force, atol=1e-6)


def test_warm_start(grid, resin):
    part = Part.uniform(grid(6, 3, 3), resin())
    cases = all_cases()[:3]
    first = solve_cases(part, cases, tol=1e-9)
    again = solve_cases(part, cases, tol=1e-8, warm={"bend": first["bend"]})
    assert again["bend"].iterations == 0
    assert again["press"].iterations > 0


def test_reports_and_cancels(grid, resin):
    part = Part.uniform(grid(4, 3, 3), resin())
    seen = []

    class Listener:
        def report(self, stage, *, done, total, **figures):
            if stage == "as printed":
                seen.append((done, total, figures.get("case")))

    solve_cases(part, all_cases()[:3], monitor=Listener(), stage="as printed")
    assert seen == [(0, 3, "bend"), (1, 3, "press"), (2, 3, "float"), (3, 3, None)]
    flag = CancelFlag()
    flag.cancel()
    with pytest.raises(Cancelled):
        solve_cases(part, all_cases()[:1], monitor=flag)


def test_bad_input(grid, resin):
    part = Part.uniform(grid(4, 3, 3), resin())
    case = all_cases()[0]
    with pytest.raises(InputError, match="Two load cases are called 'bend'"):
        solve_cases(part, (case, case))
    loose = LoadCase(name="loose", loads=case.loads)
    with pytest.raises(InputError, match="not held"):
        solve_cases(part, (case, loose))
    assert solve_cases(part, ()) == {}
