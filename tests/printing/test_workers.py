"""Layers written by other processes: the same bytes, kills survived, nobody left behind."""

import os
import random
import signal
import subprocess
import sys
import time
from contextlib import contextmanager
from pathlib import Path

import psutil
import pytest
from print_twins import layered_part

from voxelmat.errors import Cancelled, FileFormatError, InputError, ResourceError
from voxelmat.io.bigpart import KINDS
from voxelmat.io.bigpart_write import save_big_part
from voxelmat.model.halftone import Halftone
from voxelmat.model.image import ImageLayout
from voxelmat.printing import workers as workers_module
from voxelmat.printing.compose import on_whole_bytes, tray_window
from voxelmat.printing.job import PlacedPart, PrintJob, one_part_job, placed
from voxelmat.printing.jobfolder import described, load_job
from voxelmat.printing.profile import load_profile
from voxelmat.printing.stack import write_job, write_stack

STANDARD = load_profile("invented-standard")


def part():
    return layered_part("distance", shape=(8, 7, 6))


def images(folder):
    return {p.relative_to(folder).as_posix(): p.read_bytes() for p in folder.rglob("*.png")}


def our_processes():
    """Worker processes that this test process has started and that still live."""
    found = []
    for child in psutil.Process().children(recursive=True):
        try:
            if any("spawn_main" in word for word in child.cmdline()):
                found.append(child)
        except psutil.NoSuchProcess:
            continue
    return found


@pytest.fixture(scope="module")
def whole(tmp_path_factory):
    """The files of a stack written in one go by one thread."""
    folder = tmp_path_factory.mktemp("whole") / "stack"
    write_stack(part(), STANDARD, folder, threads=1, slab=10_000)
    return images(folder)


