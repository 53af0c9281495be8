"""Harmonic response: closed forms of one mass on a spring, static limit, direct solution."""

import numpy as np
import pytest
import scipy.sparse
import scipy.sparse.linalg

from voxelmat.errors import InputError
from voxelmat.fea.assemble import moduli
from voxelmat.fea.damping import palette_loss
from voxelmat.fea.harmonic import harmonic
from voxelmat.fea.mass import Mass, densities
from voxelmat.fea.modal import modes
from voxelmat.fea.static import solve
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.loadcase import Force, GroundSpring, LoadCase, Support
from voxelmat.model.material import Constant, Material
from voxelmat.model.part import Part
from voxelmat.model.region import Box, FaceRegion

TOP, BASE = FaceRegion(name="top", side="z+"), FaceRegion(name="base", side="z-")
EVERYTHING = Box(name="everything", low=(-1.0, -1.0, -1.0), high=(99.0, 99.0, 99.0))
UPRIGHT = (
    Support(region=EVERYTHING, displacement=(0.0, 0.0, None)),
    Support(region=BASE, displacement=(None, None, 0.0)),
)


def resin(name, E, nu, density, loss=None, kind="rigid"):
    """An invented material."""
    return Material(
        name=name,
        kind=kind,
        E=Constant(value=E, unit="MPa"),
        nu=Constant(value=nu),
        density=Constant(value=density),
        loss_factor=None if loss is None else Constant(value=loss, source="an invented test"),
    )


def column(loss=0.2):
    """A heavy stiff block, 16 mm^3, on 2 mm of a weightless soft layer of 4 mm^2; nu 0."""
    labels = np.ones((2, 2, 6), np.uint16)
    labels[:, :, 2:] = 2
    return Part(
        grid=VoxelGrid(shape=(2, 2, 6), spacing=(1.0, 1.0, 1.0), origin=(0.0, 0.0, 0.0)),
        resins=(resin("soft", 1.0, 0.0, 1e-15, loss), resin("hard", 1e6, 0.0, 1e-8, loss)),
        palette=(EMPTY, Blend.pure("soft"), Blend.pure("hard")),
        labels=labels,
    )


SPRING, MASS = 1.0 * 4 / 2, 1e-8 * 16
NATURAL = np.sqrt(SPRING / MASS) / (2 * np.pi)
RATIO = np.array([0.01, 0.3, 0.9, 1.0, 1.1, 1.4142135, 3.0, 6.0])


@pytest.mark.parametrize("damping", ["viscous", "structural"])
def test_transmissibility_of_one_mass_on_a_spring(damping):
    # T = sqrt[(1 + (2 z r)^2) / ((1 - r^2)^2 + (2 z r)^2)] (common textbook formula); with a loss
    # angle instead of a dashpot 2 z r becomes the loss factor.
    loss = 0.2
    found = modes(column(loss), UPRIGHT, count=2)
    assert found.frequencies[0] == pytest.approx(NATURAL, rel=1e-5)
    answer = harmonic(found, NATURAL * RATIO, base=(0.0, 0.0, 2.0), damping=damping)
    assert answer.loss_factors[0] == pytest.approx(loss, rel=1e-6)
    z = loss * RATIO if damping == "viscous" else np.full(len(RATIO), loss)
    T = np.sqrt((1 + z**2) / ((1 - RATIO**2) ** 2 + z**2))
    decibels = answer.transmissibility(TOP, direction="z")
    np.testing.assert_allclose(decibels, 20 * np.log10(T), atol=2e-3)
    np.testing.assert_allclose(answer.amplitude(TOP, "z"), 2 * T, rtol=3e-4)
    np.testing.assert_allclose(answer.transmissibility(TOP, BASE, direction="z"), decibels)


def test_force_and_phase_of_one_mass_on_a_spring():
    # u = F / (k (1 + i d) - m w^2) (formula)
    answer = harmonic(
        modes(column(0.1), UPRIGHT, count=1),
        NATURAL * RATIO,
        loads=[Force(region=TOP, vector=(0.0, 0.0, 3.0))],
    )
    u = 3.0 / (SPRING * (1 + 0.1j - RATIO**2))
    np.testing.assert_allclose(answer.over(TOP)[:, 2], u, rtol=3e-4)
    np.testing.assert_allclose(answer.phase(TOP, "z"), np.degrees(np.angle(u)), atol=0.01)
    assert answer.phase(TOP, "z")[3] == pytest.approx(-90.0, abs=0.01)


