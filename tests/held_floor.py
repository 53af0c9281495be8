"""How the tests of contact hold a part: on the floor, or sliding on some of its sides."""

from voxelmat.model.loadcase import Support
from voxelmat.model.region import FaceRegion

FLOOR = Support(region=FaceRegion(name="floor", side="z-"))


def slides(*sides):
    """Supports that hold nothing but the direction of each side."""
    return tuple(
        Support(
            region=FaceRegion(name=side, side=side),
            displacement=tuple(0.0 if a == side[0] else None for a in "xyz"),
        )
        for side in sides
    )