@pytest.mark.parametrize(
    ("options", "slabs"),
    [({"threads": 2}, 1), ({"threads": 1}, 2), ({"threads": 2}, 7), ({"workers": 2}, 7)],
)
def test_same_bytes_for_any_workers(tmp_path, whole, options, slabs):
    n = len(whole) // 4
    write_stack(part(), STANDARD, tmp_path / "s", slab=-(-n // slabs), **options)
    assert images(tmp_path / "s") == whole
    assert {p.name for p in tmp_path.iterdir()} == {"s", ".s.lock"}
    assert not our_processes()


@pytest.mark.parametrize("kind", KINDS)
def test_a_part_in_a_store_gives_the_same_bytes(tmp_path, whole, kind):
    stored = save_big_part(part(), tmp_path / "store", kind=kind)
    write_stack(stored, STANDARD, tmp_path / "s", threads=1)
    assert images(tmp_path / "s") == whole


def test_a_stored_part_through_workers(tmp_path, whole):
    stored = save_big_part(part(), tmp_path / "store")
    write_stack(stored, STANDARD, tmp_path / "s", workers=2, slab=9)
    assert images(tmp_path / "s") == whole
    assert (tmp_path / "store" / "part.json").is_file()


@contextmanager
def cluster(workers):
    """Address of a dask.distributed cluster of processes on this machine."""
    from distributed import LocalCluster

    with LocalCluster(
        n_workers=workers,
        threads_per_worker=1,
        processes=True,
        dashboard_address=None,
        host="127.0.0.1",
        silence_logs=50,
    ) as made:
        yield made.scheduler_address


def test_same_bytes_through_a_scheduler(tmp_path, whole):
    with cluster(1) as address:
        write_stack(part(), STANDARD, tmp_path / "s", scheduler=address, slab=11)
        assert images(tmp_path / "s") == whole
        # The scheduler gives the slab of a worker that was killed to the next one.
        monitor = KillWorker(after=4)
        write_stack(part(), STANDARD, tmp_path / "t", scheduler=address, slab=4, monitor=monitor)
        assert images(tmp_path / "t") == whole
        assert monitor.killed
    assert {p.name for p in tmp_path.iterdir()} == {"s", ".s.lock", "t", ".t.lock"}


def test_a_scheduler_that_is_not_there(tmp_path, monkeypatch):
    monkeypatch.setattr(workers_module, "ANSWER_WITHIN", 1.0)
    with pytest.raises(ResourceError, match=r"No dask.distributed scheduler answers"):
        write_stack(part(), STANDARD, tmp_path / "s", scheduler="tcp://127.0.0.1:9")
    assert not (tmp_path / "s").exists()


class KillWorker:
    """Ends a worker process once some layers are done."""

    def __init__(self, after):
        self.after = after
        self.first = None
        self.killed = False

    def report(self, stage, *, done, total, **figures):
        if stage != "writing layers":
            return
        self.first = done if self.first is None else self.first
        if done >= self.after and not self.killed:
            os.kill(our_processes()[0].pid, signal.SIGKILL)
            self.killed = True


def test_a_killed_worker_is_named_and_the_rest_is_kept(tmp_path, whole):
    monitor = KillWorker(after=2)
    with pytest.raises(ResourceError, match=r"worker process came to an end.*layers are kept"):
        write_stack(part(), STANDARD, tmp_path / "s", workers=2, slab=2, monitor=monitor)
    assert monitor.killed
    assert not our_processes()
    assert not (tmp_path / "s").exists()
    assert {p.name for p in tmp_path.iterdir()} == {"s.partial", ".s.lock"}
    again = KillWorker(after=10**9)
    write_stack(part(), STANDARD, tmp_path / "s", threads=1, monitor=again)
    assert again.first >= 2
    assert images(tmp_path / "s") == whole


def test_cancel_stops_the_workers(tmp_path, whole):
    class Stop:
        def report(self, stage, *, done, total, **figures):
            if stage == "writing layers" and done >= 3:
                raise Cancelled("enough")

    with pytest.raises(Cancelled):
        write_stack(part(), STANDARD, tmp_path / "s", workers=2, slab=3, monitor=Stop())
    assert not our_processes()
    assert {p.name for p in tmp_path.iterdir()} == {"s.partial", ".s.lock"}
    write_stack(part(), STANDARD, tmp_path / "s", threads=1)
    assert images(tmp_path / "s") == whole


SCRIPT = """
import sys
sys.path[:0] = {path!r}
from print_twins import layered_part
from voxelmat.printing.profile import load_profile
from voxelmat.printing.stack import write_stack
if __name__ == "__main__":
    write_stack(layered_part("distance", shape=(8, 7, 6)), load_profile("invented-standard"),
                sys.argv[1], workers=2, slab=2)
"""
TRIALS = [pytest.param(n, marks=[] if n < 5 else pytest.mark.slow) for n in range(50)]


@pytest.mark.parametrize("trial", TRIALS)
def test_killed_at_a_random_moment(tmp_path, whole, trial):
    """Parent killed, worker killed, or parent interrupted; the next run gives the same bytes."""
    rng = random.Random(trial)
    folder, script = tmp_path / "s", tmp_path / "run.py"
    script.write_text(SCRIPT.format(path=[str(Path(__file__).parents[1])]))
    run = subprocess.Popen(
        [sys.executable, str(script), str(folder)], stderr=subprocess.PIPE, text=True
    )
    children = []
    try:
        journal = tmp_path / "s.partial" / "journal.jsonl"
        wanted = rng.randrange(1, len(whole) // 4)
        deadline = time.monotonic() + 120
        while not (journal.exists() and len(journal.read_text().splitlines()) > wanted):
            assert time.monotonic() < deadline
            if run.poll() is not None:
                break  # it was quicker
            time.sleep(0.002)
        time.sleep(0.02 * rng.random())
        children = psutil.Process(run.pid).children(recursive=True) if run.poll() is None else []
        spawned = [c for c in children if any("spawn_main" in w for w in c.cmdline())]
        victim = rng.choice(spawned).pid if spawned and trial % 3 == 1 else run.pid
        if run.poll() is None:
            os.kill(victim, signal.SIGINT if trial % 3 == 2 else signal.SIGKILL)
        _, said = run.communicate(timeout=60)
        assert run.returncode in (0, 1, -signal.SIGKILL, -signal.SIGINT)
        assert run.returncode != 1 or "layers are kept" in said
        _, alive = psutil.wait_procs(children, timeout=10)
        assert not alive, "workers outlived their parent"
    finally:
        for process in (run, *children):
            if process.is_running() if isinstance(process, psutil.Process) else not process.poll():
                process.kill()
    write_stack(part(), STANDARD, folder, threads=1)
    assert images(folder) == whole
    assert {p.name for p in tmp_path.iterdir()} <= {"s", ".s.lock", ".s.job", "run.py"}


def test_a_job_comes_back_from_its_folder(tmp_path):
    halftone = Halftone(interface_width_mm={("hard", "soft"): 0.4}, order=("hard", "soft", "mid"))
    job = one_part_job(part(), STANDARD, orientation=["x 90"], seed=7, halftone=halftone)
    with described(job, tmp_path / "s") as place:
        again = load_job(place)
        assert again.halftone == job.halftone
        assert again.profile == job.profile
        assert again.window == job.window
        assert (again.channels, again.support, again.seed) == (job.channels, job.support, 7)
        assert again.parts[0].raster == job.parts[0].raster
        assert again.parts[0].part.load().digest == job.parts[0].part.digest
    assert not place.exists()
    with pytest.raises(FileFormatError, match="cannot take part"):
        load_job(place)


def test_a_folder_of_someone_else_is_left_alone(tmp_path):
    (tmp_path / ".s.job").mkdir()
    (tmp_path / ".s.job" / "thesis.txt").write_text("years of work")
    with pytest.raises(ResourceError, match="not a job of ours"):
        write_stack(part(), STANDARD, tmp_path / "s", workers=2)
    assert (tmp_path / ".s.job" / "thesis.txt").read_text() == "years of work"
    assert not (tmp_path / "s").exists()


def test_other_versions_are_refused(tmp_path, monkeypatch):
    job = one_part_job(part(), STANDARD)
    with described(job, tmp_path / "s") as place:
        monkeypatch.setattr("voxelmat.printing.jobfolder.versions", lambda: {"voxelmat": "0"})
        with pytest.raises(FileFormatError, match="same versions"):
            load_job(place)


def test_error_diffusion_is_not_shared_out(tmp_path):
    job = one_part_job(part(), STANDARD, halftone=Halftone(method="error diffusion"))
    write_job(job, tmp_path / "one", threads=1)
    write_job(job, tmp_path / "two", workers=2, slab=3)
    assert images(tmp_path / "one") == images(tmp_path / "two")


def test_error_diffusion_that_does_not_fit_is_refused(tmp_path, monkeypatch):
    job = one_part_job(part(), STANDARD, halftone=Halftone(method="error diffusion"))
    _, rows, columns = job.window.image_shape
    needed = rows * columns * (4 * 3 + 1)  # three resins
    monkeypatch.setattr("voxelmat.fea.resources.available_bytes", lambda: 2 * needed - 1)
    with pytest.raises(ResourceError, match="Take the halftone 'blue noise'"):
        write_job(job, tmp_path / "s")
    assert not (tmp_path / "s").exists()
    monkeypatch.setattr("voxelmat.fea.resources.available_bytes", lambda: 2 * needed)
    assert write_job(job, tmp_path / "s").n_layers == job.window.shape[2]
    monkeypatch.setattr("voxelmat.fea.resources.available_bytes", lambda: 0)
    write_job(job.replace(halftone=Halftone()), tmp_path / "blue")  # carries nothing


def test_bad_counts(tmp_path):
    for options in ({"workers": 0}, {"workers": 2, "threads": 2}, {"slab": 0}, {"threads": 0}):
        with pytest.raises(InputError, match=r"Workers, threads|one thread"):
            write_stack(part(), STANDARD, tmp_path / "s", **options)


def test_a_scheduler_that_lost_its_workers(tmp_path, monkeypatch):
    monkeypatch.setattr(workers_module, "LOST_AFTER", 0.5)
    with cluster(0) as address, pytest.raises(ResourceError, match="no workers"):
        write_stack(part(), STANDARD, tmp_path / "s", scheduler=address)


def two_parts(profile, support):
    """Two parts on one tray, one turned."""
    items = [
        placed(part(), profile, position=(50.0, 60.0), name="left"),
        placed(part(), profile, ["z 90", "x 90"], position=(54.0, 61.0), name="right"),
    ]
    items = [PlacedPart(part=i.part, raster=on_whole_bytes(i.raster), name=i.name) for i in items]
    return PrintJob(
        profile=profile,
        parts=tuple(items),
        window=tray_window([i.raster for i in items], profile),
        channels=profile.assign(("hard", "soft", "mid")),
        support=support,
        halftone=Halftone(method="hash noise"),
    )


@pytest.mark.parametrize(
    ("kind", "support"), [("png index", "grid"), ("tiff pages", "skin"), ("png bitmap", "none")]
)
def test_trays_of_several_parts_in_every_kind_of_file(tmp_path, kind, support):
    profile = STANDARD.replace(image=ImageLayout(kind=kind))
    job = two_parts(profile, support)
    write_job(job, tmp_path / "one", threads=1)
    write_job(job, tmp_path / "two", workers=2, slab=19)
    one, two = (
        {
            p.relative_to(tmp_path / name).as_posix(): p.read_bytes()
            for p in (tmp_path / name).rglob("*")
            if p.suffix in (".png", ".tif")
        }
        for name in ("one", "two")
    )
    assert one == two
    assert one