def bar(loss_soft=0.5, loss_stiff=0.02):
    """Two materials and a blend of them, no symmetry."""
    labels = np.random.default_rng(3).integers(1, 4, (7, 2, 3)).astype(np.uint16)
    return Part(
        grid=VoxelGrid(shape=(7, 2, 3), spacing=(1.0, 1.2, 0.9), origin=(0.0, 0.0, 0.0)),
        resins=(
            resin("soft", 30.0, 0.4, 1e-9, loss_soft),
            resin("stiff", 300.0, 0.3, 2e-9, loss_stiff),
        ),
        palette=(EMPTY, Blend.pure("soft"), Blend.pure("stiff"), Blend.of({"soft": 1, "stiff": 2})),
        labels=labels,
    )


NEAR, FAR = FaceRegion(name="near", side="x-"), FaceRegion(name="far", side="x+")
PUSH = Force(region=FAR, vector=(0.3, 0.1, 1.0))


def test_static_correction_makes_low_frequencies_exact():
    part = bar(0.1, 0.1)
    static = solve(part, LoadCase(name="a", supports=(Support(region=NEAR),), loads=(PUSH,)))
    few = modes(part, [Support(region=NEAR)], count=1)
    answer = harmonic(few, [0.0], loads=[PUSH])
    expected = static.displacement / (1 + 0.1j)
    np.testing.assert_allclose(answer.field(0), expected, atol=1e-6 * np.abs(expected).max())
    # One mode alone would miss the stretching of the bar by far.
    assert np.abs(answer.rest).max() > 1e-2 * np.abs(expected).max()


def assembled_complex(part, supports, assembled):
    """Complex stiffness and consistent mass as sparse matrices, and which unknowns are free."""
    lam, mu = moduli(part)
    loss = [table[part.labels.T] for table in palette_loss(part)]
    spacing = part.grid.spacing
    step = 1e-6
    K = assembled(lam, mu, spacing, "icmb")
    more = assembled(lam + step * loss[0], mu + step * loss[1], spacing, "icmb")
    M = Mass(densities(part), spacing, "consistent")
    shape = (3, *(n + 1 for n in lam.shape))
    columns = []
    for n in range(np.prod(shape)):
        u, y = np.zeros(shape), np.empty(shape)
        u.ravel()[n] = 1.0
        M.apply(u, y)
        columns.append(y.ravel().copy())
    held = np.zeros(shape, bool)
    for support in supports:
        held |= support.region.nodes(part).T
    return K + 1j * (more - K) / step, scipy.sparse.csr_matrix(np.array(columns)), ~held.ravel()


