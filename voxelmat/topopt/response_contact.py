"""Largest pressure under a rigid body that is pressed on a design.

With the nodes A that touch held along the push, K_FF u_F = f_F - K_FA u_A is linear, and the
nodal pushes are p_A = s (K u - f)_A. For J(p) at a given depth one solve with v_A = s dJ/dp and
no load gives dJ = v . dK u; at a given force the depth moves too, d(depth) = -(w . dK u) / t with
w = du/d(depth) and t = dF/d(depth).

Limits of the derivative: it is that of the nodes which touch at present. Where a node comes into
contact or leaves it, p is continuous but its slope jumps, so J has a kink there and the gradient
is that of one side; between such changes it is exact. Each pressure is the mean over the faces
round a node, as in `voxelmat.fea.contact`, and the p-norm over them is corrected to the true
maximum.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.fea.active_set import Contact, Pressed
from voxelmat.fea.assemble import Assembled
from voxelmat.fea.contact import for_force
from voxelmat.fea.contact_job import ContactJob
from voxelmat.fea.contact_surface import TouchSurface
from voxelmat.fea.element import DEFAULT
from voxelmat.fea.operator import touched_nodes
from voxelmat.model.loadcase import BodyForce
from voxelmat.model.measure_physics import ContactPeak
from voxelmat.model.part import Part
from voxelmat.monitor import SILENT
from voxelmat.topopt.physics import Physics
from voxelmat.topopt.smooth import correction, scaled, smooth_maximum
from voxelmat.topopt.unknowns import Unknowns

__all__ = ["ContactResponse", "contact_response"]

Array = NDArray[np.float64]

# A force is met this closely in the end: while the same nodes touch, one step is exact.
_FORCE, _STEPS = 1e-10, 4


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class ContactResponse:
    """Largest mean pressure round a node, MPa.

    Attributes
    ----------
    surface : TouchSurface
    acts : Assembled
        Supports, loads and springs.
    depth, force : float or None
        One of them, mm or N.
    first : float
        Depth to begin with where a force is given, mm.
    exponent : float
    key : str
        Tells it from other responses.
    """

    surface: TouchSurface
    acts: Assembled
    depth: float | None
    force: float | None
    first: float
    exponent: float
    key: str = ""
    name: str = "peak contact pressure"
    unit: str = "MPa"

    def value(self, physics: Physics) -> tuple[float, dict[str, Array]]:
        """Value, and derivatives by ``lam`` and ``mu``."""
        pressed, found = self.found(physics)
        s = self.surface
        area = s.round_about(s.area)
        pressure = s.round_about(found.push) / area
        peak, by_pressure = smooth_maximum(pressure, self.exponent)
        weight = np.where(found.active, s.round_about(by_pressure / area), 0.0)
        name = f"contact adjoint {self.key}"
        v = pressed.adjoint(found, weight, physics.recall(name))
        physics.remember(name, v)
        if self.force is not None:
            deeper = float(weight @ pressed.stiffness(found, found.slope))
            v = v - deeper / found.tangent * found.slope
        slopes = physics.by_stiffness(found.u, v)
        ratio = correction(physics, self.key, peak, float(pressure.max()))
        return scaled(ratio, peak, slopes)

    def report(self, value: float) -> float:
        """As it is."""
        return value

    def truth(self, physics: Physics) -> float:
        """The largest."""
        s = self.surface
        return float((s.round_about(self.found(physics)[1].push) / s.round_about(s.area)).max())

    def found(self, physics: Physics) -> tuple[Pressed, Contact]:
        """The contact of the present design."""
        pressed, found = physics.once(f"contact {self.key}", lambda: self._press(physics))
        return pressed, found

    def _press(self, physics: Physics) -> tuple[Pressed, Contact]:
        f, a = physics.fields, self.acts
        pressed = Pressed(
            f.lam,
            f.mu,
            physics.spacing,
            a.held,
            a.prescribed,
            a.force,
            a.springs,
            a.beds,
            self.surface,
            element=physics.element,
            tol=physics.tolerance,
            monitor=physics.monitor,
        )
        if self.depth is not None:
            found = pressed.at(self.depth, self._start(physics, a.force))
        else:
            found = self._at_force(pressed, physics)
        physics.cg_iterations += found.iterations
        for part in ("u", "slope"):
            physics.remember(f"contact {part} {self.key}", getattr(found, part))
        physics.remember(f"contact active {self.key}", found.active.astype(np.float64))
        physics.remember(f"contact depth {self.key}", np.array([found.depth]))
        return pressed, found

    def _at_force(self, pressed: Pressed, physics: Physics) -> Contact:
        wanted = float(self.force or 0.0)
        last = physics.recall(f"contact depth {self.key}")
        found = for_force(pressed, wanted, self.first if last is None else float(last[0]))
        for _ in range(_STEPS):
            miss = wanted - found.force
            if abs(miss) <= _FORCE * wanted:
                break
            found = pressed.at(found.depth + miss / found.tangent, found)
        return found

    def _start(self, physics: Physics, force: Array) -> Contact | None:
        """The contact of the design before."""
        u = physics.recall(f"contact u {self.key}")
        slope = physics.recall(f"contact slope {self.key}")
        active = physics.recall(f"contact active {self.key}")
        if u is None or slope is None or active is None or self.depth is None:
            return None
        none = np.zeros(active.shape)
        return Contact(
            depth=self.depth, u=u, pull=np.zeros(force.shape), active=active > 0.5, push=none,
            gap=none, slope=slope, tangent=0.0, changes=(), iterations=0, residual=0.0,
        )  # fmt: skip


def contact_response(
    measure: ContactPeak, part: Part, unknowns: Unknowns, key: str = ""
) -> ContactResponse:
    """The response that a measure stands for.

    Raises
    ------
    InputError
        Loads that change with the design, an indenter that passes by, a part that is not held,
        voxels under the indenter that the design could leave empty.
    """
    case = measure.load_case
    if case.strains or any(isinstance(load, BodyForce) for load in case.loads):
        raise InputError(
            f"Load case '{case.name}' has a body force or a free strain, which would change with "
            "the design; leave it out of the contact peak."
        )
    reach = np.finfo(float).max if measure.depth_mm is None else measure.depth_mm
    job = ContactJob(part, case, measure.indenter, reach, DEFAULT, 1e-6, SILENT)
    if job.cautions:
        raise InputError(f"Contact with '{measure.indenter.name}': {job.cautions[0]}")
    surface, c = job.surface, unknowns.choice
    under = np.zeros(part.grid.node_shape[::-1], dtype=bool)
    under.ravel()[surface.flat[surface.gap <= reach]] = True
    open_ = under & touched_nodes(c.domain & ~c.solid)
    if unknowns.void is not None and open_.any():
        raise InputError(
            f"Voxels at {int(open_.sum())} nodes under the indenter '{measure.indenter.name}' may "
            "become empty, and what is empty carries no pressure; put them under 'solid' or "
            "'protected'."
        )
    return ContactResponse(
        surface=surface,
        acts=job.acts,
        depth=measure.depth_mm,
        force=measure.force_N,
        first=0.1 * min(part.grid.spacing),
        exponent=measure.exponent,
        key=key,
    )
