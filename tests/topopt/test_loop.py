"""Iterations on a problem that is known: stopping, cancelling, resuming, checkpoints on disk."""

import numpy as np
import pytest

from voxelmat.errors import Cancelled, FileFormatError, InputError, ResourceError
from voxelmat.topopt.checkpoint import read_checkpoint, write_checkpoint
from voxelmat.topopt.criteria import OptimalityCriteria
from voxelmat.topopt.loop import Evaluation, State, Stopping, run
from voxelmat.topopt.mma import MovingAsymptotes

C = np.linspace(1.0, 5.0, 12)


class Sheet:
    """min sum c / x subject to mean x <= 1/2: x is proportional to sqrt(c), by Lagrange."""

    low, high = np.full(12, 0.01), np.ones(12)

    def __init__(self):
        self.warm = {"u": np.zeros(1)}
        self.evaluations = 0

    def sharpness(self, iteration):
        return 0.0 if iteration < 4 else 2.0

    def begin(self, iteration, history):
        return iteration == 4

    def settled(self, iteration):
        return iteration >= 4

    def evaluate(self, x, sharpness):
        self.evaluations += 1
        # A trace of what went before, so that resuming without it would not give the same bits.
        trace = 1e-12 * float(self.warm["u"][0])
        self.warm = {"u": np.array([float(x[0])])}
        F = np.array([(C / x).sum() + trace, x.mean() / 0.5 - 1])
        return Evaluation(
            F=F, dF=np.stack([-C / x**2, np.full(12, 1 / 6)]), reported=float(F[0]),
            grey=0.0, weight=np.ones(12), cg_iterations=3,
        )  # fmt: skip

    def warm_state(self):
        return dict(self.warm)

    def restore(self, warm):
        self.warm = dict(warm)


class Stop:
    """A monitor that cancels at its n-th report."""

    def __init__(self, at):
        self.left, self.seen = at, []

    def report(self, stage, *, done, total, **figures):
        self.seen.append((stage, done, total, sorted(figures)))
        self.left -= 1
        if self.left == 0:
            raise Cancelled("enough")


def fresh():
    x = np.full(12, 0.4)
    return State(x=x, whole=x)


def mma():
    return MovingAsymptotes(Sheet.low, Sheet.high)


def go(state=None, iterations=20, monitor=None, stopping=None, **kw):
    stopping = stopping or Stopping(gap=0.0, change=0.0)
    extra = {} if monitor is None else {"monitor": monitor}
    return run(
        Sheet(), mma(), state or fresh(), iterations=iterations, stopping=stopping, **extra, **kw
    )


def test_it_converges_to_the_known_answer_and_says_why():
    best = np.sqrt(C).sum() ** 2 / 6
    for stepper in (mma(), OptimalityCriteria(Sheet.low, Sheet.high)):
        out = run(Sheet(), stepper, fresh(), iterations=200, stopping=Stopping(gap=1e-4))
        assert out.converged
        assert not out.cancelled
        assert "converged after" in out.reason or "no longer changing" in out.reason
        assert out.state.history[-1].objective == pytest.approx(best, rel=2e-3)
        assert len(out.state.history) < 200


def test_it_says_that_the_iterations_ran_out():
    out = go(iterations=7)
    assert out.reason.startswith("all 7 iterations are used: mean change still")
    assert not out.converged
    assert [r.iteration for r in out.state.history] == list(range(1, 8))


def test_reports_carry_the_numbers_that_matter():
    watch = Stop(100)
    go(iterations=3, monitor=watch)
    names = ["cg_iterations", "change", "grey", "objective", "violation"]
    assert watch.seen == [("optimising", n, 3, names) for n in (1, 2, 3)]


def test_cancel_keeps_the_last_whole_design():
    out = go(monitor=Stop(6))
    assert out.cancelled
    assert out.reason == "stopped by the user after 6 iterations"
    want = go(iterations=6)
    np.testing.assert_array_equal(out.state.whole, want.state.whole)


def test_resumed_equals_uninterrupted_bit_for_bit(tmp_path):
    path = tmp_path / "run.npz"
    whole = go(iterations=20)
    go(monitor=Stop(7), keep=lambda s: write_checkpoint(path, s, "abc"))
    state = read_checkpoint(path, "abc")
    assert len(state.history) == 7
    rest = go(state)
    np.testing.assert_array_equal(rest.state.x, whole.state.x)
    np.testing.assert_array_equal(rest.state.whole, whole.state.whole)
    for a, b in zip(rest.state.history, whole.state.history, strict=True):
        assert repr(a) == repr(b)  # repr, since nan != nan


def test_a_finished_run_is_not_continued(tmp_path):
    path = tmp_path / "run.npz"
    kw = {"stopping": Stopping(gap=1e-3), "iterations": 200}
    first = go(**kw, keep=lambda s: write_checkpoint(path, s, "abc"))
    again = go(read_checkpoint(path, "abc"), **kw)
    assert again.reason == first.reason
    assert again.converged
    np.testing.assert_array_equal(again.state.whole, first.state.whole)


def test_checkpoints_are_written_every_few_iterations_and_at_the_end():
    kept = []
    go(iterations=12, keep=lambda s: kept.append(len(s.history)), keep_every=5)
    assert kept == [5, 10, 12]


def test_bad_checkpoints_are_refused(tmp_path):
    path = tmp_path / "run.npz"
    assert read_checkpoint(path, "abc") is None
    write_checkpoint(path, fresh(), "abc")
    with pytest.raises(InputError, match="another design"):
        read_checkpoint(path, "xyz")
    data = path.read_bytes()
    path.write_bytes(data[: len(data) // 2])
    with pytest.raises(FileFormatError, match="no whole checkpoint"):
        read_checkpoint(path, "abc")
    path.write_text("hello")
    with pytest.raises(FileFormatError, match="no whole checkpoint"):
        read_checkpoint(path, "abc")
    with pytest.raises(ResourceError, match="does not exist"):
        write_checkpoint(tmp_path / "no" / "run.npz", fresh(), "abc")
