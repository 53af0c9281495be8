"""Writing a stack: same bytes for any split, resumable, never half-written, never over others."""

import errno
import json
import os
import signal
import subprocess
import sys
import threading
import time
from pathlib import Path

import pytest
from print_twins import layered_part

from voxelmat.errors import Cancelled, FileFormatError, InputError, ResourceError
from voxelmat.monitor import CancelFlag
from voxelmat.printing.profile import load_profile
from voxelmat.printing.readback import read_stack
from voxelmat.printing.stack import write_stack

STANDARD = load_profile("invented-standard")


def part():
    return layered_part("distance", shape=(8, 7, 6))


def images(folder):
    return {p.relative_to(folder).as_posix(): p.read_bytes() for p in folder.rglob("*.png")}


@pytest.fixture(scope="module")
def whole(tmp_path_factory):
    """The files of a stack written in one go."""
    folder = tmp_path_factory.mktemp("whole") / "stack"
    write_stack(part(), STANDARD, folder, threads=1)
    return images(folder)


@pytest.mark.parametrize(("threads", "slabs"), [(1, 1), (1, 2), (2, 7), (7, 7), (2, 1000)])
def test_same_bytes_for_any_split_and_thread_count(tmp_path, whole, threads, slabs):
    n = len(whole) // 4
    write_stack(part(), STANDARD, tmp_path / "s", threads=threads, slab=max(1, -(-n // slabs)))
    assert images(tmp_path / "s") == whole


def test_what_is_in_the_folder(tmp_path, whole):
    stack = write_stack(part(), STANDARD, tmp_path / "s", inputs={"a.stl": "0" * 64})
    assert {p.name for p in (tmp_path / "s").iterdir()} == {
        "SHA256SUMS", "check_stack.py", "manifest.json", "m1", "m2", "m3", "support"
    }  # fmt: skip
    assert {p.name for p in tmp_path.iterdir()} == {"s", ".s.lock"}
    manifest = json.loads((tmp_path / "s" / "manifest.json").read_text())
    assert manifest["raster"]["pitch_mm"] == ["127/3000", "127/1500", "3/100"]
    assert manifest["image"]["pixels_per_metre"] == [23622, 11811]
    assert manifest["inputs"] == {"a.stl": "0" * 64}
    assert [c["resin"] for c in manifest["channels"]] == ["hard", "soft", "mid", "support"]
    assert len(whole) == 4 * stack.n_layers
    assert sum(c.sites for c in stack.channels) > 0
    for k in (0, stack.n_layers // 2):
        layer = stack.layer(k)
        assert layer.shape == stack.shape[:2]
        assert set(layer.ravel().tolist()) <= {0, 1, 2, 3, 4}


def test_a_finished_stack_is_not_written_again(tmp_path):
    write_stack(part(), STANDARD, tmp_path / "s")
    before = (tmp_path / "s" / "manifest.json").stat().st_mtime_ns
    write_stack(part(), STANDARD, tmp_path / "s")
    assert (tmp_path / "s" / "manifest.json").stat().st_mtime_ns == before
    victim = tmp_path / "s" / "m1" / "00003.png"
    victim.write_bytes(b"spoilt")
    write_stack(part(), STANDARD, tmp_path / "s")
    assert victim.read_bytes() != b"spoilt"


def test_another_job_replaces_an_old_stack(tmp_path, whole):
    write_stack(part(), STANDARD, tmp_path / "s", seed=1)
    assert images(tmp_path / "s") != whole
    write_stack(part(), STANDARD, tmp_path / "s")
    assert images(tmp_path / "s") == whole
    assert {p.name for p in tmp_path.iterdir()} == {"s", ".s.lock"}


def _fails_after(monkeypatch, calls, number=errno.ENOSPC):
    real = Path.write_bytes
    count = [0]

    def write(self, data):
        count[0] += 1
        if count[0] > calls:
            raise OSError(number, os.strerror(number))
        return real(self, data)

    monkeypatch.setattr(Path, "write_bytes", write)


class Progress:
    """Keeps the first report."""

    first = None

    def report(self, stage, *, done, total, **figures):
        if stage == "writing layers" and self.first is None:
            self.first = done


def test_a_full_disk_leaves_nothing_and_is_resumed(tmp_path, monkeypatch, whole):
    with monkeypatch.context() as patch:
        _fails_after(patch, 83)
        with pytest.raises(ResourceError, match=r"No space left.*s\.partial"):
            write_stack(part(), STANDARD, tmp_path / "s", threads=1)
    assert not (tmp_path / "s").exists()
    with pytest.raises(FileFormatError):
        read_stack(tmp_path / "s.partial")
    progress = Progress()
    write_stack(part(), STANDARD, tmp_path / "s", monitor=progress)
    assert progress.first == 20
    assert images(tmp_path / "s") == whole


def test_a_disk_that_fills_up_at_the_manifest(tmp_path, monkeypatch, whole):
    def half(folder, data):
        (folder / "manifest.json").write_text('{"format": "voxelmat-st')
        raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))

    with monkeypatch.context() as patch:
        patch.setattr("voxelmat.printing.stack.write_manifest", half)
        with pytest.raises(ResourceError, match="No space left"):
            write_stack(part(), STANDARD, tmp_path / "s")
    assert not (tmp_path / "s").exists()
    progress = Progress()
    write_stack(part(), STANDARD, tmp_path / "s", monitor=progress)
    assert progress.first == len(whole) // 4
    assert images(tmp_path / "s") == whole


def test_a_layer_that_changed_in_the_partial_folder_is_written_again(tmp_path, monkeypatch, whole):
    with monkeypatch.context() as patch:
        _fails_after(patch, 83)
        with pytest.raises(ResourceError):
            write_stack(part(), STANDARD, tmp_path / "s", threads=1)
    (tmp_path / "s.partial" / "m2" / "00004.png").write_bytes(b"half a fi")
    (tmp_path / "s.partial" / "m2" / "00007.png").unlink()
    with (tmp_path / "s.partial" / "journal.jsonl").open("a") as handle:
        handle.write('{"layer": 20, "sha')
    progress = Progress()
    write_stack(part(), STANDARD, tmp_path / "s", monitor=progress)
    assert progress.first == 18
    assert images(tmp_path / "s") == whole


def test_another_job_does_not_take_over_a_partial_folder(tmp_path, monkeypatch, whole):
    with monkeypatch.context() as patch:
        _fails_after(patch, 83)
        with pytest.raises(ResourceError):
            write_stack(part(), STANDARD, tmp_path / "s", threads=1, seed=1)
    progress = Progress()
    write_stack(part(), STANDARD, tmp_path / "s", monitor=progress)
    assert progress.first == 0
    assert images(tmp_path / "s") == whole


def test_cancel_keeps_whole_layers(tmp_path, whole):
    flag = CancelFlag()

    class Stop:
        def report(self, stage, *, done, total, **figures):
            if done > 5:
                flag.cancel()

    flag._inner = Stop()
    with pytest.raises(Cancelled):
        write_stack(part(), STANDARD, tmp_path / "s", monitor=flag, slab=2, threads=1)
    assert not (tmp_path / "s").exists()
    write_stack(part(), STANDARD, tmp_path / "s")
    assert images(tmp_path / "s") == whole


SLOW_WRITER = """
import sys, time
sys.path[:0] = {path!r}
from print_twins import layered_part
from voxelmat.printing import imagefiles, stack
from voxelmat.printing.profile import load_profile
encode = imagefiles.encode_bitmap
def slow(*args):
    time.sleep(0.01)
    return encode(*args)
imagefiles.encode_bitmap = slow
stack.write_stack(layered_part("distance", shape=(8, 7, 6)), load_profile("invented-standard"),
                  sys.argv[1], threads=2, slab=4)
"""


@pytest.mark.parametrize(
    ("how", "wait"),
    [
        (signal.SIGKILL, 0.03),
        (signal.SIGINT, 0.05),
        *[pytest.param(signal.SIGKILL, 0.004 * k, marks=pytest.mark.slow) for k in range(50)],
    ],
)
def test_killed_and_resumed(tmp_path, whole, how, wait):
    folder = tmp_path / "s"
    script = SLOW_WRITER.format(path=[str(Path(__file__).parents[1])])
    run = subprocess.Popen(
        [sys.executable, "-c", script, str(folder)], stderr=subprocess.PIPE, text=True
    )
    journal = tmp_path / "s.partial" / "journal.jsonl"
    deadline = time.monotonic() + 120
    while not (journal.exists() and len(journal.read_text().splitlines()) > 2):
        assert run.poll() is None, run.stderr.read()
        assert time.monotonic() < deadline
        time.sleep(0.005)
    time.sleep(wait)
    run.send_signal(how)
    run.communicate(timeout=60)
    assert run.returncode != 0
    assert not folder.exists()
    progress = Progress()
    write_stack(part(), STANDARD, folder, monitor=progress)
    assert progress.first >= 2
    assert images(folder) == whole
    assert {p.name for p in tmp_path.iterdir()} == {"s", ".s.lock"}


def test_two_runs_into_one_folder(tmp_path, whole):
    inside, go_on = threading.Event(), threading.Event()

    class Hold:
        def report(self, stage, *, done, total, **figures):
            inside.set()
            assert go_on.wait(30)

    first = threading.Thread(
        target=write_stack, args=(part(), STANDARD, tmp_path / "s"), kwargs={"monitor": Hold()}
    )
    first.start()
    try:
        assert inside.wait(30)
        with pytest.raises(ResourceError, match="Another run is writing"):
            write_stack(part(), STANDARD, tmp_path / "s")
    finally:
        go_on.set()
        first.join()
    assert images(tmp_path / "s") == whole


@pytest.mark.parametrize("name", ["s", "s.partial", "s.old"])
def test_a_folder_of_someone_else_is_left_alone(tmp_path, name):
    (tmp_path / name).mkdir()
    (tmp_path / name / "thesis.txt").write_text("years of work")
    with pytest.raises(ResourceError, match="not a stack"):
        write_stack(part(), STANDARD, tmp_path / "s")
    assert (tmp_path / name / "thesis.txt").read_text() == "years of work"
    assert name == "s" or not (tmp_path / "s").exists()


def test_a_stack_with_a_foreign_file_is_left_alone(tmp_path):
    write_stack(part(), STANDARD, tmp_path / "s")
    (tmp_path / "s" / "m1" / "notes.txt").write_text("mine")
    with pytest.raises(ResourceError, match="not a stack"):
        write_stack(part(), STANDARD, tmp_path / "s", seed=3)


def test_bad_options(tmp_path):
    with pytest.raises(InputError, match=r"columns, .*machine, none"):
        write_stack(part(), STANDARD, tmp_path / "s", support="pillars")
    with pytest.raises(InputError, match="no support channel"):
        write_stack(
            layered_part("voxels", pure=True), load_profile("invented-coarse"), tmp_path / "s",
            support="columns",
        )  # fmt: skip
    with pytest.raises(InputError, match="no channel for 'mid'"):
        write_stack(part(), load_profile("invented-coarse"), tmp_path / "s")
    empty = part()
    with pytest.raises(InputError, match="nothing to print"):
        write_stack(
            empty.replace(labels=empty.labels * 0, occupancy=None), STANDARD, tmp_path / "s"
        )
    for seed in (-1, 2**64, 0.5, "1"):
        with pytest.raises(InputError, match="seed"):
            write_stack(part(), STANDARD, tmp_path / "s", seed=seed)
    for position in (3, (1,), ("a", "b"), (1, 2, 3)):
        with pytest.raises(InputError, match="two lengths"):
            write_stack(part(), STANDARD, tmp_path / "s", position=position)
    with pytest.raises(InputError, match="list of turns"):
        write_stack(part(), STANDARD, tmp_path / "s", orientation=90)
    with pytest.raises(InputError, match="name a new one"):
        write_stack(part(), STANDARD, "/")
    (tmp_path / "file").write_text("")
    with pytest.raises(ResourceError):
        write_stack(part(), STANDARD, tmp_path / "file" / "s")
    assert {p.name for p in tmp_path.iterdir()} == {"file"}
