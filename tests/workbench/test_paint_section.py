"""Painting on the bench: a stroke is a rule of the design, drawn where the pointer went."""

import numpy as np
import pytest

from voxelmat.errors import InputError
from voxelmat.printing.job import one_part_job
from voxelmat.printing.profile import load_profile
from voxelmat.printing.source import source_of
from voxelmat.workbench.bench import Workbench
from voxelmat.workbench.shown import of_part
from voxelmat.workbench.showndroplets import of_droplets
from voxelmat.workflow.build import build

HARD = {"measured-hard": 1.0}


@pytest.fixture
def bench(small_design):
    bench = Workbench(small_design)
    bench.answers.set_live(False)
    bench.mix.mix(HARD)
    yield bench
    bench.close()


def _blend(part, point):
    return str(part.palette[part.labels[part.grid.index_of(point)]])


def test_a_stroke_lands_where_the_pointer_went(bench):
    grid = bench.part.grid
    section = bench.sections["paint"]
    section.act("radius", 0.8)
    # On the slice z = 4.5, three quarters across and one quarter down, and back along x.
    index = grid.index_of((1.0, 1.0, 4.5))[2]
    section._drawn("z", index, [[0.75, 0.25], [0.25, 0.25]])
    assert not bench.message_is_bad, bench.message
    x, y = (
        grid.origin[a] + s * (grid.upper[a] - grid.origin[a]) for a, s in ((0, 0.75), (1, 0.75))
    )
    assert _blend(bench.part, (x, y, 4.5)) == "measured-hard"
    assert _blend(bench.part, (x, 1.5, 4.5)) != "measured-hard"
    (line,) = [s for s in bench.script if "paint.stroke" in s]
    painted = bench.part.labels.copy()
    bench.undo()
    assert _blend(bench.part, (x, y, 4.5)) != "measured-hard"
    exec(line, {"bench": bench})
    np.testing.assert_array_equal(bench.part.labels, painted)
    assert build(bench.save()).part.digest == bench.part.digest


def test_line_fill_and_replace_by_clicks(bench):
    section = bench.sections["paint"]
    grid = bench.part.grid
    section.act("tool", "line")
    section._drawn("y", 4, [[0.2, 0.5]])
    assert "line ends" in bench.message
    section._drawn("y", 4, [[0.8, 0.5]])
    assert bench.draft.data["layout"][-1]["kind"] == "stroke"
    assert len(bench.draft.data["layout"][-1]["path_mm"]) == 2
    section.act("tool", "fill")
    top = grid.index_of((2.0, 2.0, 5.5))[2]
    section._drawn("z", top, [[0.5, 0.75]])
    assert bench.draft.data["layout"][-1]["kind"] == "fill"
    assert _blend(bench.part, (6.0, 1.5, 5.5)) == "measured-hard"
    bench.mix.mix({"measured-soft": 1.0})
    section.act("tool", "replace")
    section._drawn("z", top, [[0.5, 0.75]])
    assert bench.draft.data["layout"][-1]["old"] == HARD
    assert "measured-hard" not in bench.part.volumes()


def test_a_gradient_between_two_blends(bench):
    bench.mix.mix({"measured-soft": 1.0})
    bench.mix.compare()
    bench.mix.mix(HARD)
    section = bench.sections["paint"]
    section.act("to", "measured-soft")
    section._drawn("z", 3, [[0.1, 0.5], [0.9, 0.5]])
    rule = bench.draft.data["layout"][-1]
    assert (rule["from"], rule["to"]) == (HARD, {"measured-soft": 1.0})


def test_what_paints_nothing_is_said_and_not_kept(bench):
    before = bench.draft.data
    with pytest.raises(InputError, match="covered no voxel"):
        bench.paint.stroke([[90.0, 0.0, 0.0]])
    with pytest.raises(InputError, match="no printed voxel"):
        bench.paint.fill([90.0, 0.0, 0.0])
    with pytest.raises(InputError, match="No voxel holds"):
        bench.paint.replace({"measured-soft": 1.0})
    with pytest.raises(InputError, match="above 0"):
        bench.paint.hold(radius_mm=0.0)
    with pytest.raises(InputError, match="Tools are"):
        bench.paint.hold(tool="spray")
    assert bench.draft.data == before
    assert bench.draft.redo_label == ""


def test_droplets_are_those_of_the_stack(bench):
    job = one_part_job(bench.part, load_profile("invented-coarse"), seed=3)
    shown = of_droplets(job, of_part(bench.part))
    k = shown.counts["z"] // 2
    picture = shown.fields[0].slice_rgb("z", k)
    sites = next(iter(source_of(job).sites(k, k + 1)))[:, : job.window.image_shape[2]]
    codes = job.window.from_image(sites).T[::-1]
    assert picture.shape[:2] == codes.shape
    assert len(np.unique(picture.reshape(-1, 3), axis=0)) == len(np.unique(codes))
    wide, high = shown.size_mm("z")
    assert wide / high == pytest.approx(12 / 8, rel=0.02)  # true aspect, whatever the pixels
    part = of_droplets(job, of_part(bench.part), (0.0, 0.0), 2.0)
    assert part.size_mm("z")[0] == pytest.approx(2.0, abs=0.2)
    bench.paint.show_droplets(2.0)
    assert bench.paint.droplets
    bench.paint.show_voxels()
