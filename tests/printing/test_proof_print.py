"""Proof prints: the very bits of the stack, printable in half an hour, in the right place."""

import numpy as np
import pytest
from print_twins import layered_part

from voxelmat.errors import FileFormatError, InputError, ResourceError
from voxelmat.model.finding import Finding
from voxelmat.model.image import ImageLayout
from voxelmat.model.process import ProcessFigures
from voxelmat.printing.crop import PROOF_LIMIT, proof_crop
from voxelmat.printing.estimate import estimate, forecast_job
from voxelmat.printing.preflight import preflight
from voxelmat.printing.profile import load_profile, shipped_profiles
from voxelmat.printing.proof import worst_place, write_proof
from voxelmat.printing.stack import write_stack
from voxelmat.printing.tray import TrayEntry, lay_out, write_tray

STANDARD = load_profile("invented-standard")
PART = layered_part("distance", shape=(30, 20, 16), pure=True)


def finding(place, severity="warn", **more):
    return Finding(severity=severity, code="thin wall", message="x", place_mm=place, **more)


def bits_of(stack, k):
    width = stack.raster.image_shape[2]
    return np.unpackbits(stack.bits(k), axis=2, count=width)


@pytest.fixture(scope="module", params=[*shipped_profiles(), "indexed", "pages"])
def stack(request, tmp_path_factory):
    if request.param in shipped_profiles():
        profile = load_profile(request.param)
    else:
        kind = {"indexed": "png index", "pages": "tiff pages"}[request.param]
        layout = ImageLayout(kind=kind, layer_order="down", row_order="up", pad_to=(1, 32))
        profile = STANDARD.replace(image=layout, origin_corner="back right")
    folder = tmp_path_factory.mktemp("proof") / "stack"
    return write_stack(PART, profile, folder, orientation=["x 90"], threads=1)


def test_bits_places_and_checks(stack, tmp_path):
    place = (5.0, 1.0, 3.0)
    crop = proof_crop(stack, finding(place), height_mm=1.0, side_mm=2.0)
    proof = write_proof(stack, tmp_path / "proof", crop)
    (k0, k1), (r0, r1), (c0, c1) = crop.layers, crop.rows, crop.columns
    assert proof.raster.image_shape == (k1 - k0, r1 - r0, c1 - c0)
    assert proof.raster.image_shape[1] < stack.raster.image_shape[1]
    for k in range(k0, k1):
        wanted = bits_of(stack, k)[:, r0:r1, c0:c1]
        assert (bits_of(proof, k - k0) == wanted).all()
    # A pixel is at the same place of the part as before, and the crop lies round the finding.
    for at in ((0, 0, 0), (k1 - k0 - 1, r1 - r0 - 1, c1 - c0 - 1)):
        name, here = proof.locate(*at)
        old = stack.locate(at[0] + k0, at[1] + r0, at[2] + c0)
        assert (name, here) == (old[0], pytest.approx(old[1]))
    ends = np.array(
        [proof.locate(0, 0, 0)[1], proof.locate(k1 - k0 - 1, r1 - r0 - 1, c1 - c0 - 1)[1]]
    )
    assert (ends.min(axis=0) <= np.array(place) + 0.1).all()
    assert (ends.max(axis=0) >= np.array(place) - 0.1).all()
    # Where it lies on the tray has not changed, but for the height.
    assert proof.raster.pixel_to_tray(0, 3, 5)[:2] == pytest.approx(
        stack.raster.pixel_to_tray(k0, r0 + 3, c0 + 5)[:2]
    )
    assert proof.raster.pixel_to_tray(0, 0, 0)[2] == pytest.approx(stack.pitch_mm[2] / 2)
    assert proof.manifest["notes"]["proof_of"] == stack.manifest["job"]
    codes = {f.code for f in preflight(proof)}
    assert not codes & {"two materials", "other count", "unreadable layer", "changed layer",
                        "extra files", "volume", "outside the tray"}  # fmt: skip


