"""The material library as plain rows, for a table or JSON."""

from __future__ import annotations

from collections.abc import Mapping

from voxelmat.model.material import Constant, Material
from voxelmat.units import DENSITY_G_CM3

__all__ = ["material_rows"]

Row = dict[str, str | float | None]


def _value(constant: Constant | None, factor: float = 1.0) -> float | None:
    # Twelve digits: what is written in the file, without the dust of the unit change.
    return None if constant is None else float(f"{constant.value * factor:.12g}")


def material_rows(materials: Mapping[str, Material]) -> list[Row]:
    """One row a material, sorted by kind and stiffness.

    Parameters
    ----------
    materials : mapping of str to Material
        For example a `voxelmat.io.materials.Library`.

    Returns
    -------
    list of dict
        Keys ``name, kind, shore_A, E_MPa, E_low_MPa, E_high_MPa, nu, density_g_cm3,
        strength_MPa, elongation_percent, temperature_degC, source``; None where the record has
        no value. ``source`` is that of the stiffness.
    """
    order = sorted(materials.values(), key=lambda m: (m.kind, m.E.value, m.name))
    return [
        {
            "name": m.name,
            "kind": m.kind,
            "shore_A": m.shore_A,
            "E_MPa": _value(m.E),
            "E_low_MPa": m.E.band[0],
            "E_high_MPa": m.E.band[1],
            "nu": _value(m.nu),
            "density_g_cm3": _value(m.density, 1.0 / DENSITY_G_CM3),
            "strength_MPa": _value(m.strength),
            "elongation_percent": _value(m.elongation, 100.0),
            "temperature_degC": m.E.temperature_degC,
            "source": m.E.source,
        }
        for m in order
    ]
