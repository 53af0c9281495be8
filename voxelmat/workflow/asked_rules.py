"""From the rules that a design file sets for its optimisation to those of a specification."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np

from voxelmat.errors import InputError
from voxelmat.model.design_rules import (
    ChosenZones,
    LoadScatter,
    MaterialScatter,
    Robust,
    Skin,
    Zones,
)
from voxelmat.topopt.sizes import minimum_from_profile
from voxelmat.workflow.build import Built
from voxelmat.workflow.regions import at_key

__all__ = ["rules_of"]

#: Key in the file to field of `voxelmat.model.design_spec.DesignSpec`.
_PLAIN = {
    "blends": "blends",
    "repeated": "repeated",
    "support_angle_deg": "support_angle",
    "interface_width_mm": "interface_width",
    "blend_radius_mm": "blend_radius",
    "most_resins": "most_resins",
}


def rules_of(built: Built, rules: Mapping[str, Any]) -> dict[str, Any]:
    """Fields of a `DesignSpec` for the rules of a file.

    Raises
    ------
    InputError
        With file and key.
    """
    found = {field: rules[key] for key, field in _PLAIN.items() if key in rules}
    if "extruded" in rules:
        found["extruded"] = tuple(rules["extruded"])
    if "robust" in rules:
        with at_key(built.design, "optimise.robust"):
            found["robust"] = Robust(**rules["robust"])
    if rules.get("size_from_profile") and built.profile is not None:
        with at_key(built.design, "optimise.size_from_profile"):
            found |= minimum_from_profile(
                built.profile,
                margin=found["robust"].margin if "robust" in found else Robust().margin,
                spacing=built.part.grid.spacing,
                pure=rules.get("blends") == "pure",
            )
    if "zone_count" in rules:
        found["zones"] = ChosenZones(count=rules["zone_count"])
    elif "zones" in rules:
        found["zones"] = _zones(built, rules["zones"])
    scatter: list[MaterialScatter | LoadScatter] = []
    if "material_scatter" in rules:
        scatter.append(MaterialScatter(**rules["material_scatter"]))
    if "load_scatter" in rules:
        with at_key(built.design, "optimise.load_scatter"):
            scatter.append(_load_scatter(rules["load_scatter"]))
    if scatter:
        found["scatter"] = tuple(scatter)
    if "skin" in rules:
        said = rules["skin"]
        region = built.regions[said["region"]].voxels(built.part) if "region" in said else None
        found["skin"] = Skin(resin=said["resin"], thickness=said["thickness_mm"], region=region)
    return found


def _load_scatter(said: Mapping[str, Any]) -> LoadScatter:
    names = {"angle_deg": "angle", "offset_mm": "offset"}
    given: dict[str, Any] = {
        names.get(k, k): tuple(v) if isinstance(v, list) else v for k, v in said.items()
    }
    return LoadScatter(**given)


def _zones(built: Built, names: list[str]) -> Zones:
    """Numbered in the order of the file; the first that holds a voxel has it."""
    numbers = np.zeros(built.part.grid.shape, dtype=np.int64, order="F")
    for n, name in enumerate(names, start=1):
        mine = built.regions[name].voxels(built.part) & (numbers == 0)
        if not mine.any():
            raise InputError(
                f"Zone '{name}' holds no voxel that an earlier zone does not hold.",
                file=built.design.file_name,
                key=f"optimise.zones[{n - 1}]",
            )
        numbers[mine] = n
    return Zones(numbers=numbers)
