"""Verdicts against solves at the ends of the materials' ranges, and every reason for doubt."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest

from voxelmat.fea.static import solve
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.curve import PairCurve
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.laws import CalibratedCurve, Reuss
from voxelmat.model.loadcase import Force, GroundSpring, LoadCase, Pressure, Support
from voxelmat.model.material import Constant, Material
from voxelmat.model.part import Part
from voxelmat.model.region import Box, FaceRegion
from voxelmat.model.requirement import Requirement
from voxelmat.model.result import Extreme
from voxelmat.workflow.resolve import Resolved, Target
from voxelmat.workflow.spread import spread_of
from voxelmat.workflow.verdicts import safety_factors, verdicts

SOURCE = "made up for this test"
GRID = VoxelGrid(shape=(8, 2, 2), spacing=(1.0, 1.0, 1.0))
LOW, HIGH = FaceRegion(name="low", side="x-"), FaceRegion(name="high", side="x+")


def resin(name, E, spread=1.25, nu=0.0, nu_band=None, strength=40.0, source=SOURCE):
    low, high = nu_band or (nu, nu)
    return Material(
        name=name,
        kind="rigid",
        E=Constant(value=E, low=E / spread, high=E * spread, unit="MPa", source=source),
        nu=Constant(value=nu, low=low, high=high, source=source),
        density=Constant(value=1.0e-9, low=0.9e-9, high=1.2e-9, source=source),
        strength=Constant(value=strength, low=0.8 * strength, high=1.1 * strength, source=source),
    )


def bar(material):
    return Part.uniform(GRID, material)


def pull(force=10.0, **change):
    given = {
        "name": "pull",
        "supports": (Support(region=LOW),),
        "loads": (Force(region=HIGH, vector=(force, 0.0, 0.0)),),
        "temperature_degC": 23.0,
    }
    return LoadCase(**{**given, **change})


def judged(part, requirement, case=None, *, result=None, targets=()):
    case = case or pull()
    result = result or solve(part, case, tol=1e-10)
    resolved = Resolved(
        regions={"low": LOW, "high": HIGH, "mid": Box(name="mid", low=(3, 0, 0), high=(5, 2, 2))},
        load_cases=(case,),
        targets={t.name: t for t in targets},
        requirements=(requirement,),
    )
    (verdict,) = verdicts(resolved, result.part, {case.name: result})
    return verdict


def moves(**limits):
    return Requirement(
        name="r", measure="displacement", load_case="pull", region="high", component="x",
        reduce="mean", **limits,
    )  # fmt: skip


# ------------------------------------------------------------------ values and bands
def test_a_bar_by_hand():
    """F L / (E A) = 10 * 8 / (100 * 4) = 0.2 mm; one modulus, so the band is that of 1 / E."""
    verdict = judged(bar(resin("r", 100.0)), moves(at_most=0.3))
    assert verdict.value == pytest.approx(0.2, rel=1e-6)
    assert verdict.low == pytest.approx(0.16, rel=1e-6)
    assert verdict.high == pytest.approx(0.25, rel=1e-6)
    assert verdict.status == "met"
    assert verdict.margin == pytest.approx(1 / 3, rel=1e-5)
    assert "energy theorems" in verdict.reasons[-1]


@pytest.mark.parametrize(
    ("limit", "status"), [(0.26, "met"), (0.24, "cannot be said"), (0.15, "not met")]
)
def test_three_states(limit, status):
    verdict = judged(bar(resin("r", 100.0)), moves(at_most=limit))
    assert verdict.status == status
    assert ("straddles" in " ".join(verdict.reasons)) == (status == "cannot be said")


def test_other_measures_of_the_bar():
    part = bar(resin("r", 100.0))
    stiff = judged(
        part,
        Requirement(name="s", measure="stiffness", load_case="pull", region="high", at_least=30),
    )
    assert (stiff.value, stiff.low, stiff.high) == pytest.approx((50.0, 40.0, 62.5), rel=1e-6)
    held = judged(
        part,
        Requirement(
            name="h", measure="reaction", load_case="pull", region="low", component="x", at_most=0
        ),
    )
    assert (held.value, held.low, held.high) == pytest.approx((-10.0, -10.0, -10.0), rel=1e-6)
    assert held.status == "met"
    strain = judged(
        part,
        Requirement(
            name="e", measure="largest strain", load_case="pull", region="mid", at_most=0.04
        ),
    )
    assert (strain.value, strain.high) == pytest.approx((0.025, 0.03125), rel=1e-5)
    assert strain.status == "met"
    # 40 MPa over 10 N / 4 mm^2; nu is exact and E moves no stress, so the strength's range alone
    safe = judged(
        part,
        Requirement(name="f", measure="safety factor", load_case="pull", region="mid", at_least=12),
    )
    assert (safe.value, safe.low, safe.high) == pytest.approx((16.0, 12.8, 17.6), rel=1e-4)
    assert safe.status == "met"


def test_mass_and_volume():
    part = bar(resin("r", 100.0))
    mass = judged(part, Requirement(name="m", measure="mass", at_most=0.05))
    assert (mass.value, mass.low, mass.high) == pytest.approx((0.032, 0.0288, 0.0384))
    assert mass.status == "met"
    volume = judged(part, Requirement(name="v", measure="volume", at_least=33.0))
    assert (volume.value, volume.status) == (32.0, "not met")
    none = judged(part, Requirement(name="v", measure="volume", resin="other", at_most=1.0))
    assert (none.value, none.status) == (0.0, "met")


def test_mass_says_what_is_bought_in():
    labels = np.ones(GRID.shape, int)
    labels[:4] = 2
    part = Part(
        grid=GRID,
        resins=(resin("r", 100.0), resin("rod", 1000.0).replace(kind="bought-in")),
        palette=(EMPTY, Blend.pure("r"), Blend.pure("rod")),
        labels=labels,
    )
    mass = judged(part, Requirement(name="m", measure="mass", at_most=0.05))
    assert mass.value == pytest.approx(0.032)
    assert mass.reasons == ("0.0160 g of it are bought in",)
    own = judged(part, Requirement(name="m", measure="mass", resin="r", at_most=0.05))
    assert (own.value, own.reasons) == (pytest.approx(0.016), ())


def test_deflection_error():
    part, nodes = bar(resin("r", 100.0)), np.zeros(GRID.node_shape, bool)
    nodes[8] = True
    wanted = np.where(nodes, 0.2, 0.0)
    target = Target(name="t", region=HIGH, load_case="pull", direction=(1.0, 0.0, 0.0),
                    nodes=nodes, deflection=wanted)  # fmt: skip
    verdict = judged(
        part,
        Requirement(name="d", measure="deflection error", target="t", at_most=0.06),
        targets=[target],
    )
    assert verdict.value == pytest.approx(0.0, abs=1e-7)
    assert verdict.low == pytest.approx(0.0, abs=1e-7)
    assert verdict.high == pytest.approx(0.05, rel=1e-5)  # 0.25 - 0.2
    assert verdict.status == "met"


def mixed_part(nu_band=(0.2, 0.4), law=None):
    rng = np.random.default_rng(3)
    palette = (EMPTY, Blend.pure("a"), Blend.pure("b"), Blend.of({"a": 1, "b": 1}))
    return Part(
        grid=GRID,
        resins=(resin("a", 100.0, 1.5, 0.3, nu_band), resin("b", 20.0, 1.3, 0.35, (0.3, 0.42))),
        palette=palette,
        labels=rng.integers(1, 4, GRID.shape),
        **({"law": law} if law else {}),
    )


def at_the_ends(part, *picks):
    """The part with each resin's E and nu at the given ends of their ranges."""
    made = []
    for material, (e, n) in zip(part.resins, picks, strict=True):
        made.append(
            material.replace(
                E=Constant(value=material.E.band[e]), nu=Constant(value=material.nu.band[n])
            )
        )
    return part.replace(resins=tuple(made))


