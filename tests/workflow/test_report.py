"""The report page: complete, self-contained, escaped, honest about what is missing."""

from __future__ import annotations

import re
from html.parser import HTMLParser

import numpy as np
import pytest

from voxelmat.errors import ResourceError
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.part import Part
from voxelmat.model.requirement import Requirement, judge
from voxelmat.model.result import Extreme
from voxelmat.workflow.report import STANDING_CAUTIONS, RunData, answer, more, render, write_report
from voxelmat.workflow.report_tables import (
    asked,
    expectation,
    found_table,
    measured,
    percent,
    place,
    resin_table,
    verdict_rows,
)

VOID = {"meta", "link", "img", "br", "input", "hr"}


class Page(HTMLParser):
    """Collects text, images and addresses, and checks that tags nest."""

    def __init__(self, text):
        super().__init__()
        self.open, self.text, self.images, self.addresses = [], "", [], []
        self.feed(text)

    def handle_starttag(self, tag, attrs):
        found = dict(attrs)
        if tag == "img":
            self.images.append(found)
        self.addresses += [v for k, v in attrs if k in ("src", "href", "srcset", "action", "data")]
        if tag not in VOID:
            self.open.append(tag)

    def handle_endtag(self, tag):
        assert self.open.pop() == tag

    def handle_data(self, data):
        if "style" not in self.open:
            self.text += data


@pytest.fixture(scope="module")
def run(made_up):
    return made_up.full_run()


@pytest.fixture(scope="module")
def text(run):
    return render(run)


@pytest.fixture(scope="module")
def page(text):
    return Page(text)


def test_nothing_is_fetched_and_nothing_runs(text, page):
    assert not page.open
    assert all(a.startswith(("data:", "#")) for a in page.addresses)
    assert "<script" not in text
    assert "url(" not in text
    assert "@import" not in text


def test_every_picture_has_words(page):
    assert len(page.images) >= 12
    assert all(len(i["alt"]) > 20 for i in page.images)
    assert all(i["src"].startswith("data:image/png;base64,") for i in page.images)


def test_the_name_is_escaped(page, run, text):
    assert run.name in page.text
    assert "<test>" not in text


def test_the_three_answers_are_words_with_margin_and_reason(page):
    for words in ("met", "not met", "cannot be said"):
        assert words in page.text
    assert "−22 %" in page.text  # 310 against at least 400 N/mm
    assert "+18 %" in page.text  # 98 against at most 120 g
    assert "the modulus of soft-example is indicative" in page.text
    assert "Of 3 requirements: 1 met, 1 not met, 1 cannot be said." in page.text


def test_the_worst_answer_comes_first(run):
    assert [r["status"] for r in verdict_rows(run.verdicts)] == [
        "not met",
        "cannot be said",
        "met",
    ]


def test_cautions_and_what_the_as_printed_solve_checks(page, run):
    flat = " ".join(page.text.split())
    for caution in (*STANDING_CAUTIONS, *run.cautions):
        assert caution in flat
    assert "This checks the stack, not the resin's physics" in flat
    assert "local codes and licensed practice" in flat
    assert "gloves" in flat


def test_figures_stand_with_their_units(page, run):
    flat = " ".join(page.text.split())
    result = run.results["palm"]
    assert f"{result.size.max():.3f} mm" in flat
    assert "volume, mm³" in flat
    assert "42.33 × 84.67 × 30.00 µm" in flat
    assert "3.40 %" in flat  # largest strain
    for name, digest in run.provenance.inputs.items():
        assert name in flat
        assert digest in flat
    assert run.part.digest in flat


def test_every_deformed_picture_says_its_factor(page):
    deformed = [i for i in page.images if i["alt"].startswith("Deformed")]
    assert len(deformed) == 2
    assert all(re.search(r"deformed \d+ times as much as in truth", i["alt"]) for i in deformed)


def test_designed_and_printed_stand_side_by_side(page, run):
    flat = " ".join(page.text.split())
    assert "+2.0 %" in flat
    assert f"{run.as_printed['palm'].size.max():.3f}" in flat


def test_a_bare_part_still_gives_a_page_that_says_what_is_missing(made_up):
    text = render(RunData(name="bare", part=made_up.grip()))
    page = Page(text)
    flat = " ".join(page.text.split())
    for missing in ("a solve", "a stack", "a preflight", "requirements", "as printed"):
        assert missing in flat.split("Not part of this run")[1]
    assert "No requirement was stated" in flat
    assert "nothing was found" not in flat  # no check ran, so none may be claimed


