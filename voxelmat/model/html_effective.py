"""Tables that effective constants and computed blends show of themselves in a notebook."""

from __future__ import annotations

from html import escape
from typing import TYPE_CHECKING

from voxelmat.model.html import table
from voxelmat.units import number

if TYPE_CHECKING:
    from voxelmat.model.blend_estimate import BlendEstimate
    from voxelmat.model.effective import EffectiveConstants

__all__ = ["blend_table", "effective_table"]

# g/cm^3 in 1 tonne/mm^3.
_DENSITY = 1e9


def _engineering(found: EffectiveConstants) -> list[list[str]]:
    if not found.is_stiff:
        return [["engineering constants", "none: the cell does not resist every strain", ""]]
    E, G, nu = found.young, found.shear, found.poisson
    rows = [[f"E {a}", number(float(E[i])), "MPa"] for i, a in enumerate("xyz")]
    rows += [[f"G {a}", number(float(G[i])), "MPa"] for i, a in enumerate(("xy", "xz", "yz"))]
    pairs = [(a, b) for a in range(3) for b in range(3) if a != b]
    rows += [[f"nu {'xyz'[a]}{'xyz'[b]}", number(float(nu[a, b])), ""] for a, b in pairs]
    rows.append(["universal anisotropy", number(found.universal_anisotropy), ""])
    return rows


def effective_table(found: EffectiveConstants) -> str:
    """Stiffness, engineering constants and nearest symmetries."""
    from voxelmat.model.effective import ORDER

    C = found.stiffness
    matrix = [[o, *(number(float(v), 4) for v in C[i])] for i, o in enumerate(ORDER)]
    n = found.shape
    caption = f"stiffness, MPa ({n[0]} x {n[1]} x {n[2]} elements {found.element})"
    iso, cubic = found.isotropic, found.cubic
    rows = _engineering(found)
    if found.expansion is not None:
        rows += [
            [f"expansion {o}", number(1e6 * float(a)), "1e-6/K"]
            for o, a in zip(ORDER, found.expansion, strict=True)
        ]
    rows += [
        ["density", number(_DENSITY * found.density), "g/cm³"],
        ["nearest isotropic K", number(iso.bulk), "MPa"],
        ["nearest isotropic G", number(iso.shear), "MPa"],
        ["distance from isotropic", number(100 * iso.distance), "%"],
        ["nearest cubic C11", number(cubic.C11), "MPa"],
        ["nearest cubic C12", number(cubic.C12), "MPa"],
        ["nearest cubic C44", number(cubic.C44), "MPa"],
        ["distance from cubic", number(100 * cubic.distance), "%"],
        ["error of symmetry", number(found.symmetry_error), ""],
    ]
    if cubic.C11 > cubic.C12:
        rows.insert(-2, ["Zener's ratio", number(cubic.zener), ""])
    notes = "".join(f"<p>{escape(c)}</p>" for c in found.cautions)
    return table(["", *ORDER], matrix, caption) + table(["constant", "value", "unit"], rows) + notes


def _within(held: bool) -> str:
    return "within" if held else "outside"


def blend_table(found: BlendEstimate) -> str:
    """Moduli by refinement, their limit and the bounds."""
    rows = [
        [f"{r} elements a droplet", number(k, 4), number(g, 4), number(100 * d), _within(held)]
        for r, k, g, d, held in zip(
            found.refinements, found.bulk, found.shear, found.distance, found.raw_held, strict=True
        )
    ]
    k, g = found.bulk_limit, found.shear_limit
    rows.append(
        [
            "extrapolated",
            f"{number(k.value, 4)} ± {number(k.uncertainty, 2)}",
            f"{number(g.value, 4)} ± {number(g.uncertainty, 2)}",
            "",
            _within(found.held),
        ]
    )
    for name, n in (("lower bound", 0), ("upper bound", 1)):
        rows.append([name, number(found.bulk_range[n], 4), number(found.shear_range[n], 4), "", ""])
    head = ["", "K, MPa", "G, MPa", "from isotropic, %", "Hashin-Shtrikman bounds"]
    caption = f"{found.placed}: {found.sites}³ droplets, element {found.element}"
    return table(head, rows, caption) + "".join(f"<p>{escape(c)}</p>" for c in found.cautions)
