"""Killed at a random moment and resumed: the same bytes, whatever the images are."""

import random
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest
from print_twins import layered_part

from voxelmat.model.image import ImageLayout
from voxelmat.printing.profile import load_profile
from voxelmat.printing.readback import read_stack
from voxelmat.printing.stack import write_stack

STANDARD = load_profile("invented-standard")
LAYOUTS = {
    "tiff": ImageLayout(kind="tiff pages", layer_order="down"),
    "index": ImageLayout(kind="png index", row_order="up"),
    "bitmap": ImageLayout(pad_to=(8, 64)),
}
WRITER = """
import sys, time
sys.path[:0] = [{path!r}]
from print_twins import layered_part
from voxelmat.model.image import ImageLayout
from voxelmat.printing import imagefiles, stack
from voxelmat.printing.profile import load_profile
def slowed(call):
    def slow(*args, **kwargs):
        time.sleep({pause})
        return call(*args, **kwargs)
    return slow
for name in ("encode_bitmap", "encode_page", "encode_indexed", "write_pages"):
    setattr(imagefiles, name, slowed(getattr(imagefiles, name)))
stack.publish = slowed(stack.publish)
profile = load_profile("invented-standard").replace(image=ImageLayout(**{layout!r}))
print("ready", flush=True)
part = layered_part("distance", shape=(6, 6, 5))
stack.write_stack(part, profile, sys.argv[1], threads=2, slab=3)
"""


def part():
    return layered_part("distance", shape=(6, 6, 5))


def images(folder):
    return {
        p.relative_to(folder).as_posix(): p.read_bytes()
        for p in folder.rglob("*")
        if p.suffix in (".png", ".tif")
    }


@pytest.fixture(scope="module")
def whole(tmp_path_factory):
    folder = tmp_path_factory.mktemp("whole")
    found = {}
    for kind, layout in LAYOUTS.items():
        write_stack(part(), STANDARD.replace(image=layout), folder / kind)
        found[kind] = images(folder / kind)
    return found


@pytest.mark.parametrize(
    "seed", [*range(5), *(pytest.param(n, marks=pytest.mark.slow) for n in range(5, 50))]
)
def test_killed_at_a_random_moment(tmp_path, whole, seed):
    dice = random.Random(seed)
    kind = dice.choice(sorted(LAYOUTS)) if seed > 2 else sorted(LAYOUTS)[seed]
    layout = LAYOUTS[kind].as_dict()
    folder = tmp_path / "s"
    code = WRITER.format(path=str(Path(__file__).parents[1]), layout=layout, pause=0.004)
    run = subprocess.Popen(
        [sys.executable, "-c", code, str(folder)], stdout=subprocess.PIPE, text=True
    )
    with run:
        assert run.stdout.readline() == "ready\n"
        # From the first layers to the joining of pages and the change of names.
        time.sleep(dice.uniform(0.05, 0.45))
        run.send_signal(signal.SIGKILL)
    if folder.exists():  # either not there at all, or whole
        assert read_stack(folder).bits(0) is not None
        assert images(folder) == whole[kind]
    write_stack(part(), STANDARD.replace(image=LAYOUTS[kind]), folder)
    assert images(folder) == whole[kind]
    assert {p.name for p in tmp_path.iterdir()} == {"s", ".s.lock"}
