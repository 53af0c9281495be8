"""Displacements of one design under its load cases: solved once, kept, and warm-started."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from voxelmat.fea.sensitivity import stiffness_forms
from voxelmat.fea.system import LinearSystem
from voxelmat.monitor import SILENT, Monitor
from voxelmat.topopt.unknowns import Fields

__all__ = ["Case", "Physics"]

Array = NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True)
class Case:
    """One load case as arrays over the nodes, (3, nz+1, ny+1, nx+1).

    Attributes
    ----------
    name : str
    weight : float
    force : ndarray of float
        N; does not depend on the design.
    fixed : ndarray of bool
        Held directions.
    springs : ndarray of float or None
        To ground, N/mm.
    """

    name: str
    weight: float
    force: Array
    fixed: NDArray[np.bool_]
    springs: Array | None = None


class Physics:
    """Solves for the design that `update` was last given.

    Load cases with the same supports and springs share one solver set-up. Each displacement and
    each adjoint starts from the one of the design before.

    Parameters
    ----------
    cases : tuple of Case
    spacing : tuple of float
        mm, along x, y, z.
    element : str
    tolerance : float
        Of the linear solver, relative to the load.
    monitor : Monitor
        Handed to the solver, so that a long solve can be cancelled.
    """

    def __init__(
        self,
        cases: tuple[Case, ...],
        spacing: tuple[float, float, float],
        *,
        element: str = "icmb",
        tolerance: float = 1e-3,
        monitor: Monitor = SILENT,
        system: Callable[..., Any] = LinearSystem,
    ) -> None:
        self.cases, self.tolerance = cases, tolerance
        self.spacing, self.element, self.monitor = spacing, element, monitor
        self._system = system
        self._group = [self._first_alike(n) for n in range(len(cases))]
        self._systems: dict[int, Any] = {}
        self._solved: dict[str, Array] = {}
        self._warm: dict[str, Array] = {}
        self._once: dict[str, Any] = {}
        self._fields: Fields | None = None
        self.cg_iterations = 0
        #: Whether smooth maxima are corrected anew at this design; see `voxelmat.topopt.smooth`.
        self.renewing = False

    def _first_alike(self, n: int) -> int:
        """The first case with the same supports and springs as case n."""
        mine = self.cases[n]
        for m, other in enumerate(self.cases[:n]):
            same_springs = (
                mine.springs is other.springs
                or (mine.springs is not None and other.springs is not None
                    and np.array_equal(mine.springs, other.springs))
            )  # fmt: skip
            if same_springs and np.array_equal(mine.fixed, other.fixed):
                return m
        return n

    @property
    def fields(self) -> Fields:
        """Fields of the present design."""
        if self._fields is None:
            raise RuntimeError("Physics.update has not been called yet.")
        return self._fields

    def update(self, fields: Fields) -> None:
        """Take the next design; what was solved becomes the start of the next solves."""
        self._fields = fields
        self._systems.clear()
        self._solved = {}
        self._once.clear()
        self.cg_iterations = 0

    def quiet(self) -> None:
        """No more reports, and so no more cancelling: for the last solves after a stop."""
        self.monitor = SILENT

    def warm_state(self) -> dict[str, Array]:
        """Last solutions by name; never changed in place."""
        return dict(self._warm)

    def restore(self, warm: Mapping[str, Array]) -> None:
        """Start the next solves from these."""
        self._warm = dict(warm)

    def recall(self, name: str) -> Array | None:
        """What `remember` was last given under this name, from an earlier design."""
        return self._warm.get(name)

    def remember(self, name: str, value: Array) -> None:
        """Keep an array of a response of its own physics for the next design.

        It goes into checkpoints with the displacements, and must not be changed in place.
        """
        self._warm[name] = value

    def once(self, name: str, make: Callable[[], Any]) -> Any:
        """What `make` gives for the present design, made once and shared by responses."""
        if name not in self._once:
            self._once[name] = make()
        return self._once[name]

    def displacement(self, case: int) -> Array:
        """Of one load case, mm, (3, nz+1, ny+1, nx+1)."""
        return self._solve(case, self.cases[case].force, f"u{case}")

    def adjoint(self, case: int, slope: Array, name: str) -> Array:
        """Solve with the derivative of a response by the displacement as the load."""
        return self._solve(case, slope, f"adjoint {name} {case}")

    def by_stiffness(self, u: Array, v: Array) -> dict[str, Array]:
        """v^T (dK / d lam, dK / d mu) u of each voxel."""
        f = self.fields
        lam, mu = stiffness_forms(u, v, f.lam, f.mu, self.spacing, self.element)
        return {"lam": lam, "mu": mu}

    def _solve(self, case: int, right: Array, name: str) -> Array:
        if name not in self._solved:
            group = self._group[case]
            if group not in self._systems:
                f, c = self.fields, self.cases[case]
                self._systems[group] = self._system(
                    f.lam, f.mu, self.spacing, c.fixed,
                    springs=c.springs, element=self.element, monitor=self.monitor,
                )  # fmt: skip
            solution = self._systems[group].solve(
                right, x0=self._warm.get(name), tol=self.tolerance
            )
            self.cg_iterations += int(solution.iterations)
            self._solved[name] = solution.u
            self._warm[name] = solution.u
        return self._solved[name]