@pytest.mark.parametrize("name", shipped_profiles())
@pytest.mark.parametrize("swath", [None, 1.5])
def test_half_an_hour_is_kept(tmp_path, name, swath):
    profile = load_profile(name)
    if swath:
        figures = {**profile.process.as_dict(), "swath_mm": swath}
        profile = profile.replace(process=ProcessFigures(**figures))
    # Tall enough for more than 3 mm, and several of the narrow swaths deep.
    tall = layered_part("voxels", shape=(8, 25, 20), spacing=(0.5, 0.5, 0.5), pure=True)
    stack = write_stack(tall, profile, tmp_path / "s", support="none", threads=1)
    crop = proof_crop(stack)
    proof = write_proof(stack, tmp_path / "proof", crop)
    found = estimate(proof)
    printing = found.time_s[1] - found.warm_up_s - found.cool_down_s
    assert printing <= crop.time_s + 1e-6
    assert crop.time_s <= PROOF_LIMIT
    assert crop.layers[0] == 0
    if "cut to" in crop.why:  # no more was cut than had to be
        per = profile.process.passes_per_layer * profile.process.swath_s[1]
        assert crop.time_s + (crop.layers[1]) * per + per + profile.process.layer_s[1] > PROOF_LIMIT
    else:
        assert crop.layers[1] == int(3.0 / stack.pitch_mm[2] + 1e-9)
        assert crop.rows == (0, stack.raster.image_shape[1])


def test_worst_finding_with_a_place_is_taken():
    stop, warn = finding((1, 1, 1), "stop"), finding((2, 2, 2))
    nowhere = Finding(severity="stop", code="a", message="b")
    assert worst_place([warn, nowhere, stop]) is stop
    assert worst_place([nowhere]) is None


def test_what_cannot_be_cut(tmp_path):
    stack = write_stack(PART, STANDARD, tmp_path / "s", support="none", threads=1)
    with pytest.raises(InputError, match="folder of its own"):
        write_proof(stack, tmp_path / "s" / "proof")
    with pytest.raises(InputError, match="no proof print is possible"):
        proof_crop(stack, limit_s=5.0)
    with pytest.raises(InputError, match="above 0"):
        proof_crop(stack, height_mm=0.0)
    with pytest.raises(InputError, match="has no place"):
        proof_crop(stack, Finding(severity="stop", code="a", message="b"))
    (tmp_path / "other").mkdir()
    (tmp_path / "other" / "mine.txt").write_text("x")
    with pytest.raises(ResourceError, match="not a stack"):
        write_proof(stack, tmp_path / "other")
    path = stack.path(0, 3)
    path.write_bytes(path.read_bytes()[:-1])
    with pytest.raises(FileFormatError, match="not the file that was written"):
        write_proof(stack, tmp_path / "proof")
    assert not (tmp_path / "proof").exists()


def test_a_tray_of_several_parts(tmp_path):
    small = layered_part("distance", shape=(8, 6, 8), pure=True)
    entries = [TrayEntry(part=small, name="a", copies=2), TrayEntry(part=PART, name="b")]
    stack = write_tray(lay_out(entries, STANDARD, coupons=False), tmp_path / "s", support="none")
    place = (3.0, 0.0, 1.0)
    crop = proof_crop(stack, finding(place, part="a 2"), height_mm=0.5, side_mm=1.0)
    proof = write_proof(stack, tmp_path / "proof", crop)
    assert [p.name for p in proof.parts] == ["a 2"]
    layers, rows, columns = proof.raster.image_shape
    name, here = proof.locate(layers // 2, rows // 2, columns // 2)
    assert name == "a 2"
    assert here == pytest.approx(place, abs=0.3)
    on_tray = finding(stack.raster.pixel_to_tray(5, 3, 7))
    assert proof_crop(stack, on_tray, height_mm=0.1, side_mm=0.1).layers == (4, 7)
    whole = write_proof(stack, tmp_path / "whole")
    assert {p.name for p in whole.parts} >= {"b"}
    told = forecast_job(lay_out(entries, STANDARD, coupons=False).job(support="none"), layers=40)
    real = estimate(stack)
    for resin, volume in real.volume_mm3.items():
        assert abs(told.volume_mm3[resin] - volume) <= told.volume_error_mm3[resin] + 1e-9
    assert told.time_s[0] <= real.time_s[0]
    assert real.time_s[1] <= told.time_s[1]
