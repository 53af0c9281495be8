"""Estimates: time by occupied swaths, masses and cost by hand, and the forecast's stated error."""

import csv

import numpy as np
import pytest
from print_twins import HARD, SOFT, layered_part

from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.part import Part
from voxelmat.model.process import ProcessFigures
from voxelmat.printing.bill import ASSUMED_DENSITY, write_bom_csv
from voxelmat.printing.estimate import bill_of_materials, estimate, forecast
from voxelmat.printing.occupancy import gather
from voxelmat.printing.profile import load_profile
from voxelmat.printing.stack import write_stack

PROCESS = ProcessFigures(
    swath_mm=1.0, swath_s=(4.0, 6.0), layer_s=(3.0, 5.0), passes_per_layer=2, warm_up_s=100.0,
    cool_down_s=50.0, purge_g={"hard": 5.0, "soft": 2.0}, waste_fraction=0.2,
    droplets_pl={"soft": 15.0}, cost_per_kg={"hard": 100.0, "soft": 200.0, "support": 50.0},
    cost_unit="units", machine_cost_per_h=36.0,
)  # fmt: skip


def two_blocks():
    """A block of hard at the front, a taller one of soft at the back, 4 mm of nothing between."""
    grid = VoxelGrid(shape=(4, 14, 6), spacing=(0.5, 0.5, 0.3), origin=(0.0, 0.0, 0.0))
    labels = np.zeros(grid.shape, dtype=np.uint16)
    labels[:, :2, :3] = 1
    labels[:, 10:, :] = 2
    palette = (EMPTY, Blend.pure("hard"), Blend.pure("soft"))
    return Part(grid=grid, resins=(HARD, SOFT), palette=palette, labels=labels, name="blocks")


def profile(name="invented-standard", **figures):
    base = load_profile(name)
    process = ProcessFigures(**{**PROCESS.as_dict(), **figures})
    return base.replace(process=process)


@pytest.mark.parametrize("name", ["invented-standard", "invented-coarse"])
def test_only_swaths_that_hold_sites_take_time(tmp_path, name):
    # Rows run along tray x in one profile and along tray y in the other.
    stack = write_stack(two_blocks(), profile(name), tmp_path / "s", support="none", threads=1)
    counted = gather(stack)
    solid = [stack.layer(k) > 0 for k in range(stack.n_layers)]
    ny, pitch = stack.shape[1], stack.pitch_mm[1]
    swath = ((np.arange(ny) + 0.5) * pitch // 1.0).astype(int)
    for k, plane in enumerate(solid):
        assert counted.swaths[k] == len(set(swath[plane.any(axis=0)].tolist()))
    assert counted.swaths.max() < swath.max() + 1  # the empty strip between is never driven over
    assert counted.swaths[0] > counted.swaths[-1]
    assert (counted.above == np.any(solid, axis=0)).all()
    found = estimate(stack)
    passes = 2 * int(counted.swaths.sum())
    n = stack.n_layers
    assert found.passes_in_all == passes
    assert found.time_s == (150 + 4 * passes + 3 * n, 150 + 6 * passes + 5 * n)
    assert found.height_mm == pytest.approx(n * stack.pitch_mm[2])
    files = [p for p in stack.folder.rglob("*") if p.is_file() and p.name != "manifest.json"]
    assert found.file_bytes == sum(p.stat().st_size for p in files)


def test_bill_of_materials_by_hand(tmp_path):
    stack = write_stack(two_blocks(), profile(), tmp_path / "s", support="columns", threads=1)
    found = estimate(stack)
    rows = {r.resin: r for r in bill_of_materials(found)}
    hard, soft, support = rows["hard"], rows["soft"], rows["support"]
    grams = stack.volumes_mm3["hard"] * 1.15e-9 * 1e6
    assert hard.printed_g == pytest.approx(grams)
    assert hard.needed_g == pytest.approx(1.2 * grams + 5)
    assert hard.cost == pytest.approx((1.2 * grams + 5) / 1000 * 100)
    assert soft.droplets == pytest.approx(stack.volumes_mm3["soft"] / 15e-6)
    assert hard.droplets == pytest.approx(stack.volumes_mm3["hard"] / 30e-6)
    assert support.role == "support"
    assert support.density_assumed
    assert support.density_g_cm3 == pytest.approx(ASSUMED_DENSITY * 1e9)
    assert support.purge_g == 0
    total = sum(r.cost for r in rows.values())
    assert found.cost == pytest.approx([total + t / 3600 * 36 for t in found.time_s])
    path = write_bom_csv(found.bill, tmp_path / "bom.csv")
    with path.open(newline="", encoding="utf-8") as handle:
        table = list(csv.DictReader(handle))
    assert [r["resin"] for r in table] == list(rows)
    assert float(table[0]["needed_g"]) == pytest.approx(hard.needed_g, rel=1e-5)


def test_a_missing_price_gives_no_total(tmp_path):
    printer = profile(cost_per_kg={"hard": 100.0})
    found = estimate(write_stack(two_blocks(), printer, tmp_path / "s", support="none"))
    assert found.cost is None
    assert found.unpriced == ("soft",)


@pytest.mark.parametrize("outline", ["distance", "voxels"])
@pytest.mark.parametrize("support", ["columns", "none"])
def test_forecast_is_within_its_stated_error(tmp_path, outline, support):
    part = layered_part(outline, shape=(9, 8, 20))
    told = forecast(part, profile(), support=support, layers=24)
    stack = write_stack(part, profile(), tmp_path / "s", support=support, threads=1)
    real = estimate(stack)
    assert told.layers == real.layers
    assert "24 of" in told.basis
    for resin, volume in real.volume_mm3.items():
        assert abs(told.volume_mm3[resin] - volume) <= told.volume_error_mm3[resin] + 1e-9
        # The error that is stated is small enough to be of use.
        assert told.volume_error_mm3[resin] <= 0.2 * volume
    assert told.time_s[0] <= real.time_s[0]
    assert real.time_s[1] <= told.time_s[1]
    assert told.time_s[1] < 1.3 * real.time_s[1]
    images = sum(p.stat().st_size for p in stack.folder.rglob("*.png"))
    assert abs(told.file_bytes - images) <= told.file_bytes_error


def test_forecast_of_every_layer_is_exact(tmp_path):
    part = layered_part("distance", shape=(6, 5, 4))
    told = forecast(part, profile(), layers=10**6)
    stack = write_stack(part, profile(), tmp_path / "s", threads=1)
    real = estimate(stack)
    assert told.volume_mm3 == pytest.approx(real.volume_mm3)
    assert told.time_s == pytest.approx(real.time_s)
    assert told.cost is None
    assert real.unpriced == ("mid",)
