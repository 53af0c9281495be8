"""Natural frequencies and mode shapes: LOBPCG with the multigrid V-cycle in front."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import ConvergenceError, InputError
from voxelmat.fea.assemble import Assembled, assemble, moduli
from voxelmat.fea.cautions import film_caution
from voxelmat.fea.eigen import Eigenpairs, Problem, extreme_pairs
from voxelmat.fea.element import DEFAULT
from voxelmat.fea.mass import Mass, densities
from voxelmat.fea.operator import touched_nodes
from voxelmat.fea.packed import Packed
from voxelmat.fea.rigid import check_one_body, rigid_fields, rigid_motions
from voxelmat.kernels.threads import threads
from voxelmat.model.loadcase import Foundation, GroundSpring, LoadCase, Support
from voxelmat.model.modalresult import ModalResult
from voxelmat.model.part import Part
from voxelmat.monitor import SILENT, Monitor
from voxelmat.provenance import Provenance, utc_now

__all__ = ["anchors", "modes"]

Double = NDArray[np.float64]

# A residual above this means no answer (a frequency off by about half its square, over the gap);
# between the tolerance and this, a caution.
_NO_ANSWER = 3e-2
# Frequencies closer than this, relative, count as one that is repeated.
_REPEATED = 1e-4
# Share of the part's mass in voxels too empty to be solved, above which we say so.
_LOST_MASS = 0.01


def anchors(
    part: Part, supports: Sequence[Support], springs: Sequence[GroundSpring | Foundation], what: str
) -> tuple[Assembled, NDArray[np.bool_]]:
    """Supports and springs as arrays, and the unknowns ``[3, ...]`` that either acts on.

    Raises
    ------
    InputError
        A support that is to move, or a region without material.
    """
    for support in supports:
        if support.moves:
            raise InputError(
                f"The support on '{support.region.name}' gives a displacement of "
                f"{support.displacement} mm and a rotation of {support.rotation} rad; the supports "
                f"of {what} hold still, so give 0 or None."
            )
    case = LoadCase(name=what, supports=tuple(supports), loads=tuple(springs))
    acts = assemble(part, case)
    anchored = acts.held if acts.springs is None else acts.held | (acts.springs > 0)
    return acts, anchored


def _guard(count: int) -> int:
    """Vectors beyond the wanted ones: a repeated frequency then lies inside the block."""
    return 3 + count // 3


def _orthonormal(packed: Packed, mass: Mass, fields: Double) -> Double:
    """Rigid motions as an M-orthonormal block (r, n)."""
    if not len(fields):
        return np.zeros((0, packed.size))
    R = np.stack([packed.pack(f) for f in fields])
    for _ in range(2):  # twice, for orthogonality to the last digit
        gram = R @ packed.apply(mass.apply, R).T
        R = np.linalg.solve(np.linalg.cholesky(gram), R)
    return np.asarray(R)


def _scaled(packed: Packed, mass: Mass, R: Double, stiff: float, heavy: float) -> Problem:
    """K x = t M x in units in which both are of order 1."""
    return Problem(
        A=lambda X: packed.stiffness(X) / stiff,
        B=lambda X: packed.apply(mass.apply, X) / heavy,
        precondition=lambda X: packed.precondition(X) * stiff,
        size=packed.size,
        largest=False,
        fixed=R * np.sqrt(heavy) if len(R) else None,
    )


def _notes(part: Part, pairs: Eigenpairs, count: int, tol: float, mass: Mass) -> list[str]:
    notes = []
    bad = np.flatnonzero(pairs.residuals[:count] > tol) + 1
    if len(bad):
        worst = float(pairs.residuals[:count].max())
        notes.append(
            f"Modes {', '.join(map(str, bad))} stopped at a residual of up to {worst:.1e} (asked "
            f"for {tol:.1e}): their frequencies are off by about half its square, relative to the "
            f"distance to the next frequency."
        )
    if len(pairs.values) > count:
        last, after = pairs.values[count - 1], pairs.values[count]
        if after - last < 2 * _REPEATED * after and pairs.residuals[count] < _NO_ANSWER:
            notes.append(
                f"Mode {count} is one of a set of equal frequency that goes on beyond it; ask for "
                f"{count + 1} modes to have the whole set."
            )
    lost = 1.0 - mass.total / part.mass
    if lost > _LOST_MASS:
        notes.append(
            f"{lost:.1%} of the part's mass lies in voxels too empty to be solved and is left out."
        )
    return notes


def _shapes(packed: Packed, block: Double) -> Double:
    """Rows as public node fields (m, i, j, k, 3), the largest entry of each positive."""
    out = np.empty((len(block), *packed.shape))
    for c, row in enumerate(block):
        sign = 1.0 if row[np.argmax(np.abs(row))] > 0 else -1.0
        out[c] = sign * packed.field(row)
    return out.transpose(0, 4, 3, 2, 1)


def _participation(packed: Packed, mass: Mass, shapes: Double, touched: Double) -> Double:
    """Modal mass along unit translations of the whole part, held nodes included."""
    out = np.zeros((len(shapes), 3))
    unit, force = np.zeros(packed.shape), np.empty(packed.shape)
    for d in range(3):
        unit[:] = 0.0
        unit[d] = touched
        mass.apply(unit, force)
        for n, shape in enumerate(shapes):
            out[n, d] = np.vdot(shape[..., d].T, force[d])
    return out


def modes(
    part: Part,
    supports: Sequence[Support] = (),
    *,
    springs: Sequence[GroundSpring | Foundation] = (),
    count: int = 6,
    mass: str = "consistent",
    element: str = DEFAULT,
    tol: float = 1e-5,
    maxiter: int = 600,
    monitor: Monitor = SILENT,
) -> ModalResult:
    """Lowest natural frequencies and their shapes.

    Parameters
    ----------
    part : Part
        In one piece, or with every piece held. Rigid motions that are left to a single piece (all
        six of a free part) are taken out exactly and do not count as modes.
    supports : sequence of Support
        Held at 0.
    springs : sequence of GroundSpring or Foundation
        From regions to the ground; a foundation whose surface slopes is refused.
    count : int
        How many modes.
    mass : str
        ``"consistent"`` or ``"lumped"``.
    element : str
        See `voxelmat.fea.element`.
    tol : float
        Residual to reach, see `ModalResult.residuals`.
    maxiter : int
        Most iterations.
    monitor : Monitor

    Returns
    -------
    ModalResult

    Raises
    ------
    InputError
        A support that moves, loose pieces (the message names the places), more modes than the
        part has.
    ConvergenceError
        Where a wanted mode is not found.
    """
    started = utc_now()
    monitor.report("assembling mass and stiffness", done=0, total=0)
    lam, mu = moduli(part)
    solid, spacing = mu > 0, part.grid.spacing
    acts, anchored = anchors(part, supports, springs, "a modal run")
    check_one_body(solid, anchored, part.grid)
    touched = touched_nodes(solid)
    weight = Mass(densities(part), spacing, mass)
    free, names = rigid_motions(rigid_fields(touched, spacing), anchored & touched)
    packed = Packed(lam, mu, spacing, acts.held, acts.springs, element)
    if not 1 <= count <= packed.size - len(free):
        raise InputError(
            f"count must lie in 1 to {packed.size - len(free)}, the number of free unknowns of "
            f"this part less its {len(free)} rigid motions; got {count}."
        )
    R = _orthonormal(packed, weight, free)
    stiff = float(mu.max() * np.cbrt(np.prod(spacing)))
    heavy = weight.total / float(touched.sum())
    pairs = extreme_pairs(
        _scaled(packed, weight, R, stiff, heavy),
        count,
        guard=_guard(count),
        tol=tol,
        maxiter=maxiter,
        monitor=monitor,
        stage="finding modes",
    )
    _check(pairs, count)
    shapes = _shapes(packed, pairs.vectors[:count] / np.sqrt(heavy))
    return ModalResult(
        part=part,
        supports=tuple(supports),
        springs=tuple(springs),
        frequencies=np.sqrt(pairs.values[:count] * stiff / heavy) / (2.0 * np.pi),
        shapes=shapes,
        residuals=pairs.residuals[:count],
        participation=_participation(packed, weight, shapes, touched.astype(np.float64)),
        mass=weight.total,
        rigid=names,
        rigid_shapes=_shapes(packed, R),
        mass_model=mass,
        element=element,
        iterations=pairs.iterations,
        cautions=(*_notes(part, pairs, count, tol, weight), *film_caution(part, lam, mu)),
        provenance=Provenance(
            inputs={"part": part.digest},
            threads=threads(),
            started_utc=started,
            finished_utc=utc_now(),
        ),
    )


def _check(pairs: Eigenpairs, count: int) -> None:
    """Raise where a wanted pair is no mode."""
    worst = float(pairs.residuals[:count].max())
    if not (worst <= _NO_ANSWER and pairs.values[0] > 0):
        raise ConvergenceError(
            f"The modes were not found in {pairs.iterations} iterations: residual {worst:.2g}, "
            f"where {_NO_ANSWER:g} at most is an answer. Ask for fewer modes or raise maxiter; "
            f"check that no voxel is far softer than the rest.",
            pairs.history,
        )
