"""Pictures of the spots that findings name: the place, the colours, the true aspect of pixels."""

import io
import sys
from pathlib import Path

import numpy as np
import pytest
from PIL import Image

from voxelmat.errors import InputError
from voxelmat.model.finding import Finding
from voxelmat.workflow.finding_pictures import finding_picture, finding_pictures

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))
from planted import graded_part, stack_of


@pytest.fixture(scope="module")
def made(tmp_path_factory):
    part = graded_part()
    return part, stack_of(part, tmp_path_factory.mktemp("picture") / "s")


def spot(place, code="specks"):
    return Finding(severity="warn", code=code, message="Something is here.", place_mm=place)


def test_a_picture_shows_ring_and_resins(made):
    part, stack = made
    picture = finding_picture(spot((4.0, 1.5, 2.2)), stack, part)
    seen = np.asarray(Image.open(io.BytesIO(picture.png)).convert("RGB")).astype(int)
    ring = (np.abs(seen - (0xC8, 0x10, 0x2E)).sum(axis=2) < 12).sum()
    assert ring > 300
    assert "specks at 4, 1.5, 2.2 mm" in picture.alt
    assert "Something is here." in picture.caption


def test_places_only_and_a_limit(made):
    part, stack = made
    findings = [spot(None), spot((4.0, 1.5, 2.2)), spot((3.0, 1.5, 2.2)), spot((99.0, 0.0, 0.0))]
    assert list(finding_pictures(findings, stack, part, most=2)) == [1, 2]
    assert finding_picture(findings[3], stack).png  # beyond the window: its nearest rim
    with pytest.raises(InputError, match="no place"):
        finding_picture(findings[0], stack)
