"""A heat balance of one grid of voxels as a linear system: set up once, solved many times."""

from __future__ import annotations

from typing import Any, cast

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import ConvergenceError, InputError
from voxelmat.fea.krylov import Iteration, conjugate_gradients
from voxelmat.fea.operator import dot, touched_nodes
from voxelmat.fea.scalar_element import CAPACITIES, Spacing
from voxelmat.fea.scalar_levels import Conduction
from voxelmat.fea.scalar_multigrid import ScalarGrid, ScalarMultigrid, matrix_diagonal
from voxelmat.kernels.threads import crew
from voxelmat.monitor import SILENT, Monitor, computing

__all__ = ["HeatSystem"]

Double = NDArray[np.float64]

# Rounding of a row of the product over its diagonal times the unknown: some 30 terms of each 1e-16.
_ROUNDING = 1e-14


def _check(name: str, values: Double, shape: tuple[int, ...], unit: str) -> Double:
    if values.shape != shape:
        raise InputError(f"{name} must have shape {shape}; got {values.shape}.")
    values = np.ascontiguousarray(values, dtype=np.float64)
    bad = np.argwhere(~((values >= 0) & (values < np.inf)))
    if len(bad):
        k, j, i = (int(n) for n in bad[0])
        raise InputError(
            f"{name} must be finite and >= 0 {unit}; {len(bad)} values are not, the first at "
            f"({i}, {j}, {k}): {values[k, j, i]:g}."
        )
    return values


