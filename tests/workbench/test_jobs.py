"""One worker: results, progress, cancel, newer in place of older, errors kept."""

import asyncio
import threading

import pytest

from voxelmat.errors import Cancelled, InputError
from voxelmat.workbench.jobs import Jobs


def test_results_and_errors_come_back():
    jobs = Jobs()
    assert jobs.submit("sum", lambda monitor: 1 + 1).wait(10) == 2

    def fails(monitor):
        raise InputError("no such thing")

    job = jobs.submit("bad", fails)
    with pytest.raises(InputError, match="no such thing"):
        job.wait(10)
    assert (job.state, job.message) == ("failed", "no such thing")
    answer = []  # on a thread of its own: browser tests leave a loop running on this one
    thread = threading.Thread(target=lambda: answer.append(asyncio.run(_awaited(jobs))))
    thread.start()
    thread.join(20)
    assert answer == [3]
    jobs.close()


async def _awaited(jobs):
    return await jobs.submit("three", lambda monitor: 3)


def test_the_newest_of_a_key_counts():
    jobs, begun, go = Jobs(), threading.Event(), threading.Event()

    def work(monitor):
        begun.set()
        assert go.wait(10)
        monitor.report("step", done=1, total=2)
        return "old"

    first = jobs.submit("live", work, key="live")
    assert begun.wait(10)
    waiting = jobs.submit("live", lambda monitor: "middle", key="live")
    last = jobs.submit("live", lambda monitor: "new", key="live")
    other = jobs.submit("other", lambda monitor: "stays")
    go.set()
    assert last.wait(10) == "new"
    assert other.wait(10) == "stays"
    for stopped in (first, waiting):
        with pytest.raises(Cancelled):
            stopped.wait(10)
        assert stopped.state == "stopped"
    jobs.close()


def test_progress_is_told_at_most_ten_times_a_second():
    told = []
    jobs = Jobs(lambda job: told.append((job.state, job.done)))

    def work(monitor):
        for n in range(2000):
            monitor.report("counting", done=n, total=2000, residual=1.0 / (n + 1))

    job = jobs.submit("count", work)
    job.wait(60)
    assert job.done == 1999
    assert job.figures["residual"] == 1 / 2000
    assert len(told) <= 3 + 10 * (job.seconds + 0.1)
    assert told[-1][0] == "done"
    jobs.close()


def test_closing_stops_what_runs():
    jobs, begun = Jobs(), threading.Event()

    def forever(monitor):
        begun.set()
        while True:
            monitor.report("on and on", done=0, total=0)

    job = jobs.submit("long", forever)
    assert begun.wait(10)
    jobs.close()
    with pytest.raises(Cancelled):
        job.wait(10)
    with pytest.raises(RuntimeError, match="closed"):
        jobs.submit("late", lambda monitor: None)