@pytest.mark.parametrize("law", [None, Reuss()])
def test_the_work_of_the_loads_stays_in_the_band(law):
    """Every corner of the ranges, solved anew, lies within the band from the one solve."""
    part = mixed_part(law=law)
    case = pull(loads=(Pressure(region=HIGH, pressure=-1.0),))
    result = solve(part, case, tol=1e-9)
    spread = spread_of(result)
    assert 1.0 < spread.softer < 2.5
    assert 1.0 < spread.stiffer < 2.5
    for corner in np.ndindex(2, 2, 2, 2):
        other = solve(at_the_ends(part, corner[:2], corner[2:]), case, tol=1e-9)
        ratio = other.energy / result.energy
        assert 1.0 / spread.stiffer <= ratio <= spread.softer


def test_energy_shares_follow_the_springs():
    """A rod and a spring in series: the spring's share does not scale with the modulus."""
    case = pull(
        supports=(Support(region=LOW, displacement=(None, 0.0, 0.0)),),
        loads=(
            Force(region=HIGH, vector=(10.0, 0.0, 0.0)),
            GroundSpring(region=LOW, stiffness=(25.0, 0.0, 0.0)),
        ),
    )
    verdict = judged(bar(resin("r", 100.0)), moves(at_most=1.0), case)
    assert verdict.value == pytest.approx(0.4 + 0.2, rel=1e-6)
    # of 0.6 mm two thirds are the spring's; bounds of the theorems for k = 1.25
    assert verdict.high == pytest.approx(0.4 + 0.25, rel=1e-5)
    assert verdict.low == pytest.approx(0.6 / (2 / 3 + 1.25 / 3), rel=1e-5)
    assert verdict.low < 0.4 + 0.16


