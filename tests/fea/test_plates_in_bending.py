"""Square plates under uniform pressure against plate theory and its correction for thickness."""

from __future__ import annotations

import numpy as np
import pytest

from voxelmat.fea.system import LinearSystem

N, LAYERS, NU = 40, 4, 0.3


def deflection(side_over_thickness: float, *, clamped: bool) -> float:
    """w D / (q a^4) at the middle of a square plate of side 1; a quarter of it is solved."""
    t = 1.0 / side_over_thickness
    h = 0.5 / N
    lam, mu = NU / ((1 + NU) * (1 - 2 * NU)), 0.5 / (1 + NU)
    shape = (LAYERS, N, N)
    fixed = np.zeros((3, LAYERS + 1, N + 1, N + 1), dtype=bool)
    fixed[0, :, :, 0] = fixed[1, :, 0, :] = True  # planes of symmetry
    if clamped:
        fixed[:, :, :, N] = fixed[:, :, N, :] = True
    else:  # hard simple support: no deflection and no sliding along the edge
        fixed[1:, :, :, N] = True
        fixed[0, :, N, :] = fixed[2, :, N, :] = True
    share = np.ones(N + 1)
    share[[0, -1]] = 0.5
    force = np.zeros(fixed.shape)
    force[2, -1] = -h * h * np.outer(share, share)
    system = LinearSystem(np.full(shape, lam), np.full(shape, mu), (h, h, t / LAYERS), fixed)
    u = system.solve(force, tol=1e-9).u
    stiffness = t**3 / (12 * (1 - NU**2))
    return float(-u[2, LAYERS // 2, 0, 0] * stiffness)


@pytest.mark.parametrize(
    ("ratio", "clamped", "wanted"),
    [
        # B2: three-dimensional values, computed with a separate numpy/scipy code, .5 %; the thin
        # plate has .00406235 simply supported (Navier) and .00126 clamped (from memory).
        (20, False, 0.004103),
        (20, True, 0.001314),
        (10, False, 0.00423),
        (10, True, 0.00148),
    ],
)
def test_square_plate(ratio, clamped, wanted):
    assert deflection(ratio, clamped=clamped) == pytest.approx(wanted, rel=5e-3)


def test_a_thin_plate_is_navier_s():
    # B2, Navier's series for the simply supported plate (textbook formula); at a/t 40 shear adds
    # under 1 %.
    assert deflection(40, clamped=False) == pytest.approx(0.00406235, rel=1e-2)
