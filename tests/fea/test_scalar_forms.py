"""Forms of a scalar field voxel by voxel against the element matrices."""

import numpy as np
import pytest

from voxelmat.fea.scalar_element import element_matrices, modal_factors
from voxelmat.fea.scalar_forms import scalar_forms

SPACING = (1.0, 0.7, 1.3)


@pytest.mark.parametrize("which", [0, 1])
@pytest.mark.parametrize("components", [0, 3])
def test_forms_are_those_of_the_element_matrices(which, components):
    rng = np.random.default_rng(which)
    shape = (3, 4, 6)
    u, v = rng.standard_normal((2, *([components] if components else []), *shape))
    found = scalar_forms(u, v, modal_factors(SPACING, "consistent")[which])
    A = element_matrices(SPACING, "consistent")[which]
    for k, j, i in np.ndindex(found.shape):
        near = [(..., k + (a >> 2), j + (a >> 1 & 1), i + (a & 1)) for a in range(8)]
        p, q = (np.stack([f[n] for n in near], axis=-1) for f in (u, v))
        slow = np.einsum("...a,ab,...b->...", p, A, q).sum()
        np.testing.assert_allclose(found[k, j, i], slow, rtol=1e-12, atol=1e-13)


def test_of_a_field_with_itself_it_is_never_negative():
    u = np.random.default_rng(3).standard_normal((4, 4, 4))
    assert np.all(scalar_forms(u, u, modal_factors(SPACING, "lumped")[0]) >= 0)