def test_equals_a_direct_solution_of_the_damped_part(assembled):
    # (K (1 + i d) - w^2 M) u = w^2 M e solved directly, with the loss of every voxel: the modal
    # strain energy method leaves out the coupling of modes by damping, of second order in d.
    part, supports = bar(0.05, 0.01), [Support(region=NEAR)]
    found = modes(part, supports, count=12, tol=1e-7)
    f = found.frequencies[0] * np.array([0.2, 0.7, 1.0, 1.8])
    answer = harmonic(found, f, base=(1.0, 0.5, -1.0))
    K, M, free = assembled_complex(part, supports, assembled)
    unit = np.repeat([1.0, 0.5, -1.0], len(free) // 3)
    for n, frequency in enumerate(f):
        w2 = (2 * np.pi * frequency) ** 2
        A = (K - w2 * M)[free][:, free].tocsc()
        u = unit.astype(complex)
        u[free] += scipy.sparse.linalg.spsolve(A, w2 * (M @ unit)[free])
        expected = u.reshape(3, *part.grid.node_shape[::-1]).T
        expected = np.transpose(expected, (0, 1, 2, 3))
        off = np.abs(answer.field(n) - expected).max()
        assert off < 0.02 * np.abs(expected).max()


def test_a_free_part_moves_as_a_rigid_body_at_low_frequency():
    # a = F / m at the centre of mass (Newton): pushed along its axis, u = -F / (m w^2)
    part = Part.uniform(bar().grid, resin("a", 3000.0, 0.3, 1e-9, 0.05))
    found = modes(part, count=3)
    f = found.frequencies[0] / 1000
    load = Force(region=FAR, vector=(1.0, 0.0, 0.0))
    answer = harmonic(found, [f], loads=[load])
    moved = answer.over(EVERYTHING)[0]
    assert moved[0] == pytest.approx(-1.0 / (part.mass * (2 * np.pi * f) ** 2), rel=1e-4)
    assert abs(moved[1]) < 1e-6 * abs(moved[0])


def test_rest_of_a_free_part_is_its_relaxed_shape():
    # One mode and the rest against all modes of the part, far below the first.
    part = bar(0.1, 0.1)
    corner = Force(
        region=Box(name="corner", low=(-1, -1, -1), high=(0.1, 0.1, 0.1)), vector=(1.0, 2.0, -3.0)
    )
    few, every = (modes(part, count=n, tol=1e-8) for n in (1, 3 * 8 * 3 * 4 - 6))
    f = few.frequencies[0] * 0.01
    a, b = (harmonic(m, [f], loads=[corner]) for m in (few, every))
    elastic = [
        h.field(0) - np.tensordot(h.rigid_coordinates[0], h.modal.rigid_shapes, 1) for h in (a, b)
    ]
    size = np.abs(elastic[1]).max()
    np.testing.assert_allclose(elastic[0], elastic[1], atol=2e-4 * size)
    assert np.abs(b.rest).max() < 1e-6 * size


@pytest.mark.parametrize("free", [False, True])
def test_few_modes_with_the_rest_equal_many_modes(free):
    part = bar(0.1, 0.1)
    supports = [] if free else [Support(region=NEAR)]
    few, many = (modes(part, supports, count=n, tol=1e-8) for n in (6, 60))
    f = few.frequencies[0] * np.array([0.1, 0.5, 0.9])
    a, b = (harmonic(m, f, loads=[PUSH]).over(FAR) for m in (few, many))
    np.testing.assert_allclose(a, b, atol=0.01 * np.abs(b).max())


@pytest.mark.parametrize("stiffness", [1e-4, 1e-2])
def test_a_soft_spring_does_not_drown_the_rest(stiffness):
    # The bounce on the spring moves thousands of times further than the bar is stretched.
    part = bar(0.1, 0.1)
    spring = GroundSpring(region=NEAR, stiffness=(stiffness, 0.0, 0.0))
    few, many = (modes(part, springs=[spring], count=n, tol=1e-8) for n in (3, 80))
    stretch = Force(region=FAR, vector=(1.0, 0.0, 0.0))
    a, b = (harmonic(m, [few.frequencies[1] * 0.05], loads=[stretch]) for m in (few, many))
    own = [h.over(FAR)[0, 0] - h.over(NEAR)[0, 0] for h in (a, b)]
    assert own[0] == pytest.approx(own[1], rel=5e-3)


def test_loss_factor_of_a_mode_lies_between_those_of_its_materials():
    found = modes(bar(0.5, 0.02), [Support(region=NEAR)], count=4)
    losses = harmonic(found, [1.0], base=(0.0, 0.0, 1.0)).loss_factors
    assert np.all((losses > 0.02) & (losses < 0.5))
    same = modes(bar(0.07, 0.07), [Support(region=NEAR)], count=4)
    # One loss factor everywhere, blends included, is that of every mode.
    losses = harmonic(same, [1.0], base=(0.0, 0.0, 1.0)).loss_factors
    np.testing.assert_allclose(losses, 0.07, rtol=1e-7)


def test_springs_to_ground_store_energy_and_lose_none():
    # A spring in series with a stiff block: the loss factor is d U_block / (U_block + U_spring)
    part = Part.uniform(column().grid, resin("hard", 1e4, 0.0, 1e-8, 0.3))
    spring = GroundSpring(region=BASE, stiffness=(0.0, 0.0, 0.5))
    found = modes(part, UPRIGHT[:1], springs=[spring], count=1)
    answer = harmonic(found, found.frequencies, base=(0.0, 0.0, 1.0))
    # A third of the compliance of the block, L / (E A), takes part under its own inertia.
    assert answer.loss_factors[0] == pytest.approx(0.3 * 0.5 * 6 / (1e4 * 4) / 3, rel=0.01)
    given = harmonic(found, found.frequencies, base=(0.0, 0.0, 1.0), loss_factor=0.1)
    # |T| = sqrt(1 + d^2) / d at resonance (formula)
    assert given.amplitude(TOP, "z")[0] == pytest.approx(np.sqrt(1.01) / 0.1, rel=1e-3)


def test_cautions():
    found = modes(bar(), [Support(region=NEAR)], count=2)
    quiet = harmonic(found, [1.0], base=(1.0, 0.0, 0.0))
    assert quiet.cautions == ()
    high = harmonic(found, [found.frequencies[-1]], base=(1.0, 0.0, 0.0))
    assert any("ask for more modes" in c for c in high.cautions)
    vague = resin("a", 10.0, 0.45, 1e-9, 0.3, kind="elastomer")
    vague = vague.replace(loss_factor=Constant(value=0.3))
    part = Part.uniform(bar().grid, vague)
    notes = harmonic(modes(part, [Support(region=NEAR)], count=2), [1.0], base=(1.0, 0, 0)).cautions
    assert any("indicative" in c for c in notes)
    assert any("elastomer" in c for c in notes)


def test_bad_input():
    part = bar()
    found = modes(part, [Support(region=NEAR)], count=2)
    base = (1.0, 0.0, 0.0)
    with pytest.raises(InputError, match="either a base"):
        harmonic(found, [1.0])
    with pytest.raises(InputError, match="either a base"):
        harmonic(found, [1.0], base=base, loads=[PUSH])
    with pytest.raises(InputError, match="not 0"):
        harmonic(found, [1.0], base=(0.0, 0.0, 0.0))
    with pytest.raises(InputError, match="structural, viscous"):
        harmonic(found, [1.0], base=base, damping="none")
    with pytest.raises(InputError, match="above 0"):
        harmonic(found, [1.0], base=base, loss_factor=0.0)
    for frequencies in ([], [-1.0], [np.nan]):
        with pytest.raises(InputError, match="Frequencies"):
            harmonic(found, frequencies, base=base)
    spring = GroundSpring(region=FAR, stiffness=(1.0, 0.0, 0.0))
    with pytest.raises(InputError, match="no force"):
        harmonic(found, [1.0], loads=[spring])
    free = modes(part, count=2)
    with pytest.raises(InputError, match="runs away"):
        harmonic(free, [0.0], loads=[PUSH])
    with pytest.raises(InputError, match="Nothing joins"):
        harmonic(free, [1.0], base=base)
    answer = harmonic(found, [1.0], base=base)
    with pytest.raises(InputError, match="does not move"):
        answer.transmissibility(FAR, direction="y")
    with pytest.raises(InputError, match="x, y or z"):
        answer.amplitude(FAR, "w")
    with pytest.raises(InputError, match="no node"):
        answer.over(Box(name="out", low=(50.0, 50.0, 50.0), high=(51.0, 51.0, 51.0)))


def test_a_material_without_loss_factor_is_named():
    part = Part.uniform(bar().grid, resin("quiet", 10.0, 0.3, 1e-9))
    found = modes(part, [Support(region=NEAR)], count=2)
    with pytest.raises(InputError, match="no loss factor: quiet"):
        harmonic(found, [1.0], base=(1.0, 0.0, 0.0))
    assert harmonic(found, [1.0], base=(1.0, 0.0, 0.0), loss_factor=0.1).loss_factors[0] == 0.1


@pytest.mark.parametrize("value", [0.0, 12.0])
def test_impossible_loss_factor(value):
    with pytest.raises(InputError, match="loss factor"):
        resin("a", 1.0, 0.3, 1e-9, value)


def test_loss_of_a_blend_lies_between():
    lam, mu = palette_loss(bar(0.5, 0.02))
    part = bar(0.5, 0.02)
    stored = part.palette_lame()[1]
    d = mu[1:] / stored[1:]
    assert d[0] == pytest.approx(0.5, rel=1e-6)
    assert d[1] == pytest.approx(0.02, rel=1e-6)
    assert 0.02 < d[2] < 0.5
    assert lam[0] == mu[0] == 0.0
