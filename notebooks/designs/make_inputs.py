"""Makes the blocks that the demo designs are cut from. Invented: no product stands behind them."""

from __future__ import annotations

from pathlib import Path

from voxelmat.io.mesh import write_stl
from voxelmat.shape.solid import box

HERE = Path(__file__).parent

#: Name of each block and its edges, mm.
BLOCKS = {
    "mount": (30.0, 30.0, 15.0),
    "bracket": (48.0, 12.0, 24.0),
    "finger": (48.0, 8.0, 24.0),
    "pad": (36.0, 24.0, 10.0),
    "cell": (12.0, 12.0, 12.0),
}


def main() -> None:
    """Write the meshes beside this script."""
    for name, size in BLOCKS.items():
        write_stl(box(size, name=name), HERE / f"{name}.stl")


if __name__ == "__main__":
    main()
