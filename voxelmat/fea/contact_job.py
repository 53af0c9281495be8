"""A part, its load case and an indenter made ready, and the found contact made an answer."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.fea.active_set import Contact, Pressed
from voxelmat.fea.assemble import Assembled, assemble, moduli
from voxelmat.fea.cautions import record_cautions
from voxelmat.fea.contact_surface import TouchSurface, touch_surface
from voxelmat.fea.held import check_held
from voxelmat.fea.operator import touched_nodes
from voxelmat.kernels.threads import threads
from voxelmat.model.contactresult import ContactResult
from voxelmat.model.indenter import Indenter
from voxelmat.model.loadcase import LoadCase
from voxelmat.model.part import Part
from voxelmat.model.result import Extreme
from voxelmat.monitor import Monitor
from voxelmat.provenance import Provenance, utc_now

__all__ = ["ContactJob"]

Double = NDArray[np.float64]
Vector = tuple[float, float, float]

# Cosine of the steepest slope (30 degrees) that the theory is used for without a caution; ours.
_SLOPE = 0.866
# Fewer nodes than this across a contact say little about pressures.
_FEW = 12


class ContactJob:
    """A part, a load case and an indenter made ready.

    Parameters
    ----------
    part, case, indenter, element, tol, monitor
        As for `voxelmat.fea.contact.contact`.
    reach : float
        Largest depth that will be asked for, mm; what lies within must be held.

    Attributes
    ----------
    pressed : Pressed
        Finds the contact at a depth.
    cautions : list of str
    """

    def __init__(
        self,
        part: Part,
        case: LoadCase,
        indenter: Indenter,
        reach: float,
        element: str,
        tol: float,
        monitor: Monitor,
    ) -> None:
        self.started = utc_now()
        monitor.report("assembling loads", done=0, total=0)
        self.part, self.case, self.indenter, self.element = part, case, indenter, element
        surface = touch_surface(part, indenter)
        lam, mu = moduli(part)
        acts = assemble(part, case, everything=True)
        if acts.plates is not None:
            raise InputError(
                f"Load case '{case.name}' has rigid plates, which contact cannot take into account "
                f"yet. Leave them out, or use the indenter in place of the plate."
            )
        anchored = acts.held if acts.springs is None else acts.held | (acts.springs > 0)
        loaded = np.any(acts.force != 0, axis=0)
        # A loose piece that the indenter does not reach is none of its business.
        loaded.ravel()[surface.flat[surface.gap <= reach]] = True
        keep, self.cautions = check_held(mu > 0, anchored, loaded, part.grid)
        touched = touched_nodes(keep)
        self.acts: Assembled = replace(acts, force=acts.force * touched, held=acts.held & touched)
        springs = None if acts.springs is None else acts.springs * touched
        lam, mu = lam * keep, mu * keep
        force = self.acts.force
        if acts.free is not None:
            force = force + acts.free.forces(lam, mu, part.grid.spacing, element)
        self.pressed = Pressed(
            lam,
            mu,
            part.grid.spacing,
            self.acts.held,
            acts.prescribed,
            force,
            springs,
            acts.beds,
            surface,
            element=element,
            tol=tol,
            monitor=monitor,
        )

    @property
    def surface(self) -> TouchSurface:
        """What can be touched."""
        return self.pressed.surface

    def answer(self, found: Contact) -> ContactResult:
        """The public answer."""
        s = self.surface
        pressure = found.push / s.area
        mean = s.round_about(found.push) / s.round_about(s.area)
        peak = int(np.argmax(mean))
        place = [float(c[n]) for c, n in zip(self.part.grid.nodes(), s.node[peak], strict=True)]
        reactions, applied, balance = self._balance(found)
        return ContactResult(
            part=self.part,
            load_case=self.case,
            indenter=self.indenter,
            depth=found.depth,
            touch=s.touch,
            force=found.force,
            tangent=found.tangent,
            node=s.node,
            nodal_force=found.push,
            gap=found.gap,
            area=s.area,
            true_area=s.true_area,
            pressure=pressure,
            peak_pressure=Extreme(value=float(mean[peak]), place_mm=(place[0], place[1], place[2])),
            displacement=found.u.T,
            reactions=reactions,
            applied=applied,
            balance=balance,
            changes=found.changes,
            iterations=found.iterations,
            residual=found.residual,
            element=self.element,
            cautions=(*self.cautions, *self._notes(found)),
            provenance=Provenance(
                inputs={"part": self.part.digest},
                threads=int(threads()),
                started_utc=self.started,
                finished_utc=utc_now(),
            ),
        )

    def _balance(self, found: Contact) -> tuple[dict[str, Vector], Vector, float]:
        """Force of each support and spring on the part; applied; what is missing."""
        out: dict[str, Vector] = {}
        for n, name in enumerate(self.acts.supports):
            mine = self.acts.held & (self.acts.owner == n)
            out[name] = _vector(np.array([found.pull[d][mine[d]].sum() for d in range(3)]))
        for name, node, stiffness in self.acts.ground:
            moved = found.u.reshape(3, -1)[:, node].T
            out[name] = _vector(-(stiffness * moved).sum(axis=0))
        for bed in self.acts.beds:
            out[bed.name] = _vector(bed.push(found.u).sum(axis=0))
        applied = self.acts.force.reshape(3, -1).sum(axis=1)
        pushed = np.zeros(3)
        pushed[self.surface.axis] = self.surface.sign * found.force
        every = [*out.values(), _vector(applied), _vector(pushed)]
        size = max(float(np.linalg.norm(v)) for v in every)
        total = np.sum(every, axis=0)
        return out, _vector(applied), float(np.linalg.norm(total) / max(size, 1e-300))

    def _notes(self, found: Contact) -> list[str]:
        notes = record_cautions(self.part, self.case)
        count = int(found.active.sum())
        if 0 < count < _FEW:
            notes.append(
                f"Only {count} nodes touch the indenter: the force is a rough guide. Use smaller "
                f"voxels, so that the contact is at least 4 voxels wide."
            )
        lean = float(self.surface.lean[found.active].min(initial=1.0))
        if lean < _SLOPE:
            notes.append(
                f"The indenter slopes by up to {np.degrees(np.arccos(lean)):.0f} degrees where it "
                f"touches; forces are taken along the push, which is good for small slopes only."
            )
        grid, axis = self.part.grid, self.surface.axis
        if found.depth > 0.1 * (grid.upper[axis] - grid.origin[axis]):
            notes.append(
                f"The indenter goes {found.depth:g} mm deep, over a tenth of the part: too far for "
                f"a linear answer, which is a rough guide here."
            )
        return notes


def _vector(v: Double) -> Vector:
    return float(v[0]), float(v[1]), float(v[2])
