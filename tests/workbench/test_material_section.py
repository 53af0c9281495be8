"""Mixing on the bench: sums kept, hardness met, laid as rules, compared."""

import io

import numpy as np
import pytest
from PIL import Image

from voxelmat.errors import InputError
from voxelmat.material.hardness import modulus_from_shore_a
from voxelmat.model.blend import Blend
from voxelmat.workbench.bench import Workbench
from voxelmat.workbench.material_section import patch_png
from voxelmat.workflow.build import build


@pytest.fixture
def bench(small_design):
    bench = Workbench(small_design)
    bench.answers.set_live(False)
    yield bench
    bench.close()


def test_the_sum_stays_one_whatever_is_moved(bench):
    bench.mix.mix({"measured-soft": 2, "measured-hard": 1, "rigid-tough": 1})
    facts = bench.mix.share("measured-soft", 0.2)
    got = dict(facts.blend.fractions)
    assert got["measured-soft"] == pytest.approx(0.2)
    assert got["measured-hard"] == pytest.approx(got["rigid-tough"])
    assert sum(got.values()) == pytest.approx(1.0)
    with pytest.raises(InputError, match="between 0 and 1"):
        bench.mix.share("measured-soft", 1.2)
    bench.mix.share("measured-soft", 1.0)
    assert bench.mix.blend.is_pure
    got = dict(bench.mix.share("measured-soft", 0.5).blend.fractions)  # the others come back
    assert got == {"measured-hard": 0.25, "measured-soft": 0.5, "rigid-tough": 0.25}
    bench.mix.mix({"measured-soft": 1})
    with pytest.raises(InputError, match="alone"):
        bench.mix.share("measured-soft", 0.5)


def test_figures_are_those_of_the_curve(bench):
    """At a knot of the curve the modulus and its band are the knot's."""
    facts = bench.mix.mix({"measured-soft": 0.5, "measured-hard": 0.5})
    assert pytest.approx(45.0, rel=1e-6) == facts.E
    assert (facts.E_low, facts.E_high) == pytest.approx((43.0, 47.0), rel=0.01)
    assert facts.density == pytest.approx(1.1e-9)
    assert facts.calibrated
    assert not facts.indicative


def test_a_hardness_is_met_or_refused_with_what_can_be(bench):
    facts = bench.mix.of_hardness(60, "measured-soft", "measured-hard")
    assert pytest.approx(modulus_from_shore_a(60).gent, rel=1e-6) == facts.E
    low, high = facts.shore_A
    assert low <= 60 <= high
    with pytest.raises(InputError, match="reach from"):
        bench.mix.of_hardness(5, "measured-soft", "measured-hard")


def test_the_blend_is_laid_by_a_rule_and_taken_back(bench):
    section = bench.sections["mix"]
    section.act("add", "measured-soft")
    section.act("share:measured-hard", 0.4)
    section.act("where", "pad")
    section.act("put", None)
    assert bench.script[-1] == "bench.mix.put_on(where='pad')"
    part = build(bench.design).part
    pad = part.bodies["pad"]
    blends = {str(part.palette[i]) for i in np.unique(part.labels[pad])}
    assert blends == {str(bench.mix.blend)}
    section.act("rule", ["Remove", 0])
    assert not bench.draft.data["layout"]
    bench.undo()
    bench.mix.mix({"measured-soft": 1})
    bench.mix.put_in(0)
    assert bench.draft.data["layout"][0]["blend"] == {"measured-soft": 1.0}
    with pytest.raises(InputError, match="no rule"):
        bench.mix.put_in(3)


def test_a_rule_takes_the_blend_in_hand_by_its_button(bench):
    section = bench.sections["mix"]
    bench.mix.mix({"measured-soft": 1, "measured-hard": 1})
    section.act("where", "pad")
    section.act("put", None)
    bench.mix.share("measured-hard", 0.2)
    section.act("rule", ["Use blend", 0])
    assert bench.draft.data["layout"][0]["blend"]["measured-hard"] == pytest.approx(0.2)
    pictures = [c for c in section.controls() if c["kind"] == "picture"]
    assert any("band" in p["alt"] for p in pictures)


def test_compared_blends_come_back_after_reopening(bench, small_design):
    bench.mix.mix({"measured-soft": 1, "measured-hard": 3})
    bench.mix.compare()
    again = Workbench(small_design)
    assert again.mix.compared == [Blend.of({"measured-soft": 1, "measured-hard": 3})]
    assert again.mix.blend == bench.mix.blend
    tables = [c for c in again.mix.controls() if c["kind"] == "table"]
    assert any("compared" in t["caption"] for t in tables)
    again.close()


def test_the_patch_shows_the_fractions():
    png = patch_png((("a", 0.25), ("b", 0.75)), ("#000000", "#ffffff"))
    shares = (np.asarray(Image.open(io.BytesIO(png)).convert("L")) > 128).mean()
    assert shares == pytest.approx(0.75, abs=0.02)
