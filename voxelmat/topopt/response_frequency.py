"""Lowest natural frequencies of a design as one smooth number, repeated ones included.

K phi = t M phi gives t_1 <= t_2 <= ... The response is f = sqrt(J) / (2 pi) with
J = (sum_i t_i^-P)^(-1/P) over the lowest `count` modes. J is a symmetric function of the
eigenvalues, so its gradient sum_i dJ/dt_i phi_i^T (dK - t_i dM) phi_i does not depend on which
vectors of a repeated frequency the solver returns, and modes may change places without being
tracked. J never exceeds t_1 and lies below it by a factor of at most count^(1/P): f is a safe
lower bound of the lowest frequency. What is left is a set of equal frequencies that goes on
beyond the last mode: its weight is (t_1 / t_count)^(P + 1), so ask for a few modes more than are
likely to coincide.

Mass: a half-empty voxel weighs rho m, but below rho = 0.1 the share falls as 6e5 rho^6 - 5e6 rho^7
(value and slope go on smoothly), since stiffness falls as rho^p there and near-empty voxels would
flap on their own (J. Du & N. Olhoff, Struct. Multidisc. Optim. 34 (2007) 91, from memory). An
empty voxel keeps the share of the mass that it keeps of the stiffest resin's shear modulus.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import ConvergenceError, InputError
from voxelmat.fea.eigen import Eigenpairs, Problem, extreme_pairs
from voxelmat.fea.mass import Mass, densities
from voxelmat.fea.modal import anchors
from voxelmat.fea.operator import touched_nodes
from voxelmat.fea.packed import Apply, Packed
from voxelmat.fea.rigid import check_one_body, rigid_fields, rigid_motions
from voxelmat.fea.scalar_element import modal_factors
from voxelmat.fea.scalar_forms import scalar_forms
from voxelmat.model.measure_physics import Frequency
from voxelmat.model.part import Part
from voxelmat.topopt.physics import Physics
from voxelmat.topopt.unknowns import Fields, Unknowns

__all__ = ["FrequencyResponse", "frequency_response", "mass_share"]

Array = NDArray[np.float64]

#: Density below which the mass falls faster than the volume.
_THIN = 0.1
# A residual above this is no mode.
_NO_ANSWER = 3e-2
_GUARD = 3


def mass_share(rho: Array) -> tuple[Array, Array]:
    """Share of the solid's mass of a partly solid voxel, and its slope."""
    low = rho < _THIN
    share = np.where(low, 6e5 * rho**6 - 5e6 * rho**7, rho)
    return share, np.where(low, 3.6e6 * rho**5 - 3.5e7 * rho**6, 1.0)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class FrequencyResponse:
    """Lower bound of the lowest natural frequency, Hz.

    Attributes
    ----------
    held : ndarray of bool, shape (3, nz+1, ny+1, nx+1)
        Unknowns that stay at 0.
    springs : ndarray of float64 or None, shape of `held`
        To ground, N/mm.
    kept : ndarray of float64, shape (nz, ny, nx)
        Density of voxels that are not designed, tonne/mm^3.
    fill : ndarray of float64, shape of `kept`
        Filled fraction of designed voxels.
    density : ndarray, shape (K,)
        Of the resins, tonne/mm^3.
    floor : float
        Share of the mass that empty voxels keep.
    carried : ndarray of float64 or None, shape (nz+1, ny+1, nx+1)
        Mass at nodes that does not depend on the design, tonne.
    count : int
        Modes in the sum.
    exponent : float
        P.
    key : str
        Tells it from other responses.
    """

    held: NDArray[np.bool_]
    springs: Array | None
    kept: Array
    fill: Array
    density: Array
    floor: float
    carried: Array | None = None
    count: int = 4
    exponent: float = 16.0
    key: str = ""
    name: str = "lowest frequency"
    unit: str = "Hz"

    def value(self, physics: Physics) -> tuple[float, dict[str, Array]]:
        """Value, and derivatives by ``lam``, ``mu``, ``rho`` and ``w``."""
        f = physics.fields
        packed, pairs, scale = self._found(physics)
        t = pairs.values[: self.count]
        P = self.exponent
        J = float(t[0] * np.sum((t[0] / t) ** P) ** (-1.0 / P))
        by_t = (J / t) ** (P + 1.0)
        lam, mu, by_mass = (np.zeros(f.lam.shape) for _ in range(3))
        factors = modal_factors(physics.spacing, "consistent")[1]
        for weight, one, row in zip(by_t, t, pairs.vectors, strict=False):
            phi = packed.field(row)
            forms = physics.by_stiffness(phi, phi)
            lam += weight * forms["lam"] / scale[0]
            mu += weight * forms["mu"] / scale[0]
            by_mass -= weight * one / scale[1] * scalar_forms(phi, phi, factors)
        omega_squared = J * scale[0] / scale[1]
        frequency = float(np.sqrt(omega_squared)) / (2.0 * np.pi)
        chain = 0.5 * frequency / J
        share, slope = mass_share(f.rho)
        mixed = np.tensordot(self.density, f.w, 1)
        by_mass *= chain * self.fill
        return frequency, {
            "lam": chain * lam,
            "mu": chain * mu,
            "rho": by_mass * mixed * slope * (1.0 - self.floor),
            "w": np.multiply.outer(self.density, by_mass * self._share(share)),
        }

    def report(self, value: float) -> float:
        """As it is."""
        return value

    def truth(self, physics: Physics) -> float:
        """The lowest frequency itself."""
        _, pairs, scale = self._found(physics)
        return float(np.sqrt(pairs.values[0] * scale[0] / scale[1])) / (2.0 * np.pi)

    def _found(self, physics: Physics) -> tuple[Packed, Eigenpairs, tuple[float, float]]:
        """Lowest pairs of the present design, as `_modes` gives them."""
        packed, pairs, scale = physics.once(
            f"modes {self.key}", lambda: self._modes(physics, physics.fields)
        )
        return packed, pairs, scale

    def _share(self, share: Array) -> Array:
        return self.floor + (1.0 - self.floor) * share

    def _density(self, f: Fields) -> Array:
        """Density of every voxel, tonne/mm^3."""
        share = self._share(mass_share(f.rho)[0])
        return self.kept + self.fill * share * np.tensordot(self.density, f.w, 1)

    def _modes(self, physics: Physics, f: Fields) -> tuple[Packed, Eigenpairs, tuple[float, float]]:
        """Lowest pairs in units of the stiffness and mass that are returned beside them."""
        spacing = physics.spacing
        weight = Mass(self._density(f), spacing, "consistent")
        packed = Packed(
            f.lam, f.mu, spacing, self.held, self.springs, physics.element, monitor=physics.monitor
        )
        touched = touched_nodes(f.mu > 0)

        def inertia(u: Array, y: Array) -> None:
            weight.apply(u, y)
            if self.carried is not None:
                y += self.carried * u

        stiff = float(f.mu.max() * np.cbrt(np.prod(spacing)))
        heavy = weight.total / float(touched.sum())
        anchored = self.held if self.springs is None else self.held | (self.springs > 0)
        free, _ = rigid_motions(rigid_fields(touched, spacing), anchored & touched)
        fixed = _orthonormal(packed, inertia, free, heavy)
        problem = Problem(
            A=lambda X: packed.stiffness(X) / stiff,
            B=lambda X: packed.apply(inertia, X) / heavy,
            precondition=lambda X: packed.precondition(X) * stiff,
            size=packed.size,
            largest=False,
            fixed=fixed,
        )
        start = physics.recall(f"modes {self.key}")
        pairs = extreme_pairs(
            problem,
            self.count,
            guard=_GUARD,
            tol=physics.tolerance,
            maxiter=600,
            monitor=physics.monitor,
            stage="finding modes",
            start=None if start is None or start.shape[1] != packed.size else start,
        )
        worst = float(pairs.residuals[: self.count].max(initial=0.0))
        if len(pairs.values) < self.count or not (worst <= _NO_ANSWER and pairs.values[0] > 0):
            raise ConvergenceError(
                f"The {self.count} lowest modes of a design were not found in {pairs.iterations} "
                f"iterations (residual {worst:.2g}). Ask for fewer modes, or raise the stiffness "
                f"that empty voxels keep.",
                pairs.history,
            )
        physics.remember(f"modes {self.key}", pairs.vectors)
        return packed, pairs, (stiff, heavy)


