"""What the estimates of material, time and cost need to know of a printer."""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any, NoReturn

from voxelmat.errors import InputError

__all__ = ["ProcessFigures"]


@dataclass(frozen=True, slots=True, kw_only=True)
class ProcessFigures:
    """What the estimates need. Figures of a resin go by its name.

    Attributes
    ----------
    droplet_pl : float
        Volume of one droplet, picolitres (1 pl = 1e-6 mm^3).
    droplets_pl : mapping
        Of resins whose droplets differ from that.
    swath_mm : float
        Width along y that one pass of the heads covers, mm.
    swath_s, layer_s : tuple of float
        Lowest and highest seconds for one pass, and for what is done once a layer.
    passes_per_layer : int
        How often the heads go over each swath in a layer.
    warm_up_s, cool_down_s : float
        Before the first layer and after the last, seconds.
    purge_g : float or mapping
        Resin that each job spends on flushing its channels, g a resin; or by resin, then 0 for
        those that are not named.
    waste_fraction : float
        Resin lost at the leveller and in cleaning, as a share of what is printed: 0.2 for a
        fifth more.
    cost_per_kg : mapping
        Of each resin whose price is known, in `cost_unit`.
    cost_unit : str
    machine_cost_per_h : float
        In `cost_unit`.

    Raises
    ------
    InputError
        If a figure is out of range, naming its key.
    """

    droplet_pl: float = 30.0
    droplets_pl: Mapping[str, float] = field(default_factory=dict)
    swath_mm: float = 60.0
    swath_s: tuple[float, float] = (4.0, 6.0)
    layer_s: tuple[float, float] = (3.0, 5.0)
    passes_per_layer: int = 1
    warm_up_s: float = 0.0
    cool_down_s: float = 0.0
    purge_g: float | Mapping[str, float] = 0.0
    waste_fraction: float = 0.0
    cost_per_kg: Mapping[str, float] = field(default_factory=dict)
    cost_unit: str = ""
    machine_cost_per_h: float = 0.0

    def __post_init__(self) -> None:
        put = object.__setattr__
        for key in ("droplets_pl", "cost_per_kg"):
            put(self, key, _by_resin(key, getattr(self, key)))
        if not isinstance(self.purge_g, int | float):
            put(self, "purge_g", _by_resin("purge_g", self.purge_g))
        for key in ("swath_s", "layer_s"):
            put(self, key, _span(key, getattr(self, key)))
        for key, value in (("droplet_pl", self.droplet_pl), ("swath_mm", self.swath_mm)):
            if not 0 < _number(key, value) <= 1e6:
                _refuse(key, f"above 0 and at most 1000000; got {value}")
        for name, value in self.droplets_pl.items():
            if not 0 < value <= 1e6:
                _refuse(f"droplets_pl.{name}", f"above 0 and at most 1000000; got {value}")
        if not isinstance(self.passes_per_layer, int) or not 1 <= self.passes_per_layer <= 100:
            _refuse("passes_per_layer", f"a whole number of 1 to 100; got {self.passes_per_layer}")
        for key in ("warm_up_s", "cool_down_s", "machine_cost_per_h"):
            if not 0 <= _number(key, getattr(self, key)) < math.inf:
                _refuse(key, f"at least 0; got {getattr(self, key)}")
        if (
            isinstance(self.purge_g, int | float)
            and not 0 <= _number("purge_g", self.purge_g) < 1e6
        ):
            _refuse("purge_g", f"grams of at least 0; got {self.purge_g}")
        if not 0 <= _number("waste_fraction", self.waste_fraction) <= 10:
            _refuse("waste_fraction", f"a share of 0 to 10; got {self.waste_fraction}")
        if not isinstance(self.cost_unit, str):
            _refuse("cost_unit", f"a text; got {self.cost_unit!r}")
        if (self.cost_per_kg or self.machine_cost_per_h) and not self.cost_unit:
            _refuse("cost_unit", "the unit of the costs that are given")

    @classmethod
    def keys(cls) -> tuple[str, ...]:
        """The keys of `as_dict`."""
        return tuple(f.name for f in dataclasses.fields(cls))

    def droplet_of(self, resin: str) -> float:
        """Volume of one droplet of a resin, picolitres."""
        return self.droplets_pl.get(resin, self.droplet_pl)

    def purge_of(self, resin: str) -> float:
        """Resin spent on flushing in each job, g."""
        if isinstance(self.purge_g, Mapping):
            return self.purge_g.get(resin, 0.0)
        return float(self.purge_g)

    def as_dict(self) -> dict[str, Any]:
        """Plain data that the constructor takes again."""
        plain: dict[str, Any] = {}
        for item in dataclasses.fields(self):
            value = getattr(self, item.name)
            if isinstance(value, Mapping):
                value = dict(value)
            plain[item.name] = list(value) if isinstance(value, tuple) else value
        return plain


def _refuse(key: str, wanted: str) -> NoReturn:
    raise InputError(f"A print profile takes here {wanted}.", key=f"process.{key}")


def _number(key: str, value: object) -> float:
    if isinstance(value, bool) or not isinstance(value, int | float):
        _refuse(key, f"a number; got {value!r}")
    return float(value)


def _span(key: str, value: object) -> tuple[float, float]:
    if not isinstance(value, list | tuple) or len(value) != 2:
        _refuse(key, f"two times in s, [lowest, highest]; got {value!r}")
    low, high = (_number(key, v) for v in value)
    if not 0 <= low <= high < math.inf:
        _refuse(key, f"times in s as [lowest, highest]; got {list(value)}")
    return low, high


def _by_resin(key: str, value: object) -> dict[str, float]:
    if not isinstance(value, Mapping):
        _refuse(key, f"a table of resin = number; got {value!r}")
    table = {str(name): _number(f"{key}.{name}", v) for name, v in value.items()}
    for name, number in table.items():
        if not 0 <= number < math.inf:
            _refuse(f"{key}.{name}", f"a number of at least 0; got {number}")
    return table