class HeatSystem:
    """(K + C + D) T = q with held temperatures.

    K is conduction, C a capacity already divided by a time step, D a diagonal of films to the
    surroundings.

    Parameters
    ----------
    conductivity : ndarray of float64, shape (nz, ny, nx)
        mW/(mm K), which is W/(m K); 0 in empty voxels. Nodes that touch none but these are no
        unknowns.
    spacing : tuple of float
        Voxel edge along x, y, z, mm.
    held : ndarray of bool, shape (nz+1, ny+1, nx+1)
        Where the temperature is given.
    film : ndarray of float64, shape of `held`, optional
        Heat a degree to the surroundings, mW/K, >= 0; ignored at nodes that touch no material.
    capacity : ndarray of float64, shape of `conductivity`, optional
        Heat capacity a volume over the time step, mW/(mm^3 K).
    kind : str
        See `voxelmat.fea.scalar_element.CAPACITIES`.
    monitor : Monitor

    Raises
    ------
    InputError
        Arrays of wrong shape, negative or infinite values.
    """

    def __init__(
        self,
        conductivity: Double,
        spacing: Spacing,
        held: NDArray[np.bool_],
        *,
        film: Double | None = None,
        capacity: Double | None = None,
        kind: str = CAPACITIES[0],
        monitor: Monitor = SILENT,
    ) -> None:
        voxels = conductivity.shape
        nodes = tuple(n + 1 for n in voxels)
        if len(voxels) != 3 or 0 in voxels:
            raise InputError(f"conductivity must be 3-D; got shape {voxels}.")
        conductivity = _check("conductivity", conductivity, voxels, "mW/(mm K)")
        if film is not None:
            film = _check("film", film, nodes, "mW/K")
        if capacity is not None:
            capacity = _check("capacity", capacity, voxels, "mW/(mm^3 K)")
        if held.shape != nodes or held.dtype != bool:
            raise InputError(f"held must be bool of shape {nodes}; got {held.shape}.")
        if not all(np.isfinite(h) and h > 0 for h in spacing):
            raise InputError(f"The spacing must be above 0 mm; got {spacing}.")
        self.touched = touched_nodes(conductivity > 0)
        self.held = held & self.touched
        film = None if film is None else film * self.touched
        self.shape = nodes
        self.free = (self.touched & ~held).astype(np.uint8)[None]
        self.operator = Conduction(conductivity, capacity, spacing, kind, film)
        self._grid = ScalarGrid(
            conductivity, capacity, spacing, kind, film, self.held, self.touched
        )
        self._monitor = monitor
        self._preconditioner: ScalarMultigrid | None = None

    @property
    def nbytes(self) -> int:
        """Memory held between solves, bytes."""
        extra = 0 if self._preconditioner is None else self._preconditioner.nbytes
        return self.operator.nbytes + int(self.free.nbytes) + extra

    def apply(self, T: Double) -> Double:
        """(K + C + D) T at all nodes, held ones too, mW."""
        T = np.ascontiguousarray(T, dtype=np.float64)
        if T.shape != self.shape:
            raise InputError(f"T must have shape {self.shape}; got {T.shape}.")
        out = np.empty((1, *T.shape))
        with computing(), crew(T.size):
            self.operator.apply(T[None], out)
        return np.asarray(out[0])

    def _ready(self) -> ScalarMultigrid:
        if self._preconditioner is None:
            self._monitor.report("preparing the heat solver", done=0, total=0)
            self._preconditioner = ScalarMultigrid(self._grid)
        return self._preconditioner

    def _rounding(self, T: Double) -> float:
        """Size of a residual that rounding of the product alone can leave, mW."""
        size = matrix_diagonal(self._grid) * np.abs(T[0]) * self.free[0]
        return _ROUNDING * float(np.sqrt(dot(size[None], size[None])))

    def solve(
        self,
        heat: Double,
        *,
        x0: Double | None = None,
        prescribed: Double | None = None,
        tol: float = 1e-9,
        maxiter: int = 1000,
    ) -> tuple[Double, Iteration]:
        """Solve for one right-hand side.

        Parameters
        ----------
        heat : ndarray of float64, shape (nz+1, ny+1, nx+1)
            Heat into each node, mW; what falls on held or untouched nodes has no effect.
        x0 : ndarray, optional
            First guess, K.
        prescribed : ndarray, optional
            Temperature at held nodes; other entries are ignored. 0 without it.
        tol : float
            Residual to reach, over the size of the right-hand side.
        maxiter : int

        Returns
        -------
        T : ndarray of float64, shape (nz+1, ny+1, nx+1)
            0 at nodes that touch no material.
        run : Iteration
            Iterations and residuals.

        Raises
        ------
        ConvergenceError
            With the residual history, when `tol` is out of reach and the residual is more than
            rounding leaves.
        """
        for name, value in (("heat", heat), ("x0", x0), ("prescribed", prescribed)):
            if value is not None and not (value.shape == self.shape and np.isfinite(value).all()):
                raise InputError(f"{name} must be finite and of shape {self.shape}.")
        given = np.zeros((1, *self.shape))
        if prescribed is not None:
            given[0][self.held] = prescribed[self.held]
        x = given.copy()
        if x0 is not None:
            x += x0 * self.free
        with computing(), crew(x.size):
            load = heat * self.free
            carried = load - self.apply(given[0]) * self.free
            norm = float(np.sqrt(dot(carried, carried)))
            if norm == 0.0:
                return given[0], Iteration(given, residual=0.0, history=[0.0], state="converged")
            run = conjugate_gradients(
                cast("Any", self.operator),
                self._ready(),
                load,
                self.free,
                Iteration(x),
                norm=norm,
                tol=tol,
                limit=maxiter,
                monitor=self._monitor,
            )
        if run.state == "stalled" and run.residual * norm <= self._rounding(run.x):
            run.state = "converged"
        if run.state != "converged":
            some = self._grid.conductivity[self._grid.conductivity > 0]
            raise ConvergenceError(
                f"The heat solver did not get below residual {run.residual:.2g} in "
                f"{run.iterations} iterations (asked for {tol:.2g}; it ended as {run.state!r}). "
                f"The conductivities span a factor of {some.max() / some.min():.2g}. Raise "
                f"maxiter, or ask for a larger tolerance.",
                run.history,
            )
        return np.asarray(run.x[0]), run
