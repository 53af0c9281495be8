"""A linear system of voxels with nine constants a label: set up once, solved for any load."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.fea.bed import Bed, Coupled
from voxelmat.fea.element import DEFAULT, Spacing
from voxelmat.fea.multigrid import Preconditioner
from voxelmat.fea.orthotropic_multigrid import (
    OrthotropicGrid,
    OrthotropicJacobi,
    OrthotropicMultigrid,
)
from voxelmat.fea.orthotropic_operator import (
    Double,
    Fill,
    Labels,
    OrthotropicStiffness,
    check_constants,
    check_voxels,
    comparison,
)
from voxelmat.fea.plates import PlateSet
from voxelmat.fea.system import LinearSystem
from voxelmat.monitor import SILENT, Monitor

__all__ = ["METHODS", "OrthotropicSystem"]

#: Ways to precondition: the multigrid (or, for small systems, the factors) of the isotropic
#: comparison medium; ``exact``, a multigrid of the orthotropic grid itself; ``jacobi``.
METHODS = ("avg2", "gal4b", "direct", "exact", "jacobi")

# Condition number against the comparison medium up to which the automatic choice begins with it.
# Iterations go with its square root: measured at 16^3, 38 against 10 at 12 and 130 against 25 at
# 150, so that the cheaper cycle pays only where the voxels are all but isotropic.
_NEAR = 2.0


class OrthotropicSystem(LinearSystem):
    """K u = f on a grid of orthotropic voxels, with held unknowns and springs.

    Parameters
    ----------
    labels : ndarray of uint16, shape (nz, ny, nx)
        0 is empty.
    constants : ndarray, shape (n, 9)
        C11 C22 C33 C12 C13 C23 C44 C55 C66 of each label in the grid's axes, MPa (4 is yz, 5 is
        xz, 6 is xy); row 0 is 0.
    spacing : tuple of float
        Voxel edge along x, y, z, mm.
    fixed : ndarray of bool, shape (3, nz+1, ny+1, nx+1)
        Where the displacement along x, y, z is given.
    fill : ndarray of uint8, shape of `labels`, optional
        What a voxel's stiffness is multiplied by, in 1/255.
    springs, beds, plates, monitor
        As for `LinearSystem`.
    element : str
        ``icmb``, ``icm`` or ``full``.
    coarse : str
        ``"auto"`` (``avg2`` where all labels are nearly isotropic, else ``exact``) or one of
        `METHODS`.

    Raises
    ------
    InputError
        Arrays of wrong shape, constants that are not positive definite, an unknown name.
    """

    def __init__(
        self,
        labels: Labels,
        constants: Double,
        spacing: Spacing,
        fixed: NDArray[np.bool_],
        *,
        fill: Fill | None = None,
        springs: Double | None = None,
        beds: tuple[Bed, ...] = (),
        plates: PlateSet | None = None,
        element: str = DEFAULT,
        coarse: str = "auto",
        monitor: Monitor = SILENT,
    ) -> None:
        if coarse not in ("auto", *METHODS):
            raise InputError(f"coarse is one of auto, {', '.join(METHODS)}; got {coarse!r}.")
        constants = check_constants(constants)
        check_voxels(labels, fill, len(constants))
        #: The isotropic likeness of each label, and how near it is.
        self.medium = comparison(constants)
        lam, mu = self.medium.lam[labels], self.medium.mu[labels]
        if fill is not None:
            share = fill / 255.0
            lam, mu = lam * share, mu * share
            labels = np.where(fill > 0, labels, 0).astype(np.uint16)
        used = np.flatnonzero(np.bincount(labels.ravel(), minlength=len(constants))[1:]) + 1
        spread = float(self.medium.high[used].max(initial=1) / self.medium.low[used].min(initial=1))
        own = coarse in ("exact", "jacobi")
        super().__init__(
            lam,
            mu,
            spacing,
            fixed,
            springs=springs,
            beds=beds,
            plates=plates,
            element=element,
            coarse="gal4b" if own else coarse,
            monitor=monitor,
        )
        if own:
            self._method = coarse
        elif self._automatic and (spread > _NEAR or self._method != "avg2"):
            self._method = "exact"
        # The base class may have cut the grid to the box of the material.
        labels = self._window.voxels(labels)
        fill = None if fill is None else self._window.voxels(fill)
        springs = self._grid.springs
        stiffness = OrthotropicStiffness(
            labels, constants, spacing, element, fill=fill, springs=springs
        )
        leaning = tuple(bed for bed in beds if bed.leans)
        self.operator = Coupled(stiffness, leaning) if leaning else stiffness
        self._own = OrthotropicGrid(
            labels, fill, constants, spacing, element, self._grid.held, self._free, springs
        )

    def _next_method(self) -> str | None:
        return "exact" if self._automatic and self._method == "avg2" else None

    def _make(self, method: str) -> Preconditioner:
        if method == "exact":
            return OrthotropicMultigrid(self._own)
        if method == "jacobi":
            return OrthotropicJacobi(self._own)
        return super()._make(method)