def test_a_given_displacement():
    case = pull(
        supports=(
            Support(region=LOW),
            Support(region=HIGH, displacement=(0.2, None, None)),
        ),
        loads=(),
    )
    part = bar(resin("r", 100.0))
    held = judged(
        part,
        Requirement(
            name="h", measure="reaction", load_case="pull", region="high", component="x", at_most=20
        ),
        case,
    )
    assert (held.value, held.low, held.high) == pytest.approx((10.0, 8.0, 12.5), rel=1e-6)
    assert held.status == "met"
    safe = Requirement(
        name="f", measure="safety factor", load_case="pull", region="low", at_least=1
    )
    text = said(judged(part, safe, case))
    assert "displacements are given" in text
    assert "at the support on 'low'" in text
    moved = judged(part, moves(at_most=0.3), case)
    assert moved.status == "cannot be said"
    assert "displacements are given" in moved.reasons[0]
    exact = judged(bar(resin("r", 100.0, 1.0)), moves(at_most=0.3), case)
    assert exact.status == "met"


# ------------------------------------------------------------------ doubts
def said(verdict):
    assert verdict.status == "cannot be said"
    return " | ".join(verdict.reasons)


def test_indicative_data():
    loose = bar(resin("r", 100.0, source="indicative"))
    assert "stiffness of 'r' is indicative" in said(judged(loose, moves(at_most=9.0)))
    mass = Requirement(name="m", measure="mass", at_most=9.0)
    assert "density of 'r' is indicative" in said(judged(loose, mass))
    assert judged(loose, Requirement(name="v", measure="volume", at_most=99)).status == "met"
    weak = resin("r", 100.0)
    weak = weak.replace(strength=Constant(value=40.0))
    safe = Requirement(
        name="f", measure="safety factor", load_case="pull", region="mid", at_least=1
    )
    assert "strength of 'r' is indicative" in said(judged(bar(weak), safe))


