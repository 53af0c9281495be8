"""Which nodes touch: the primal-dual active set method for a rigid body pressed on a part.

Along the push each node of the surface has either no force or no gap. Nodes that touch get their
displacement along the push from the indenter, so every round is one linear solve with other held
unknowns; a node whose force would pull is let go, one that would be inside the indenter is taken
in (Hintermueller, Ito & Kunisch 2003, SIAM J. Optim. 13:865).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import ConvergenceError
from voxelmat.fea.bed import Bed
from voxelmat.fea.contact_surface import TouchSurface
from voxelmat.fea.element import Spacing
from voxelmat.fea.system import LinearSystem
from voxelmat.monitor import SILENT, Monitor

__all__ = ["Contact", "Pressed"]

Double = NDArray[np.float64]
Bools = NDArray[np.bool_]

# A pull below this share of the largest push, or an overlap below this share of the largest
# movement, is rounding of the linear solver.
_ROUNDING = 1e-6
_ROUNDS, _CAREFUL = 40, 120


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Contact:
    """The answer at one depth; arrays of length m are for the nodes of the surface.

    Attributes
    ----------
    depth : float
        mm.
    u : ndarray of float64, shape (3, nz+1, ny+1, nx+1)
        mm.
    pull : ndarray of float64, shape of `u`
        K u - f: what supports and indenter add, N.
    active : ndarray of bool, shape (m,)
    push, gap : ndarray of float64, shape (m,)
        N and mm, along the push.
    slope : ndarray of float64, shape of `u`
        Change of u with depth while the same nodes touch.
    tangent : float
        N/mm.
    changes : tuple of int
    iterations : int
    residual : float
        Of the last linear solve.
    """

    depth: float
    u: Double
    pull: Double
    active: Bools
    push: Double
    gap: Double
    slope: Double
    tangent: float
    changes: tuple[int, ...]
    iterations: int
    residual: float

    @property
    def force(self) -> float:
        """Along the push, N."""
        return float(self.push.sum())


class Pressed:
    """A part with its supports and loads under one indenter.

    Parameters
    ----------
    lam, mu : ndarray of float64, shape (nz, ny, nx)
        MPa.
    spacing : tuple of float
    held : ndarray of bool, shape (3, nz+1, ny+1, nx+1)
    prescribed, force : ndarray of float64, shape of `held`
        mm at held unknowns, N at the others.
    springs : ndarray or None
        N/mm.
    beds : tuple of Bed
        Elastic foundations.
    surface : TouchSurface
    element : str
    tol : float
        Of the linear solver.
    monitor : Monitor
    """

    def __init__(
        self,
        lam: Double,
        mu: Double,
        spacing: Spacing,
        held: Bools,
        prescribed: Double,
        force: Double,
        springs: Double | None,
        beds: tuple[Bed, ...],
        surface: TouchSurface,
        *,
        element: str,
        tol: float,
        monitor: Monitor = SILENT,
    ) -> None:
        self.surface = surface
        self._material = lam, mu, spacing
        self._held, self._given, self._force, self._springs = held, prescribed, force, springs
        self._beds = beds
        self._element, self._tol, self._monitor = element, tol, monitor
        # A node that a support holds along the push stays where the support has it.
        self._can = np.isfinite(surface.gap) & ~held[surface.axis].ravel()[surface.flat]
        self._system: tuple[bytes, LinearSystem] | None = None

    def _for(self, active: Bools) -> LinearSystem:
        """The system with `active` held along the push; the last one is kept."""
        key = active.tobytes()
        if self._system is None or self._system[0] != key:
            self._system = None
            lam, mu, spacing = self._material
            held = self._held.copy()
            held[self.surface.axis].ravel()[self.surface.flat[active]] = True
            system = LinearSystem(
                lam,
                mu,
                spacing,
                held,
                springs=self._springs,
                beds=self._beds,
                element=self._element,
                monitor=self._monitor,
            )
            self._system = key, system
        return self._system[1]

    def _with(self, start: Double, active: Bools, value: Double) -> Double:
        """Given displacements: `start`, and `value` (m,) along the push where nodes touch."""
        out = start.copy()
        s = self.surface
        out[s.axis].ravel()[s.flat[active]] = s.sign * value[active]
        return out

    def _judge(
        self, active: Bools, push: Double, gap: Double, scale: float
    ) -> tuple[Bools, Double]:
        """Nodes that ought to change, and how badly (in newtons, about)."""
        largest = float(np.abs(push[active]).max(initial=0.0))
        pulls = active & (push < -_ROUNDING * largest)
        inside = self._can & ~active & (gap < -_ROUNDING * scale)
        stiff = largest / scale if largest > 0 else 1.0
        return pulls | inside, np.where(pulls, -push, np.where(inside, -gap * stiff, 0.0))

    def at(self, depth: float, start: Contact | None = None) -> Contact:
        """Press to `depth` after first touch, mm.

        Raises
        ------
        ConvergenceError
            Where the linear solver fails, or the nodes that touch do not settle.
        """
        s = self.surface
        x0 = None if start is None else start.u + (depth - start.depth) * start.slope
        active = self._can & (s.gap < depth) if start is None else start.active
        if start is not None and not active.any():
            active = self._can & (s.gap < depth)
        seen: set[bytes] = set()
        changes: list[int] = []
        iterations = 0
        careful = False
        while True:
            system = self._for(active)
            given = self._with(self._given, active, depth - s.gap)
            solution = system.solve(self._force, x0=x0, prescribed=given, tol=self._tol)
            iterations += solution.iterations
            x0 = u = solution.u
            pull = system.apply(u) - self._force
            push = np.where(active, s.sign * pull[s.axis].ravel()[s.flat], 0.0)
            gap = s.gap - depth + s.sign * u[s.axis].ravel()[s.flat]
            scale = max(abs(depth), float(np.abs(u).max()), 1e-300)
            wrong, size = self._judge(active, push, gap, scale)
            changes.append(int(wrong.sum()))
            self._monitor.report(
                "finding contact", done=len(changes), total=0, changes=changes[-1], depth_mm=depth
            )
            if not wrong.any():
                break
            seen.add(active.tobytes())
            careful = careful or len(changes) > _ROUNDS or (active ^ wrong).tobytes() in seen
            if careful:
                # Going round in a circle: from here on, one node at a time, the worst first.
                worst = np.zeros_like(wrong)
                worst[int(np.argmax(size))] = True
                wrong = worst
            if len(changes) >= _CAREFUL:
                raise ConvergenceError(
                    f"The nodes in contact do not settle at a depth of {depth:g} mm: after "
                    f"{len(changes)} rounds {changes[-1]} of them still change between touching "
                    f"and not. Try a slightly different depth or smaller voxels under the "
                    f"indenter.",
                    changes,
                )
            active = active ^ wrong
        slope, tangent, more = self._slope(system, active, start)
        return Contact(
            depth=depth,
            u=u,
            pull=pull,
            active=active,
            push=np.maximum(push, 0.0),
            gap=np.where(active, 0.0, gap),
            slope=slope,
            tangent=tangent,
            changes=tuple(changes),
            iterations=iterations + more,
            residual=solution.residual,
        )

    def adjoint(self, found: Contact, weight: Double, x0: Double | None = None) -> Double:
        """Field v with which d(weight . push) = v . dK u at constant depth and the same contact.

        Parameters
        ----------
        found : Contact
        weight : ndarray of float64, shape (m,)
        x0 : ndarray, optional
            First guess.

        Returns
        -------
        ndarray of float64, shape (3, nz+1, ny+1, nx+1)
            What the part does when the touching nodes move by `weight` along the push.
        """
        unit = self._with(np.zeros_like(self._given), found.active, weight)
        system = self._for(found.active)
        return system.solve(np.zeros_like(self._force), x0=x0, prescribed=unit, tol=self._tol).u

    def stiffness(self, found: Contact, u: Double) -> Double:
        """Forces along the push, (m,), on the nodes that touch, for a displacement u, N."""
        s = self.surface
        pull = self._for(found.active).apply(u)[s.axis].ravel()[s.flat]
        return np.where(found.active, s.sign * pull, 0.0)

    def _slope(
        self, system: LinearSystem, active: Bools, start: Contact | None
    ) -> tuple[Double, float, int]:
        """Displacement and force a millimetre of depth."""
        s = self.surface
        unit = self._with(np.zeros_like(self._given), active, np.ones(len(active)))
        solution = system.solve(
            np.zeros_like(self._force),
            x0=None if start is None else start.slope,
            prescribed=unit,
            tol=max(self._tol, 1e-8),
        )
        pull = system.apply(solution.u)[s.axis].ravel()[s.flat[active]]
        return solution.u, float(s.sign * pull.sum()), solution.iterations
