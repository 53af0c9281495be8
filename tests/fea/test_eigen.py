"""The eigenvalue iteration on assembled matrices, against dense LAPACK."""

import numpy as np
import pytest
import scipy.linalg
import scipy.sparse

from voxelmat.errors import Cancelled, ConvergenceError
from voxelmat.fea import eigen
from voxelmat.fea.eigen import Problem, extreme_pairs
from voxelmat.monitor import SILENT, CancelFlag

SIZE = 60


def matrices(seed=0):
    """A stiff-looking and a mass-looking matrix with known pairs."""
    rng = np.random.default_rng(seed)
    Q = np.linalg.qr(rng.standard_normal((SIZE, SIZE)))[0]
    values = np.concatenate([[0.0, 0.0, 1.0, 3.0, 3.0, 3.0, 5.0], np.linspace(20, 1e5, SIZE - 7)])
    root = np.diag(1 + rng.random(SIZE))
    A = root @ Q @ np.diag(values) @ Q.T @ root
    return (A + A.T) / 2, root @ root, np.linalg.inv(root) @ Q, values


def problem(A, B, fixed=None, largest=False, noise=0.0, floor=0.0):
    """Preconditioned by the inverse of the stiffness, spoilt a little."""
    stiff = B if largest else A
    inverse = np.linalg.pinv(stiff, rcond=1e-9) + 1e-9 * np.eye(SIZE)
    rough = np.random.default_rng(5).standard_normal((SIZE, SIZE))
    inverse = inverse + noise * np.abs(np.diag(inverse)).mean() * rough @ rough.T / SIZE
    return Problem(
        A=lambda X: X @ A,
        B=lambda X: X @ B,
        precondition=lambda X: X @ inverse.T,
        size=SIZE,
        largest=largest,
        fixed=fixed,
        floor=floor,
    )


def find(problem, count, **options):
    settings = {"guard": 2, "tol": 1e-8, "maxiter": 200, "monitor": SILENT, "stage": "test"}
    return extreme_pairs(problem, count, **settings | options)


@pytest.mark.parametrize("dense", [700, 0])
def test_lowest_pairs_without_the_known_ones(dense, monkeypatch):
    monkeypatch.setattr(eigen, "_DENSE", dense)
    A, B, vectors, values = matrices()
    pairs = find(problem(A, B, fixed=vectors[:, :2].T, noise=0.02), 4)
    np.testing.assert_allclose(pairs.values[:4], values[2:6], rtol=1e-10)
    assert (pairs.iterations > 0) == (dense == 0)
    X = pairs.vectors.T
    np.testing.assert_allclose(X.T @ B @ X, np.eye(X.shape[1]), atol=1e-9)
    np.testing.assert_allclose(vectors[:, :2].T @ B @ X, 0.0, atol=1e-12)
    assert pairs.residuals[:4].max() <= 1e-8


@pytest.mark.parametrize("dense", [700, 0])
def test_largest_pairs_of_an_indefinite_matrix(dense, monkeypatch):
    monkeypatch.setattr(eigen, "_DENSE", dense)
    K, M, _, _ = matrices(3)
    K = K + M
    rng = np.random.default_rng(1)
    G = rng.standard_normal((SIZE, SIZE))
    G = G + G.T
    expected = scipy.linalg.eigh(G, K, eigvals_only=True)[::-1]
    pairs = find(problem(G, K, largest=True), 3, guard=3)
    np.testing.assert_allclose(pairs.values[:3], expected[:3], rtol=1e-9)


def test_a_triple_value_is_found_three_times(monkeypatch):
    monkeypatch.setattr(eigen, "_DENSE", 0)
    A, B, vectors, _ = matrices()
    pairs = find(problem(A, B, fixed=vectors[:, :2].T), 5)
    np.testing.assert_allclose(pairs.values[1:4], 3.0, rtol=1e-10)


def test_stops_early_below_the_floor(monkeypatch):
    monkeypatch.setattr(eigen, "_DENSE", 0)
    K, M, _, _ = matrices(3)
    K = K + M
    G = -np.diag(np.random.default_rng(2).random(SIZE))  # negative: nothing above 0
    pairs = find(problem(G, K, largest=True, floor=0.1), 2, tol=0.0)
    assert pairs.values[0] < 0.1
    assert pairs.iterations <= eigen._LOOK


def test_out_of_reach_comes_back_with_its_residual(monkeypatch):
    monkeypatch.setattr(eigen, "_DENSE", 0)
    A, B, vectors, _ = matrices()
    pairs = find(problem(A, B, fixed=vectors[:, :2].T, noise=3.0), 4, maxiter=1)
    assert pairs.iterations <= 1
    assert pairs.residuals[:4].max() > 1e-8
    assert len(pairs.history) >= 1


def test_break_down_is_an_error(monkeypatch):
    monkeypatch.setattr(eigen, "_DENSE", 0)
    A, B, _, _ = matrices()
    broken = problem(A, B)
    none = Problem(A=broken.A, B=lambda X: 0 * X, precondition=broken.A, size=SIZE, largest=False)
    with pytest.raises(ConvergenceError, match="broke down"):
        find(none, 3)


def test_can_be_cancelled(monkeypatch):
    monkeypatch.setattr(eigen, "_DENSE", 0)
    A, B, vectors, _ = matrices()
    flag = CancelFlag()
    flag.cancel()
    with pytest.raises(Cancelled):
        find(problem(A, B, fixed=vectors[:, :2].T), 4, monitor=flag)