def test_a_single_voxel_and_forty_resins_are_drawn_too(made_up):
    resins = tuple(
        made_up.resin(f"resin-{n}", "rigid", 1e3, 0.3, "#0072B2", 9.0) for n in range(40)
    )
    one = Part.uniform(VoxelGrid(shape=(1, 1, 1), spacing=(1.0, 2.0, 3.0)), resins[0])
    assert "1 hold material" in render(RunData(name="one", part=one))
    labels = np.arange(1, 41, dtype=np.uint16).reshape(10, 4, 1)
    many = Part(
        grid=VoxelGrid(shape=(10, 4, 1), spacing=(1.0, 1.0, 1.0)),
        resins=resins,
        palette=(EMPTY, *(Blend.pure(r.name) for r in resins)),
        labels=labels,
    )
    page = Page(render(RunData(name="many", part=many)))
    assert all(r.name in page.text for r in resins)


def test_a_clean_preflight_is_said_only_where_it_ran(run, made_up):
    clean = RunData(name="x", part=run.part, checked=True)
    assert "nothing was found" in render(clean)


def test_the_same_run_gives_the_same_page_and_tells_its_progress(run, text):
    heard = []

    class Ear:
        def report(self, stage, *, done, total, **figures):
            heard.append((stage, done, total))

    assert render(run, monitor=Ear()) == text
    assert heard[0][1] == 0
    assert heard[-1][1] == heard[-1][2]


def test_invented_data_are_called_so(run, made_up):
    bare = RunData(name="x", part=made_up.grip(6.0), invented=True)
    assert "Invented data." in render(bare)
    assert "Invented data." not in render(RunData(name="x", part=bare.part))


def test_light_dark_and_paper(text):
    assert "prefers-color-scheme: dark" in text
    assert "size:A4" in text


def test_written_aside_and_refused_where_the_folder_is_missing(run, tmp_path):
    run = RunData(name="bare", part=run.part)
    path = write_report(run, tmp_path / "report.html")
    assert path.read_text(encoding="utf-8").startswith("<!DOCTYPE html>")
    assert [p.name for p in tmp_path.iterdir()] == ["report.html"]
    with pytest.raises(ResourceError, match="folder does not exist"):
        write_report(run, tmp_path / "no" / "report.html")


def test_words_for_requirements():
    need = Requirement(
        name="n", measure="displacement", at_least=0.1, at_most=0.2, region="pad",
        load_case="palm", component="z", reduce="mean",
    )  # fmt: skip
    assert measured(need) == "mean displacement along z at 'pad' under 'palm'"
    assert asked(need) == "at least 0.100 mm, at most 0.200 mm"
    mass = Requirement(name="m", measure="mass", at_most=5.0, resin="soft")
    assert measured(mass) == "mass of soft"


def test_percent_and_answers():
    assert percent(-0.2249) == "−22 %"
    assert percent(float("nan")) == "not known"
    one = judge(Requirement(name="m", measure="mass", at_most=5.0), 4.0)
    part = object.__new__(RunData)
    object.__setattr__(part, "verdicts", (one,))
    assert answer(part) == "Of 1 requirement: 1 met."
    need = Requirement(name="m", measure="mass", at_most=5.0)
    open_ones = (judge(need, 4.0, doubts=["x"]), judge(need, 6.0, doubts=["x"]))
    object.__setattr__(part, "verdicts", open_ones)
    assert "1 of 2 values lie within their limits" in more(part)


def test_a_large_compression_is_not_called_small(run, made_up):
    result = made_up.made_up_result(run.part, made_up.palm_case())
    object.__setattr__(result, "largest_strain", Extreme(value=-0.19, place_mm=(1.0, 2.0, 3.0)))
    table = found_table(RunData(name="x", part=run.part, results={"palm": result}), "palm")
    (row,) = [r for r in table.rows if r[0] == "largest strain"]
    assert row[1] == "-19.0 %"
    assert row[2].startswith("above the method's limit of 10.0 %")


def test_small_parts_of_a_vector_are_nothing_and_expectations_are_words():
    assert place((1.8e-9, -150.0, 4e-8)) == "0, -150, 0"
    assert expectation(60.001, 60.0) == "as the design expects (60.0 N)"
    assert expectation(30.0, 60.0) == "the design expects 60.0 N, so this is −50 %"


def test_resin_table_sums_up(run):
    table = resin_table(run.part)
    total = float(table.rows[-1][3])
    assert total == pytest.approx(sum(run.part.volumes().values()), rel=5e-3)
    assert table.rows[0][2] == "indicative"
