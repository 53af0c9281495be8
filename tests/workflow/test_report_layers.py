"""Pictures of layers: thinned ones say so, the window of droplets lies where materials mix."""

from __future__ import annotations

import types

import numpy as np
import pytest

from voxelmat.workflow.summary import _droplets, _layer_picture


class MadeUpStack:
    """Three layers of 2000 x 400 sites; the second is mixed from x = 60 mm to 68 mm."""

    pitch_mm = (0.05, 0.1, 0.03)
    n_layers = 3
    channels = tuple(
        types.SimpleNamespace(role=r) for r in ("model", "model", "support")
    )  # fmt: skip

    def layer(self, k):
        site = np.ones((2000, 400), dtype=np.uint8)
        site[:, :40] = 3
        if k == 1:
            block = np.indices((160, 40)).sum(axis=0) % 2
            site[1280:1440, 120:160] = 1 + block
        return site


def test_the_window_lies_on_the_mixture_at_every_site():
    (picture,) = _droplets(MadeUpStack(), [0, 1, 2])
    assert picture.number == 1
    assert picture.height_mm == pytest.approx(0.045)
    assert picture.corner_mm == pytest.approx((64.0, 12.0))
    assert picture.size_mm == pytest.approx((8.0, 4.0))
    assert picture.codes.shape == (40, 160)
    assert (picture.codes == 2).mean() == 0.5


def test_no_window_where_nothing_is_mixed():
    assert _droplets(MadeUpStack(), [0, 2]) == []


def test_a_wide_layer_is_thinned_and_says_so():
    picture = _layer_picture(MadeUpStack(), 0)
    assert picture.codes.shape == (200, 1000)
    assert picture.note == "One site in 2 is drawn, each way."
    assert picture.size_mm == pytest.approx((100.0, 40.0))
    assert (picture.codes[-1] == 3).all()  # y grows upwards: the support is at the bottom
