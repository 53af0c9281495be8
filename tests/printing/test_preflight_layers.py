"""Preflight on a graded part: nothing in a sound stack; every planted fault of whole layers found.

Each fault is planted twice: as a changed file, and with a manifest that was signed again, where
only the images themselves can tell.
"""

import itertools
import json

import numpy as np
import pytest
from planted import STANDARD, graded_part, redraw, shifted, signed, stack_of, swap

from voxelmat.printing.preflight import preflight
from voxelmat.printing.readback import read_stack
from voxelmat.printing.stack import write_stack


@pytest.fixture(scope="module")
def part():
    return graded_part()


@pytest.fixture
def stack(part, tmp_path):
    return stack_of(part, tmp_path / "s")


def codes(findings):
    return {f.code for f in findings}


def only(findings, code):
    found = [f for f in findings if f.code == code]
    assert found, f"{code} not among {[(f.code, f.message) for f in findings]}"
    return found[0]


@pytest.mark.parametrize("orientation", [(), ("x 90",), ("y 90", "z 90")])
def test_nothing_is_found_on_a_sound_graded_part(part, tmp_path, orientation):
    stack = stack_of(part, tmp_path / "s", orientation=orientation)
    assert preflight(stack, part, STANDARD) == []
    assert preflight(stack) == []


def test_nothing_is_found_where_the_outline_is_compensated_for_bias(part, tmp_path):
    profile = STANDARD.replace(bias=(0.05, 0.04, 0.02))
    stack = write_stack(part, profile, tmp_path / "s", support="none")
    found = [f for f in preflight(stack, part, profile) if f.code != "volume"]
    assert found == []


LAYER = 60


@pytest.mark.parametrize(
    ("change", "words"),
    [
        (lambda p: p * 0, "is blank"),
        (lambda p: p[:, ::-1], "mirrored along its columns"),
        (lambda p: p[::-1], "mirrored along its rows"),
        (lambda p: p[::-1, ::-1], "180 degrees"),
    ],
)
def test_a_layer_missing_or_mirrored_is_found_with_and_without_the_design(
    part, stack, change, words
):
    stack = redraw(stack, LAYER, change)
    with_design = only(preflight(stack, part), "wrong layer")
    assert words in with_design.message
    assert f"Layer {LAYER} " in with_design.message
    alone = only(preflight(stack), "odd layer")
    assert words in alone.message
    assert alone.severity == with_design.severity == "stop"
    assert f"Layer {LAYER} " in alone.message


