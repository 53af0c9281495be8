"""Which pieces are held, and the words for the motions that are not."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from voxelmat.errors import InputError
from voxelmat.fea.held import check_held, free_motions, motion_names
from voxelmat.model.grid import VoxelGrid


def arrays(shape):
    """Solid block with nothing held and nothing loaded; (nz, ny, nx)."""
    nodes = tuple(n + 1 for n in shape)
    grid = VoxelGrid(shape=shape[::-1], spacing=(1.0, 1.0, 1.0), origin=(10.0, 0.0, 0.0))
    return np.ones(shape, bool), np.zeros((3, *nodes), bool), np.zeros(nodes, bool), grid


def test_held_block_keeps_everything():
    solid, held, loaded, grid = arrays((2, 3, 4))
    held[..., 0] = True
    loaded[..., -1] = True
    keep, cautions = check_held(solid, held, loaded, grid)
    assert keep.all()
    assert cautions == []


@pytest.mark.parametrize(
    ("axes", "face", "expected"),
    [
        ((), 0, ["translation along x", "translation along y", "translation along z",
                 "rotation about x", "rotation about y", "rotation about z"]),
        ((0,), 0, ["translation along y", "translation along z", "rotation about x"]),
        ((0, 2), 0, ["translation along y"]),
        ((1, 2), 0, ["translation along x", "rotation about y", "rotation about z"]),
    ],
)  # fmt: skip
def test_motions_of_a_block_held_on_its_x_face(axes, face, expected):
    solid, held, loaded, grid = arrays((3, 3, 4))
    for a in axes:
        held[a, :, :, face] = True
    loaded[..., -1] = True
    with pytest.raises(InputError) as caught:
        check_held(solid, held, loaded, grid)
    message = str(caught.value)
    assert message.startswith(f"The part is not held: {', '.join(expected)}.")
    assert "x 10 to 14, y 0 to 3, z 0 to 3 mm" in message


def test_hinge_lines_and_points():
    solid, held, loaded, grid = arrays((3, 3, 4))
    loaded[..., -1] = True
    held[:, 0, :, 0] = True  # an edge along y
    with pytest.raises(InputError, match="not held: rotation about y"):
        check_held(solid, held, loaded, grid)
    held[:] = False
    held[:, 0, 0, 0] = True
    with pytest.raises(InputError, match="rotation about x, rotation about y, rotation about z"):
        check_held(solid, held, loaded, grid)


def test_skew_hinge_is_named_by_its_direction():
    place = np.array([[0.0, 0, 0], [1, 1, 0]])
    free = free_motions(np.repeat(place, 3, axis=0), np.tile(np.arange(3), 2))
    assert motion_names(free) == ("rotation about the direction (0.71, 0.71, 0.00)",)


@settings(deadline=None, max_examples=25)
@given(st.integers(0, 6), st.integers(0, 10_000))
def test_rank_equals_the_matrix_rank(count, seed):
    rng = np.random.default_rng(seed)
    place = rng.integers(0, 4, (count, 3)).astype(float)
    component = rng.integers(0, 3, count)
    rows = np.zeros((count, 6))
    for n, (p, d) in enumerate(zip(place, component, strict=True)):
        rows[n, d] = 1
        for r in range(3):
            rows[n, 3 + r] = np.cross(np.eye(3)[r], p)[d]
    free = free_motions(place, component)
    assert free.shape[1] == 6 - (np.linalg.matrix_rank(rows) if count else 0)
    assert len(motion_names(free)) == free.shape[1]


def test_loose_unloaded_pieces_are_left_out():
    solid, held, loaded, grid = arrays((4, 4, 9))
    solid[:, :, 4:6] = False
    solid[:3, :, 6:] = False  # a loose plate of 4 x 3 voxels
    held[..., 0] = True
    loaded[2, 2, 3] = True
    keep, cautions = check_held(solid, held, loaded, grid)
    assert keep[:, :, :4].all()
    assert not keep[:, :, 4:].any()
    assert len(cautions) == 1
    assert cautions[0].startswith("1 loose pieces (12 mm³)")
    assert "x 16 to 19, y 0 to 4, z 3 to 4 mm (12 voxels" in cautions[0]


def test_loose_loaded_piece_is_an_error_with_its_place():
    solid, held, loaded, grid = arrays((4, 4, 9))
    solid[:, :, 4:6] = False
    held[..., 0] = True
    loaded[2, 2, 8] = True
    with pytest.raises(InputError, match="loaded piece of the part is not held: translation") as c:
        check_held(solid, held, loaded, grid)
    assert "x 16 to 19" in str(c.value)


def test_pieces_that_touch_at_an_edge_are_not_joined():
    solid, held, loaded, grid = arrays((1, 2, 2))
    solid[0, 0, 1] = solid[0, 1, 0] = False
    held[..., 0] = True
    loaded[:, 2, 2] = True
    with pytest.raises(InputError, match="only along an edge or at a corner"):
        check_held(solid, held, loaded, grid)
    # unloaded, it is left out; a force on the shared edge belongs to the piece that is held
    loaded[:] = False
    loaded[0, 1, 1] = True
    loaded[0, 0, 0] = True
    keep, cautions = check_held(solid, held, loaded, grid)
    assert keep.sum() == 1
    assert "1 loose pieces" in cautions[0]


def test_a_load_where_only_loose_pieces_meet_is_not_lost():
    # a checkerboard beside a held wall: every node of the loose voxels belongs to several
    solid, held, loaded, grid = arrays((5, 5, 6))
    k, j, i = np.indices(solid.shape)
    solid[:] = (i == 0) | ((i + j + k) % 2 == 0)
    held[..., 0] = True
    loaded[2, 2, 4] = True
    with pytest.raises(InputError, match="A loaded piece of the part is not held"):
        check_held(solid, held, loaded, grid)


def test_a_load_on_the_edge_of_two_held_pieces_acts():
    solid, held, loaded, grid = arrays((1, 2, 2))
    solid[0, 0, 1] = solid[0, 1, 0] = False
    held[..., 0] = held[..., -1] = True
    loaded[0, 1, 1] = True
    keep, _ = check_held(solid, held, loaded, grid)
    assert keep.sum() == 2


def test_nothing_acts_and_nothing_there():
    solid, held, loaded, grid = arrays((2, 2, 2))
    held[..., 0] = True
    with pytest.raises(InputError, match="Nothing acts on the part"):
        check_held(solid, held, loaded, grid)
    with pytest.raises(InputError, match="The part is empty"):
        check_held(solid & False, held, loaded, grid)
