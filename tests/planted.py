"""A graded part that is sound, and defects to plant in its stack, for the preflight's tests."""

import hashlib
import json

import numpy as np
from print_twins import HARD, SOFT

from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.part import Part
from voxelmat.printing.imagefiles import ImageFiles
from voxelmat.printing.profile import load_profile
from voxelmat.printing.readback import read_stack
from voxelmat.printing.stack import write_stack

STANDARD = load_profile("invented-standard")
STEPS = 8


def graded_part(*, shape=(26, 20, 14), spacing=0.25, change=None):
    """A lopsided body, hard on one side, soft on the other, graded between; no symmetry at all.

    `change` may alter a copy of its true distance (mm) and labels before they are stored.
    """
    grid = VoxelGrid(shape=shape, spacing=(spacing,) * 3, origin=(2.0, -1.0, 0.5))
    x, y, z = np.meshgrid(*grid.centres(), indexing="ij")
    size = np.array(shape) * spacing
    cx, cy, cz = np.array(grid.origin) + size / 2
    # A block whose one side leans, so that every layer is a little wider than the one above.
    lean = (x - cx - 0.35 * size[0] + 0.45 * (z - cz)) / np.sqrt(1 + 0.45**2)
    cut = ((x - cx) + 1.2 * (y - cy) - 0.6 * size[0]) / np.sqrt(1 + 1.2**2)
    sides = [
        cx - 0.42 * size[0] - x,
        np.abs(y - cy) - 0.42 * size[1],
        np.abs(z - cz) - 0.42 * size[2],
    ]
    distance = np.max([lean, cut, *sides], axis=0)
    share = np.clip((x - grid.origin[0]) / size[0] * 1.6 - 0.3, 0, 1)
    labels = 1 + np.rint(share * STEPS).astype(int)
    if change is not None:
        distance, labels = change(distance, labels, (x, y, z))
    steps = np.clip(np.rint(distance * 16 / spacing), -127, 127).astype(np.int8)
    fill = np.clip(127.5 - 255 * distance / spacing, 0, 255).astype(np.uint8)
    shares = [{"hard": STEPS - k, "soft": k} for k in range(STEPS + 1)]
    palette = [EMPTY, *(Blend.of({n: v for n, v in s.items() if v}) for s in shares)]
    return Part(
        grid=grid,
        resins=(HARD, SOFT),
        palette=tuple(palette),
        labels=np.where(fill > 0, labels, 0).astype(np.uint16),
        distance=steps,
        occupancy=fill,
    )


def stack_of(part, folder, **options):
    """Its stack; no support, so that solid is what the part is."""
    return write_stack(part, STANDARD, folder, **{"support": "none", **options})


def signed(stack):
    """Write every file's own digest and count to the manifest, as a careful forger would."""
    path = stack.folder / "manifest.json"
    plain = json.loads(path.read_text())
    site = float(stack.raster.site_volume)
    for number, entry in enumerate(plain["channels"]):
        data = [stack.path(number, k).read_bytes() for k in range(stack.n_layers)]
        entry["sha256"] = [hashlib.sha256(d).hexdigest() for d in data]
        count = 0
        for k, d in enumerate(data):
            count += int(np.unpackbits(stack.files.decode(number, k, d)).sum())
        entry["sites"], entry["volume_mm3"] = count, count * site
    path.write_text(json.dumps(plain))
    return read_stack(stack.folder)


def redraw(stack, layer, change, *, channels=None, sign=True):
    """Change the images of one layer: ``change(plane) -> plane`` on 0 and 1, ``[row, column]``."""
    bits = stack.files.examine(layer).bits
    width = stack.raster.image_shape[2]
    for c in range(len(stack.channels)) if channels is None else channels:
        plane = np.unpackbits(bits[c], axis=1, count=width)
        bits[c] = np.packbits(change(plane), axis=1)
    data = list(images(stack).encode(bits))
    for c in range(len(stack.channels)):
        stack.path(c, layer).write_bytes(data[c])
    return signed(stack) if sign else read_stack(stack.folder)


def shifted(plane, rows, columns):
    """Moved by whole pixels; what leaves the window is lost."""
    out = np.roll(plane, (rows, columns), (0, 1))
    for n, axis in ((rows, 0), (columns, 1)):
        edge = [slice(None), slice(None)]
        edge[axis] = slice(0, n) if n > 0 else slice(n, None)
        if n:
            out[tuple(edge)] = 0
    return out


def images(stack):
    """The encoder of its files."""
    return ImageFiles(stack.raster, [c.name for c in stack.channels], stack.profile)


def swap(stack, first, second, *, sign=True):
    """Exchange two layers of every channel."""
    for c in range(len(stack.channels)):
        a, b = stack.path(c, first), stack.path(c, second)
        one, two = a.read_bytes(), b.read_bytes()
        a.write_bytes(two)
        b.write_bytes(one)
    return signed(stack) if sign else read_stack(stack.folder)
