"""Spreading packed one-bit planes by a ball: every output plane is an OR of moved rows."""

from numba import njit


@njit(cache=True, nogil=True)
def spread_ball(widened, level, first_row, edge, ring, newest):
    """Add one plane to the output planes that its ball reaches.

    widened u64 [levels, rows, words]: the plane spread along its rows by each of the ball's half
    widths. level i64 [layers, ball_rows]: which of them each row of the ball takes, -1 for none.
    first_row: offset of the ball's first row. edge u64, all ones or 0, lies beyond the rows.
    ring u64 [layers, rows, words] (added to): the output planes, the one that the ball's first
    layer reaches at `newest`, the one for its next layer one before, round the ring.
    """
    layers, ball_rows = level.shape
    rows, words = ring.shape[1], ring.shape[2]
    for d in range(layers):
        slot = (newest - d) % layers
        for y in range(rows):
            for e in range(ball_rows):
                which = level[d, e]
                if which < 0:
                    continue
                at = y + first_row + e
                if 0 <= at < rows:
                    for w in range(words):
                        ring[slot, y, w] |= widened[which, at, w]
                elif edge != 0:
                    for w in range(words):
                        ring[slot, y, w] = edge
