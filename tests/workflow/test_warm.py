"""Compiling ahead: after it nothing of a run has to be compiled."""

import importlib
import os
import pkgutil
import subprocess
import sys

import numpy as np
import pytest

import voxelmat.kernels
from voxelmat.errors import Cancelled
from voxelmat.fea.contact import contact
from voxelmat.fea.static import solve
from voxelmat.fea.warm import Warmed, compile_groups, tiny_part
from voxelmat.kernels.compiling import stopwatch
from voxelmat.model.indenter import SphereIndenter
from voxelmat.model.loadcase import BodyForce, Force, LoadCase, Support
from voxelmat.model.region import FaceRegion
from voxelmat.monitor import CancelFlag
from voxelmat.workflow.warm import warm, warm_lines

# Run once by whoever makes the mask that is shipped, never by a user; compiled into its caller.
NEVER = {"void_and_cluster", "hash_row"}


class Listener:
    def __init__(self):
        self.seen = []

    def report(self, stage, *, done, total, **figures):
        self.seen.append((stage, done, total, figures))


def kernels():
    """Every compiled function that modules outside kernels import."""
    for entry in pkgutil.iter_modules(voxelmat.kernels.__path__):
        module = importlib.import_module(f"voxelmat.kernels.{entry.name}")
        for name, value in vars(module).items():
            own = getattr(getattr(value, "py_func", None), "__module__", "") == module.__name__
            if own and not name.startswith("_"):
                yield name, value


def test_every_kernel_is_ready_and_a_solve_compiles_nothing_more():
    listener = Listener()
    done = warm(listener)
    groups = [figures["group"] for _, _, _, figures in listener.seen if figures]
    assert [w.group for w in done] == groups
    assert listener.seen[-1][:3] == ("compiling, once", len(done), len(done))
    cold = {name for name, kernel in kernels() if not kernel.signatures}
    assert cold <= NEVER
    part = tiny_part((9, 7, 6))
    case = LoadCase(
        name="press",
        supports=(Support(region=FaceRegion(name="floor", side="z-")),),
        loads=(
            Force(region=FaceRegion(name="top", side="z+"), vector=(1.0, 0.0, 0.0)),
            BodyForce(acceleration=(0.0, 0.0, -9806.65)),
        ),
    )
    hollow = part.replace(occupancy=np.full(part.grid.shape, 128, dtype=np.uint8))
    with stopwatch() as compiled:
        first = solve(part, case)
        solve(hollow, case, warm=first)
        contact(part, case, SphereIndenter(position=(4.0, 3.0, 6.0), radius=9.0), depth_mm=0.05)
    assert compiled == {}


def test_the_stopwatch_sees_what_is_compiled():
    import numba

    @numba.njit
    def inner(x):
        return x + 1

    @numba.njit
    def outer(x):
        return 2 * inner(x)

    done = compile_groups([("mine", lambda: outer(3)), ("again", lambda: outer(4))])
    assert [list(w.kernels) for w in done] == [["test_warm.outer"], []]
    assert 0 < done[0].compiling <= done[0].seconds
    lines = warm_lines(done)
    assert lines[0].startswith("mine: ")
    assert "test_warm.outer" in lines[1]
    assert "s went into compiling" in lines[-1]
    nothing = Warmed(group="a", seconds=0.1, kernels={})
    assert warm_lines([nothing])[-1] == "All kernels were ready before."


def test_cancel():
    flag = CancelFlag()
    flag.cancel()
    with pytest.raises(Cancelled):
        warm(flag)


@pytest.mark.slow
def test_a_fresh_machine_is_warm_once_and_for_all(tmp_path):
    code = "from voxelmat.workflow.warm import warm\nprint(sum(len(w.kernels) for w in warm()))\n"
    env = os.environ | {"NUMBA_CACHE_DIR": str(tmp_path)}
    counts = [
        int(
            subprocess.run(
                [sys.executable, "-c", code], env=env, capture_output=True, text=True, check=True
            ).stdout
        )
        for _ in range(2)
    ]
    assert counts[0] > 30
    assert counts[1] == 0
