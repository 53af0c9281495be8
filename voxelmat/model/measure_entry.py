"""Measures as a design file names them: which settings each takes, and in which unit it counts."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any, Literal

__all__ = ["MEASURE_KEYS", "WITHOUT_LOADS", "MeasureEntry", "MeasureKeys"]


@dataclass(frozen=True, slots=True)
class MeasureKeys:
    """What one measure takes.

    Attributes
    ----------
    suffix : str
        Of its limits: ``"mm"`` for ``at_most_mm``; empty for a plain number.
    scale : float
        From the file's unit to the one inside.
    needs, may : tuple of str
        Settings that it must and may have.
    """

    suffix: str = ""
    scale: float = 1.0
    needs: tuple[str, ...] = ()
    may: tuple[str, ...] = ()


_STRENGTH = ("region", "load_cases", "resins", "side", "exponent")
_HEAT = ("heat_case", "void_W_mK")

#: By name, in the order in which they are listed to people.
MEASURE_KEYS: Mapping[str, MeasureKeys] = {
    "compliance": MeasureKeys("N_mm", may=("load_cases",)),
    "worst compliance": MeasureKeys("N_mm", may=("load_cases", "exponent")),
    "displacement": MeasureKeys(
        "mm", needs=("region", "direction"), may=("load_case", "of", "exponent")
    ),
    "deflection error": MeasureKeys(needs=("target",), may=("error", "exponent")),
    "mechanism output": MeasureKeys(
        "mm",
        needs=(
            "output", "input", "output_direction", "input_direction",
            "output_stiffness_N_mm", "input_stiffness_N_mm",
        ),
        may=("load_case",),
    ),
    "volume": MeasureKeys("fraction", may=("region",)),
    "mass": MeasureKeys("g", 1e-6, may=("region", "with_kept")),
    "cost": MeasureKeys(may=("region",)),
    "resin volume": MeasureKeys("fraction", needs=("resin",), may=("region",)),
    "centre of mass": MeasureKeys("mm", needs=("axis",), may=("region",)),
    "stress use": MeasureKeys(may=_STRENGTH),
    "stretch use": MeasureKeys(may=_STRENGTH),
    "interface use": MeasureKeys(may=("region", "load_cases", "side", "exponent")),
    "interface area": MeasureKeys("mm2", may=("region",)),
    "perimeter": MeasureKeys("mm2", may=("region",)),
    "frequency": MeasureKeys(
        "Hz", needs=("held_in",), may=("count", "carried", "carried_g", "exponent")
    ),
    "cell modulus": MeasureKeys("MPa", needs=("property",), may=("axes",)),
    "cell poisson": MeasureKeys(needs=("axes",)),
    "cell target": MeasureKeys(needs=("stiffness_MPa",)),
    "peak temperature": MeasureKeys(
        "degC", needs=_HEAT[:1], may=(*_HEAT[1:], "region", "exponent")
    ),
    "mean temperature": MeasureKeys("degC", needs=(*_HEAT[:1], "region"), may=_HEAT[1:]),
    "thermal compliance": MeasureKeys("mW_K", needs=_HEAT[:1], may=_HEAT[1:]),
    "contact peak": MeasureKeys(
        "MPa", needs=("indenter", "load_case"), may=("depth_mm", "force_N", "exponent")
    ),
    "trapped support": MeasureKeys(may=("closed", "exponent")),
    "connected solid": MeasureKeys(may=("held_in", "exponent")),
    "warping": MeasureKeys("mm", needs=("change_K", "region", "held_in"), may=("direction",)),
}  # fmt: skip

#: Measures that no load case has a part in.
WITHOUT_LOADS = frozenset(
    {
        "volume", "mass", "cost", "resin volume", "centre of mass", "interface area", "perimeter",
        "cell modulus", "cell poisson", "cell target", "peak temperature", "mean temperature",
        "thermal compliance", "trapped support",
    }
)  # fmt: skip


@dataclass(frozen=True, slots=True, kw_only=True)
class MeasureEntry:
    """A measure that is made least or greatest, or limited.

    Attributes
    ----------
    measure : str
        A key of `MEASURE_KEYS`.
    sense : str
    value : float or None
        Of a limit, in the unit inside.
    scale : float or None
        By how much a violation counts as all of it, in the unit inside.
    settings : mapping
        Under the keys of the file.
    key : str
        Where it stands in the file.
    """

    measure: str
    sense: Literal["minimise", "maximise", "at_most", "at_least"]
    value: float | None = None
    scale: float | None = None
    settings: Mapping[str, Any] = field(default_factory=dict)
    key: str = "optimise"