def test_a_layer_that_ends_early(part, stack):
    def cut(plane):
        plane[plane.shape[0] // 2 :] = 0
        return plane

    rows = stack.raster.image_shape[1]
    stack = redraw(stack, LAYER, cut)
    found = preflight(stack, part)
    assert f"ends after row {rows // 2 - 1}" in only(found, "odd layer").message
    assert "wrong layer" in codes(found)


def test_two_neighbours_swapped(stack, part):
    solid = [np.unpackbits(stack.solid(k)) for k in range(stack.n_layers)]
    changes = [int((a != b).sum()) for a, b in itertools.pairwise(solid)]
    first = 20 + int(np.argmax(changes[20:-20]))
    swapped = swap(stack, first, first + 1)
    found = only(preflight(swapped), "layers swapped")
    assert f"Layers {first} and {first + 1} " in found.message


def test_a_swap_is_named_by_its_digest(stack):
    swapped = swap(stack, LAYER, LAYER + 7, sign=False)
    message = only(preflight(swapped), "changed layer").message
    assert f"it is the image of layer {LAYER + 7}" in message
    assert f"it is the image of layer {LAYER}" in message


@pytest.mark.parametrize(
    ("change", "words"),
    [
        (lambda p: p[:, ::-1], "it is mirrored along its columns"),
        (lambda p: p[::-1], "it is mirrored along its rows"),
        (lambda p: 1 - p, "its polarity is inverted"),
        (lambda p: np.roll(p, 1, axis=1), "it is shifted by one column"),
        (lambda p: np.roll(p, -1, axis=0), "it is shifted by one row"),
    ],
)
def test_what_happened_to_a_file_is_named(stack, change, words):
    changed = redraw(stack, LAYER, change, channels=[0], sign=False)
    assert words in only(preflight(changed), "changed layer").message


def test_a_truncated_file(stack):
    path = stack.path(0, LAYER)
    path.write_bytes(path.read_bytes()[:-40])
    found = preflight(stack)
    assert "it is cut off or damaged" in only(found, "changed layer").message
    assert "unreadable layer" in codes(found)


def test_a_whole_stack_mirrored(part, stack):
    for k in range(stack.n_layers):
        stack = redraw(stack, k, lambda p: p[:, ::-1], sign=False)
    found = preflight(signed(stack), part)
    assert "mirrored along its columns" in only(found, "mirrored stack").message


@pytest.mark.parametrize(("rows", "columns"), [(0, 1), (-1, 0)])
def test_a_whole_stack_shifted_by_one_pixel(part, stack, rows, columns):
    for k in range(stack.n_layers):
        stack = redraw(stack, k, lambda p: shifted(p, rows, columns), sign=False)
    found = only(preflight(signed(stack), part), "stack shifted")
    assert f"shifted by {columns} columns, {rows} rows and 0 layers" in found.message


def test_one_resin_moved_away_from_another_leaves_no_conflict_but_is_found(tmp_path):
    def halves(distance, labels, at):
        return distance, np.where(at[0] < 5.0, 1, 9)

    part = graded_part(change=halves)
    stack = stack_of(part, tmp_path / "s")
    assert preflight(stack, part) == []
    for k in range(stack.n_layers):
        stack = redraw(stack, k, lambda p: shifted(p, 0, 1), channels=[1], sign=False)
    stack = signed(stack)
    alone = preflight(stack)
    assert "two materials" not in codes(alone)
    message = only(alone, "channel shifted").message  # which of the two moved cannot be told
    assert "'m1' are moved by 1 columns and 0 rows" in message
    found = [f for f in preflight(stack, part) if f.code == "channel shifted"]
    assert any("The outline of 'soft' is shifted by 1 columns" in f.message for f in found)


def test_a_manifest_that_contradicts_itself_or_the_design(part, stack):
    path = stack.folder / "manifest.json"
    plain = json.loads(path.read_text())
    plain["channels"][0]["volume_mm3"] *= 1.01
    path.write_text(json.dumps(plain))
    found = preflight(read_stack(stack.folder), part)
    assert "manifest disagrees" in codes(found)
    other = graded_part(change=lambda d, n, at: (d + 0.02, n))
    assert "other design" in codes(preflight(stack, other))


def test_resins_and_channels_that_do_not_match(part, stack):
    loaded = STANDARD.replace(channels={**STANDARD.channels, "m1": "soft"})
    assert "other resin loaded" in codes(preflight(stack, profile=loaded))
    few = {c: r for c, r in STANDARD.channels.items() if c != "m2"}
    assert "missing channel" in codes(preflight(stack, profile=STANDARD.replace(channels=few)))
    hard = graded_part(change=lambda d, n, at: (d, n * 0 + 1))
    assert "unknown resin" in codes(preflight(stack, hard))
    plain = json.loads((stack.folder / "manifest.json").read_text())
    plain["channels"][1]["resin"] = "mid"
    (stack.folder / "manifest.json").write_text(json.dumps(plain))
    assert "missing channel" in codes(preflight(read_stack(stack.folder), part))


def test_two_resins_exchanged(part, stack):
    path = stack.folder / "manifest.json"
    plain = json.loads(path.read_text())
    one, two = plain["channels"][:2]
    one["resin"], two["resin"] = two["resin"], one["resin"]
    path.write_text(json.dumps(plain))
    found = preflight(read_stack(stack.folder), part)
    assert "wrong layer" in codes(found)