def _orthonormal(packed: Packed, inertia: Apply, fields: Array, heavy: float) -> Array | None:
    """Free rigid motions, orthonormal in the scaled mass."""
    if not len(fields):
        return None
    R = np.stack([packed.pack(field) for field in fields])
    for _ in range(2):  # twice, for orthogonality to the last digit
        gram = R @ packed.apply(inertia, R).T / heavy
        R = np.linalg.solve(np.linalg.cholesky(gram), R)
    return np.asarray(R)


def frequency_response(
    measure: Frequency, part: Part, unknowns: Unknowns, key: str = ""
) -> FrequencyResponse:
    """The response that a measure stands for.

    Raises
    ------
    InputError
        A support that moves, a region without material, loose pieces.
    """
    acts, anchored = anchors(part, measure.supports, measure.springs, "a design's frequency")
    check_one_body(np.ascontiguousarray(part.solid.T), anchored, part.grid)
    c, p = unknowns.choice, unknowns.palette
    if acts.plates is not None or any(bed.leans for bed in acts.beds):
        raise InputError(
            "The frequency of a design takes supports and springs along the axes; leave rigid "
            "plates and foundations on sloping surfaces out."
        )
    carried = None
    if measure.carried_tonne > 0 and measure.carried is not None:
        nodes = measure.carried.nodes(part).T
        if not nodes.any():
            raise InputError(
                f"The mass carried by '{measure.carried.name}' rests on no node of the part; move "
                "or enlarge the region."
            )
        carried = nodes.astype(np.float64) * (measure.carried_tonne / float(nodes.sum()))
    void = unknowns.void
    return FrequencyResponse(
        held=acts.held,
        springs=acts.springs,
        kept=np.where(c.domain, 0.0, densities(part)),
        fill=c.fill,
        density=p.density,
        floor=0.0 if void is None else void.floor_shear / float(p.shear.max()),
        carried=carried,
        count=measure.count,
        exponent=measure.exponent,
        key=key,
    )
