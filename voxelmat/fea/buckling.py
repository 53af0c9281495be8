"""Linear buckling: the load factors at which a part has a second equilibrium, and the shapes."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import ConvergenceError, InputError
from voxelmat.fea.assemble import assemble, moduli
from voxelmat.fea.eigen import Eigenpairs, Problem, extreme_pairs
from voxelmat.fea.element import DEFAULT
from voxelmat.fea.geometric import GeometricStiffness, stress_modes
from voxelmat.fea.held import find_pieces
from voxelmat.fea.operator import touched_nodes
from voxelmat.fea.packed import Packed
from voxelmat.fea.static import solve
from voxelmat.kernels.threads import threads
from voxelmat.model.bucklingresult import BucklingResult
from voxelmat.model.loadcase import LoadCase
from voxelmat.model.part import Part
from voxelmat.model.result import ROTATION_LIMIT, STRAIN_LIMIT, StaticResult
from voxelmat.monitor import SILENT, Monitor
from voxelmat.provenance import Provenance, utc_now

__all__ = ["buckling"]

Double = NDArray[np.float64]

# A residual above this means no answer; between the tolerance and this, a caution.
_NO_ANSWER = 3e-2
# A reverse load that needs more than this many times the factor of the load itself is left out.
_FAR = 100.0
# Factors at which the linear strain would pass this count as none: what lies there is the end of a
# spectrum that piles up without bound, such as that of a pulled bar.
_NEVER = 1.0


def _check(part: Part, case: LoadCase) -> None:
    """Refuse what has no place in linear buckling, before anything is solved."""
    if case.strains:
        raise InputError(
            f"Load case '{case.name}' holds a temperature or an initial strain; buckling takes "
            f"forces, pressures, plates and given displacements. Leave it out."
        )


def _system(static: StaticResult, monitor: Monitor) -> tuple[Packed, GeometricStiffness]:
    """Stiffness on free unknowns and initial-stress matrix; refuses loose pieces."""
    part = static.part
    lam, mu = moduli(part)
    acts = assemble(part, static.load_case, everything=True)
    anchored = acts.held if acts.springs is None else acts.held | (acts.springs > 0)
    if acts.plates is not None:
        # That the plates are held in their turn, the static solve has seen to.
        anchored = anchored | acts.plates.mask
    solid = mu > 0
    loose = [p for p in find_pieces(solid, anchored, part.grid) if p.missing]
    if loose:
        raise InputError(
            f"{len(loose)} pieces of the part are not held, first {loose[0].place}. A static solve "
            f"leaves them out, but buckling needs a part that is held altogether. Remove the loose "
            f"pieces, or hold them."
        )
    spacing, element = part.grid.spacing, static.element
    u = np.ascontiguousarray(static.displacement.T)
    stress = stress_modes(u, lam, mu, spacing, element)
    packed = Packed(
        lam,
        mu,
        spacing,
        acts.held & touched_nodes(solid),
        acts.springs,
        element,
        beds=acts.beds,
        plates=acts.plates,
        monitor=monitor,
    )
    return packed, GeometricStiffness(stress, solid, spacing)


class _Search:
    """-Kg x = t K x, t = 1 / factor: the largest t of the load, then of the load reversed."""

    def __init__(self, static: StaticResult, tol: float, maxiter: int, monitor: Monitor) -> None:
        self.packed, self._geometric = _system(static, monitor)
        _, mu = moduli(static.part)
        # Makes K of order 1.
        self._size = float(mu.max() * np.cbrt(static.part.grid.voxel_volume))
        self._strain = abs(static.largest_strain.value)
        self._tol, self._maxiter, self._monitor = tol, maxiter, monitor
        self.iterations = 0

    def _find(self, way: float, count: int, floor: float, stage: str) -> Eigenpairs:
        packed, size = self.packed, self._size
        problem = Problem(
            A=lambda X: packed.apply(self._geometric.apply, X) * (-way / size),
            B=lambda X: packed.stiffness(X) / size,
            precondition=lambda X: packed.precondition(X) * size,
            size=packed.size,
            largest=True,
            project=packed.project if packed.has_plates else None,
            floor=floor,
        )
        pairs = extreme_pairs(
            problem,
            count,
            guard=3 + count // 3,
            tol=self._tol,
            maxiter=self._maxiter,
            monitor=self._monitor,
            stage=stage,
        )
        self.iterations += pairs.iterations
        return pairs

    def both_ways(self, count: int) -> tuple[Eigenpairs, int, Eigenpairs | None]:
        """Pairs of the load, how many of them mean something, and of the reverse load or None."""
        floor = self._strain / _NEVER
        found = self._find(1.0, min(count, self.packed.size), floor, "finding buckling shapes")
        n = int(np.count_nonzero(found.values[:count] > floor))
        if n and not found.residuals[:n].max() <= _NO_ANSWER:
            raise ConvergenceError(
                f"The buckling shapes were not found in {found.iterations} iterations: residual "
                f"{found.residuals[:n].max():.2g}, where {_NO_ANSWER:g} at most is an answer. Ask "
                f"for fewer shapes or raise maxiter.",
                found.history,
            )
        floor = max(floor, float(found.values[0]) / _FAR if n else 0.0)
        other = self._find(-1.0, 1, floor, "finding buckling of the reverse load")
        sure = other.values[0] > floor and other.residuals[0] <= _NO_ANSWER
        return found, n, other if sure else None


def _shapes(packed: Packed, block: Double) -> Double:
    """Rows as public node fields (m, i, j, k, 3) with a largest displacement of 1 mm."""
    out = np.empty((len(block), *packed.shape))
    for c, row in enumerate(block):
        field = packed.field(row)
        size = np.sqrt((field**2).sum(axis=0)).max()
        sign = 1.0 if row[np.argmax(np.abs(row))] > 0 else -1.0
        out[c] = field * (sign / size)
    return out.transpose(0, 4, 3, 2, 1)


def _notes(
    static: StaticResult, factors: Double, residuals: Double, reverse: float | None, tol: float
) -> list[str]:
    notes = list(static.cautions)
    bad = np.flatnonzero(residuals > tol) + 1
    if len(bad):
        notes.append(
            f"Buckling shapes {', '.join(map(str, bad))} stopped at a residual of up to "
            f"{residuals.max():.1e} (asked for {tol:.1e})."
        )
    if not len(factors):
        notes.append(
            f"No multiple of this load buckles the part before the strain, as a linear solve has "
            f"it, passes {_NEVER:.0%}."
        )
    if reverse is not None:
        lower = len(factors) and reverse < factors[0]
        notes.append(
            f"The load the other way round buckles the part at {reverse:.4g} times its size"
            f"{', before this one does' if lower else ''}."
        )
    if len(factors):
        strain = float(factors[0]) * abs(static.largest_strain.value)
        turn = float(factors[0]) * static.largest_rotation.value
        if strain > STRAIN_LIMIT or turn > ROTATION_LIMIT:
            notes.append(
                f"At the lowest factor the part would be strained by {strain:.0%} and turned by "
                f"{np.degrees(turn):.0f} degrees before it buckles: too much for linear buckling, "
                f"which takes the part as straight until then. The factor is a rough guide only."
            )
        notes.append(
            "Linear buckling is that of a perfect part; a real one, bent or loaded off its middle, "
            "gives way below it."
        )
    return notes


def buckling(
    part: Part,
    load_case: LoadCase,
    *,
    count: int = 3,
    static: StaticResult | None = None,
    element: str = DEFAULT,
    tol: float = 1e-5,
    maxiter: int = 400,
    monitor: Monitor = SILENT,
) -> BucklingResult:
    """Lowest load factors and buckling shapes.

    Solves (K + factor Kg) shape = 0 with the initial-stress matrix Kg of the static solution, for
    loads that keep their direction.

    Parameters
    ----------
    part : Part
        Held altogether by the load case.
    load_case : LoadCase
        The load at factor 1; displacements that it gives grow with the factor.
    count : int
        How many factors at most.
    static : StaticResult, optional
        This load case solved before, with a residual of 1e-8 or better.
    element : str
        See `voxelmat.fea.element`; that of `static` where it is given.
    tol : float
        Residual to reach, see `BucklingResult.residuals`.
    maxiter : int
        Most iterations of the eigenvalue solver.
    monitor : Monitor

    Returns
    -------
    BucklingResult

    Raises
    ------
    InputError
        A part that is not held, a static result of another part or load case.
    ConvergenceError
        Where a factor is not found.
    """
    started = utc_now()
    if count < 1:
        raise InputError(f"count must be at least 1; got {count}.")
    _check(part, load_case)
    if static is None:
        static = solve(part, load_case, element=element, monitor=monitor)
    elif static.part != part or static.load_case is not load_case:
        raise InputError("The static result belongs to another part or load case; solve this one.")
    search = _Search(static, tol, maxiter, monitor)
    forward, n, backward = search.both_ways(count)
    reverse = None if backward is None else float(1.0 / backward.values[0])
    factors, residuals = 1.0 / forward.values[:n], forward.residuals[:n]
    return BucklingResult(
        static=static,
        factors=factors,
        shapes=_shapes(search.packed, forward.vectors[:n]),
        residuals=residuals,
        reversed_factor=None if reverse is None else -reverse,
        iterations=search.iterations,
        cautions=tuple(_notes(static, factors, residuals, reverse, tol)),
        provenance=Provenance(
            inputs={"part": part.digest},
            threads=threads(),
            started_utc=started,
            finished_utc=utc_now(),
        ),
    )
