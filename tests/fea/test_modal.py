"""Natural frequencies: handbook and benchmark values, rigid motions, symmetry, bad input."""

import os
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
import scipy.linalg
import scipy.ndimage
from hypothesis import given, settings
from hypothesis import strategies as st

from voxelmat.errors import ConvergenceError, InputError
from voxelmat.fea import eigen
from voxelmat.fea.assemble import moduli
from voxelmat.fea.mass import Mass, densities
from voxelmat.fea.modal import modes
from voxelmat.fea.operator import Stiffness
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.loadcase import Foundation, GroundSpring, Support
from voxelmat.model.material import Constant, Material
from voxelmat.model.part import Part
from voxelmat.model.region import Box, FaceRegion

STEEL = Material(  # the invented metal of NAFEMS FV5 and FV52: E 200e9 Pa, nu .3, 8000 kg/m^3
    name="metal",
    kind="bought-in",
    E=Constant(value=200e3),
    nu=Constant(value=0.3),
    density=Constant(value=8e-9),
)
ROOT = Support(region=FaceRegion(name="root", side="x-"))


def block(shape, size, nu=0.3):
    """A block of `size` mm in `shape` voxels."""
    spacing = tuple(s / n for s, n in zip(size, shape, strict=True))
    grid = VoxelGrid(shape=shape, spacing=spacing, origin=(0.0, 0.0, 0.0))
    return Part.uniform(grid, STEEL.replace(nu=Constant(value=nu)))


def plate(n):
    """NAFEMS FV52: 10 x 10 x 1 m, w = 0 along the four bottom edges."""
    part = block((10 * n, 10 * n, n), (10e3, 10e3, 1e3))
    far, e = 10e3, 1.0
    edges = [
        ((-e, -e, -e), (e, far + e, e)),
        ((far - e, -e, -e), (far + e, far + e, e)),
        ((-e, -e, -e), (far + e, e, e)),
        ((-e, far - e, -e), (far + e, far + e, e)),
    ]
    return part, tuple(
        Support(region=Box(name=f"edge {m}", low=a, high=b), displacement=(None, None, 0.0))
        for m, (a, b) in enumerate(edges)
    )


@pytest.mark.parametrize(
    ("n", "off"), [(4, 0.002), pytest.param(8, 0.0006, marks=pytest.mark.slow)]
)
def test_in_plane_modes_of_a_thick_plate(n, off):
    # NAFEMS FV52 (checks E2): in-plane modes at 193.59 and 206.19 Hz, the latter twice; .2 %.
    part, supports = plate(n)
    found = modes(part, supports, count=10)
    assert found.rigid == ("translation along x", "translation along y", "rotation about z")
    # In-plane: next to no motion along z.
    squares = (found.shapes**2).sum(axis=(1, 2, 3))
    flat = squares[:, 2] < 0.01 * squares.sum(axis=1)
    in_plane = found.frequencies[flat][:3]
    np.testing.assert_allclose(in_plane, [193.59, 206.19, 206.19], rtol=off)