def test_a_material_that_carries_nothing_raises_no_doubt():
    """One loose grain of an unproven resin in a bar of a proven one."""
    labels = np.ones(GRID.shape, int)
    labels[0, 0, 0] = 2
    part = Part(
        grid=GRID,
        resins=(resin("r", 100.0), resin("grain", 0.01, source="indicative")),
        palette=(EMPTY, Blend.pure("r"), Blend.pure("grain")),
        labels=labels,
    )
    case = pull(supports=(Support(region=FaceRegion(name="low", side="x-", depth=1.0)),))
    assert judged(part, moves(at_most=9.0), case).status == "met"


def test_blends_by_law_and_by_curve():
    text = said(judged(mixed_part(), moves(at_most=9.0)))
    assert "'a + b' follows the law 'log-mix', not a measured curve" in text
    knots = {"first": "b", "second": "a", "fraction": (0.0, 0.5, 1.0)}
    moduli = {"E": (20.0, 50.0, 100.0), "E_low": (20.0, 40.0, 100.0), "E_high": (20.0, 60.0, 100.0)}
    guess = CalibratedCurve(curves=(PairCurve(**knots, **moduli),))
    assert "blend curve of 'a + b' is indicative" in said(
        judged(mixed_part(law=guess), moves(at_most=9.0))
    )
    proven = CalibratedCurve(curves=(PairCurve(**knots, **moduli, source=SOURCE),))
    assert judged(mixed_part(law=proven), moves(at_most=9.0), pull(1.0)).status == "met"


@pytest.mark.parametrize(
    ("change", "text"),
    [
        ({"temperature_degC": 45.0}, "used at 45.0 degC"),
        ({"duration_s": 3600.0}, "will creep"),
        ({"cycles": 1000}, "Fatigue"),
    ],
)
def test_conditions_outside_the_record(change, text):
    assert text in said(judged(bar(resin("r", 100.0)), moves(at_most=9.0), pull(**change)))


def test_strain_and_rotation_beyond_the_limit():
    part = bar(resin("r", 100.0))
    text = said(judged(part, moves(at_most=9.0), pull(50.0)))  # strain .125
    assert "largest strain" in text
    assert "mm, is beyond 0.100" in text
    result = solve(part, pull(), tol=1e-8)
    turned = dataclasses.replace(
        result, largest_rotation=Extreme(value=0.3, place_mm=(1.0, 2.0, 3.0))
    )
    text = said(judged(part, moves(at_most=9.0), result=turned))
    assert "largest rotation, 0.300 rad at (1.00, 2.00, 3.00) mm" in text


def test_peaks_on_steps_and_at_supports():
    part = bar(resin("r", 100.0, nu=0.3))
    anywhere = Requirement(name="f", measure="safety factor", load_case="pull", region="low",
                           at_least=1.0)  # fmt: skip
    assert "at the support on 'low'" in said(judged(part, anywhere))
    labels = np.ones((8, 5, 2), int)
    labels[3:5, 2] = 0  # a hole, beside which the stress is highest
    step = part.replace(grid=VoxelGrid(shape=labels.shape, spacing=(1.0, 1.0, 1.0)), labels=labels)
    inner = dataclasses.replace(anywhere, region="mid")
    assert "stepped or re-entrant surface" in said(judged(step, inner))


def test_what_cannot_be_computed():
    part = bar(resin("r", 100.0))
    stiff = Requirement(name="s", measure="stiffness", load_case="pull", region="mid", at_least=1.0)
    text = said(judged(part, stiff))
    assert "exactly one force or pressure on 'mid'" in text
    lost = Requirement(name="h", measure="reaction", load_case="pull", region="mid", at_least=1.0)
    assert "no support on 'mid'" in said(judged(part, lost))
    away = dataclasses.replace(moves(at_most=1.0), load_case="push")
    assert "'push' was not solved" in said(judged(part, away))


def test_safety_field():
    part = bar(resin("r", 100.0))
    field = safety_factors(solve(part, pull(), tol=1e-8))
    np.testing.assert_allclose(field, 16.0, rtol=1e-4)
    plain = part.replace(resins=(part.resins[0].replace(strength=None),))
    assert np.isnan(safety_factors(solve(plain, pull(), tol=1e-8))).all()