def beam(n):
    """NAFEMS FV5: 10 x 2 x 2 m; families of modes that the supports of a line beam all allow.

    A line beam turns about its ends without moving along itself; a solid end face that is held
    along x does not turn. So bending, twisting and stretching are found under supports of
    their own, which are those of the line beam for that family.
    """
    part = block((5 * n, n, n), (10e3, 2e3, 2e3))
    near, far = FaceRegion(name="near", side="x-"), FaceRegion(name="far", side="x+")
    axis = Box(name="axis", low=(9999.0, 999.0, 999.0), high=(10001.0, 1001.0, 1001.0))
    across = (None, 0.0, 0.0)
    bend = (Support(region=near, displacement=across), Support(region=far, displacement=across))
    twist = (Support(region=near, displacement=across), Support(region=axis, displacement=across))
    pull = (Support(region=near, displacement=(0.0, None, None)),)
    bending = modes(part, bend, count=8)
    turning = modes(part, twist, count=9)
    pulling = modes(part, pull, count=5)
    # A bending mode moves the middle line across, a twisting one does not; stretching moves mass
    # along x.
    line = np.abs(bending.shapes[:, :, n // 2, n // 2, 1:]).max(axis=(1, 2))
    bent = bending.frequencies[line > 0.2 * np.abs(bending.shapes).max(axis=(1, 2, 3, 4))]
    still = np.abs(turning.shapes[:, :, n // 2, n // 2]).max(axis=(1, 2))
    turned = turning.frequencies[still < 0.05 * np.abs(turning.shapes).max(axis=(1, 2, 3, 4))]
    pulled = pulling.frequencies[pulling.effective_share[:, 0] > 0.5]
    return np.array([bent[0], bent[1], turned[0], pulled[0], bent[2], bent[3], turned[1], bent[4]])


def test_deep_beam():
    # NAFEMS FV5 (checks E3): 42.65 x2, 71.20, 125.00, 148.15 x2, 213.61, 283.47 Hz, of a beam
    # theory with shear. Solid end faces held across are a little stiffer than its pins.
    expected = np.array([42.65, 42.65, 71.20, 125.00, 148.15, 148.15, 213.61, 283.47])
    coarse, fine = beam(4), beam(8)
    better = fine + (fine - coarse) / 3  # second order in the size of the voxels
    off = np.abs(np.array([coarse, fine]) / expected - 1)
    assert np.all(off[1] < np.maximum(off[0] / 2, 0.001))
    np.testing.assert_allclose(fine, expected, rtol=0.014)
    np.testing.assert_allclose(better, expected, rtol=0.006)


# Roots bL of a cantilever and of a free beam (checks E4, formula).
CLAMPED = np.array([1.875104, 4.694091])
FREE = np.array([4.730041, 7.853205])
LENGTH, WIDTH = 60.0, 1.0


def theory(roots):
    """Euler-Bernoulli: f = (bL)^2 sqrt(E I / (rho A)) / (2 pi L^2), Hz, each twice."""
    speed = np.sqrt(200e3 * WIDTH**2 / 12 / 8e-9)
    return np.repeat(roots**2 * speed / LENGTH**2 / (2 * np.pi), 2)


@pytest.mark.parametrize("mass", ["consistent", "lumped"])
def test_slender_cantilever_and_free_beam(mass):
    part = block((60, 2, 2), (LENGTH, WIDTH, WIDTH), nu=0.0)
    found = modes(part, [ROOT], count=4, mass=mass)
    np.testing.assert_allclose(found.frequencies, theory(CLAMPED), rtol=0.003)
    assert found.rigid == ()
    free = modes(part, count=4, mass=mass)
    np.testing.assert_allclose(free.frequencies, theory(FREE), rtol=0.006)
    assert len(free.rigid) == 6
    assert free.residuals.max() <= 1e-5


def matrices(part):
    """K and M of a small free part as dense matrices, on nodes that touch material."""
    lam, mu = moduli(part)
    K, M = Stiffness(lam, mu, part.grid.spacing), Mass(densities(part), part.grid.spacing, "lumped")
    index = np.flatnonzero(np.broadcast_to(M.nodal > 0, K.shape))
    out = []
    for product in (K.apply, M.apply):
        A = np.empty((len(index), len(index)))
        for n, at in enumerate(index):
            u, y = np.zeros(K.shape), np.empty(K.shape)
            u.ravel()[at] = 1.0
            product(u, y)
            A[:, n] = y.ravel()[index]
        out.append(A)
    return out


@pytest.fixture(scope="module")
def lump():
    """Two invented materials 200 times apart in stiffness, no symmetry."""
    rng = np.random.default_rng(0)
    stiff = STEEL.replace(name="stiff", E=Constant(value=1000.0), density=Constant(value=1.2e-9))
    soft = STEEL.replace(
        name="soft", E=Constant(value=5.0), nu=Constant(value=0.45), density=Constant(value=1e-9)
    )
    grid = VoxelGrid(shape=(6, 4, 5), spacing=(1.0, 0.8, 1.2), origin=(0.0, 0.0, 0.0))
    return Part(
        grid=grid,
        resins=(stiff, soft),
        palette=(EMPTY, Blend.pure("stiff"), Blend.pure("soft")),
        labels=rng.integers(1, 3, grid.shape).astype(np.uint16),
    )


@pytest.mark.parametrize("dense", [0, 2000])
def test_equals_dense_eigenvalues(lump, dense, monkeypatch):
    # scipy.linalg.eigh on the same matrices
    monkeypatch.setattr(eigen, "_DENSE", dense)
    found = modes(lump, count=5, mass="lumped", tol=1e-7)
    K, M = matrices(lump)
    values = scipy.linalg.eigh(K, M, eigvals_only=True, subset_by_index=(0, 10))
    assert np.abs(values[:6]).max() < 1e-9 * values[6]  # the rigid motions
    np.testing.assert_allclose(found.angular**2, values[6:], rtol=1e-9)


@settings(deadline=None, max_examples=15)
@given(st.integers(0, 10_000), st.floats(0.0, 0.5))
def test_random_parts_equal_dense_eigenvalues_or_are_refused(lump, seed, void):
    rng = np.random.default_rng(seed)
    labels = lump.labels * (rng.random(lump.grid.shape) >= void)
    part = lump.replace(labels=labels)
    pieces = scipy.ndimage.label(labels)[1]
    if pieces > 1:
        with pytest.raises(InputError, match="loose"):
            modes(part, count=3)
        labels = np.where(largest(labels), labels, 0).astype(np.uint16)
        part = lump.replace(labels=labels)
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(eigen, "_DENSE", 0)
        found = modes(part, count=3, mass="lumped", tol=1e-6)
    K, M = matrices(part)
    values = scipy.linalg.eigh(K, M, eigvals_only=True, subset_by_index=(0, 8))
    np.testing.assert_allclose(found.angular**2, values[6:], rtol=1e-8)


def largest(labels):
    """The largest set of voxels joined face to face."""
    found, _ = scipy.ndimage.label(labels)
    return found == 1 + np.argmax(np.bincount(found.ravel())[1:])


def test_shapes_are_orthogonal_and_of_unit_mass(lump, monkeypatch):
    monkeypatch.setattr(eigen, "_DENSE", 0)
    found = modes(lump, count=5, tol=1e-7)
    lam, mu = moduli(lump)
    K = Stiffness(lam, mu, lump.grid.spacing)
    M = Mass(densities(lump), lump.grid.spacing, "consistent")
    every = np.concatenate([found.rigid_shapes, found.shapes])
    fields = [np.ascontiguousarray(s.T) for s in every]
    stiff, heavy = np.empty((11, 11)), np.empty((11, 11))
    for b, u in enumerate(fields):
        y = np.empty_like(u)
        for product, table in ((K.apply, stiff), (M.apply, heavy)):
            product(u, y)
            table[:, b] = [(v * y).sum() for v in fields]
    np.testing.assert_allclose(heavy, np.eye(11), atol=1e-9)
    expected = np.concatenate([np.zeros(6), found.angular**2])
    np.testing.assert_allclose(stiff, np.diag(expected), atol=1e-7 * expected[6])
    # Rigid motions carry no strain at all.
    assert np.abs(stiff[:6]).max() < 1e-9 * expected[6]


def test_all_modes_together_move_all_the_free_mass(grid, resin):
    part = Part.uniform(grid(3, 1, 2), resin())
    found = modes(part, [ROOT], count=3 * 3 * 2 * 3, mass="lumped")
    held = Mass(densities(part), part.grid.spacing, "lumped").nodal[:, :, 0].sum()
    np.testing.assert_allclose(found.effective_mass.sum(axis=0), found.mass - held, rtol=1e-9)
    # A free part does not move as a whole in its elastic modes.
    free = modes(part, count=4)
    assert free.effective_share.max() < 1e-12


def test_turning_the_grid_changes_nothing(lump, monkeypatch):
    monkeypatch.setattr(eigen, "_DENSE", 0)
    found = modes(lump, [ROOT], count=4, tol=1e-7)
    # A quarter turn about z: x becomes y, y becomes -x.
    nx, ny, nz = lump.grid.shape
    hx, hy, hz = lump.grid.spacing
    turned = Part(
        grid=VoxelGrid(shape=(ny, nx, nz), spacing=(hy, hx, hz), origin=(0.0, 0.0, 0.0)),
        resins=lump.resins,
        palette=lump.palette,
        labels=np.rot90(lump.labels, axes=(0, 1)),
    )
    root = Support(region=FaceRegion(name="root", side="y-"))
    again = modes(turned, [root], count=4, tol=1e-7)
    np.testing.assert_allclose(again.frequencies, found.frequencies, rtol=1e-9)
    shares = found.effective_share[:, [1, 0, 2]]
    np.testing.assert_allclose(again.effective_share, shares, atol=1e-6)


SCRIPT = """
import hashlib, sys
sys.path.insert(0, sys.argv[1])
import voxelmat.kernels.threads as threads
threads._WORTH = 1
from test_modal import block, ROOT, eigen, modes
from voxelmat.fea.buckling import buckling
from voxelmat.model.loadcase import Force, LoadCase
from voxelmat.model.region import FaceRegion
eigen._DENSE = 0
part = block((7, 4, 9), (7.0, 4.0, 9.0))
push = Force(region=FaceRegion(name="far", side="x+"), vector=(-1.0, 0.1, 0.0))
case = LoadCase(name="a", supports=(ROOT,), loads=(push,))
for count in (1, 2):
    threads.set_threads(count)
    found, bent = modes(part, [ROOT], count=3), buckling(part, case, count=2)
    arrays = (found.shapes, found.frequencies, bent.shapes, bent.factors)
    code = hashlib.sha256(b"".join(a.tobytes() for a in arrays)).hexdigest()
    print(threads.threads(), code)
"""


def test_same_bits_for_one_thread_and_two():
    env = os.environ | {"NUMBA_NUM_THREADS": "2", "OMP_WAIT_POLICY": "passive"}
    command = [sys.executable, "-c", SCRIPT, str(Path(__file__).parent)]
    run = subprocess.run(command, env=env, capture_output=True, text=True, check=True)
    one, two = (line.split() for line in run.stdout.splitlines())
    assert (one[0], two[0]) == ("1", "2")
    assert one[1] == two[1]


def test_on_springs_alone_a_stiff_block_bounces_as_a_point(grid, resin):
    # f = sqrt(k / m) / (2 pi) (formula)
    part = Part.uniform(grid(3, 3, 3), resin(E=1e6))
    whole = FaceRegion(name="bottom", side="z-")
    spring = GroundSpring(region=whole, stiffness=(0.0, 0.0, 0.5))
    hold = Support(
        region=Box(name="all", low=(-1, -1, -1), high=(9, 9, 9)), displacement=(0, 0, None)
    )
    found = modes(part, [hold], springs=[spring], count=1)
    expected = np.sqrt(0.5 / part.mass) / (2 * np.pi)
    assert found.frequencies[0] == pytest.approx(expected, rel=1e-4)
    assert found.effective_share[0, 2] == pytest.approx(1.0, rel=1e-4)


def test_on_a_foundation_a_stiff_block_bounces_as_a_point(grid, resin):
    # f = sqrt(k A / m) / (2 pi) (formula); it slides freely, which two motions and a turn show
    part = Part.uniform(grid(3, 3, 3), resin(E=1e6))
    bed = Foundation(region=FaceRegion(name="bottom", side="z-"), stiffness=0.02)
    found = modes(part, springs=[bed], count=3)
    assert found.rigid == ("translation along x", "translation along y", "rotation about z")
    bounce = np.argmax(found.effective_share[:, 2])
    expected = np.sqrt(0.02 * 9 / part.mass) / (2 * np.pi)
    assert found.frequencies[bounce] == pytest.approx(expected, rel=1e-3)


def test_a_cut_pair_is_said(grid, resin):
    part = Part.uniform(grid(6, 2, 2), resin())
    assert any("ask for 2 modes" in c for c in modes(part, [ROOT], count=1).cautions)
    assert modes(part, [ROOT], count=2).cautions == ()


def test_loose_islands_are_named(grid, resin):
    labels = np.ones((7, 3, 3), np.uint16)
    labels[3] = 0
    labels[5:] = 0
    part = Part.uniform(grid(7, 3, 3), resin()).replace(labels=labels)
    with pytest.raises(InputError, match=r"1 of 2 pieces .* x 4 to 5, y 0 to 3, z 0 to 3 mm"):
        modes(part, [ROOT], count=1)
    both = Support(region=FaceRegion(name="floor", side="z-"))
    assert len(modes(part, [ROOT, both], count=2).frequencies) == 2


def test_a_piece_that_hangs_on_an_edge_is_loose(grid, resin):
    labels = np.ones((4, 4, 2), np.uint16)
    labels[2:, :2] = 0
    labels[:2, 2:] = 0
    part = Part.uniform(grid(4, 4, 2), resin()).replace(labels=labels)
    with pytest.raises(InputError, match="only along an edge or at a corner"):
        modes(part, [ROOT], count=1)


def test_bad_input(grid, resin):
    part = Part.uniform(grid(3, 2, 2), resin())
    with pytest.raises(InputError, match="hold still"):
        modes(part, [Support(region=ROOT.region, displacement=(0.0, 0.0, 0.1))])
    with pytest.raises(InputError, match="hold still"):
        modes(part, [Support(region=ROOT.region, rotation=(0.0, 0.0, 0.1))])
    with pytest.raises(InputError, match="count must lie in 1 to 81"):
        modes(part, [ROOT], count=82)
    with pytest.raises(InputError, match="count"):
        modes(part, [ROOT], count=0)
    with pytest.raises(InputError, match="consistent, lumped"):
        modes(part, [ROOT], mass="none")
    empty = part.replace(labels=np.zeros((3, 2, 2), np.uint16))
    with pytest.raises(InputError, match="empty"):
        modes(empty)


def test_too_few_iterations_are_said_or_an_error(lump, monkeypatch):
    monkeypatch.setattr(eigen, "_DENSE", 0)
    assert any("Modes" in c for c in modes(lump, count=4, tol=1e-8, maxiter=12).cautions)
    with pytest.raises(ConvergenceError, match="raise maxiter"):
        modes(lump, count=4, maxiter=0)
