"""What the views draw of a result: the deformed part in the colours of a field, and its figures."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.html import table
from voxelmat.model.result import StaticResult
from voxelmat.units import number, quantity
from voxelmat.workbench.shown import (
    Field,
    Shown,
    material_field,
    preview_words,
    scalar_field,
    slices_of,
)
from voxelmat.workbench.voxfaces import Quads, coarser, cut_mask, quads_of
from voxelmat.workflow.report_fields import magnification
from voxelmat.workflow.verdicts import safety_factors

__all__ = ["FIELDS", "field_values", "of_result", "result_table"]

Values = NDArray[np.floating[Any]]
Rgb = NDArray[np.uint8]
_MOST_UTILISATION = 10.0  # beyond this all colours are the same


class _Kind(NamedTuple):
    """A field: unit, colour map, decades of a logarithmic scale, and how to compute it."""

    unit: str
    cmap: str
    decades: float | None
    values: Callable[[StaticResult], Values]


def _node_to_voxel(values: Values) -> Values:
    """Mean over the eight corners of each voxel."""
    for axis in range(3):
        n = values.shape[axis] - 1
        values = 0.5 * (
            np.take(values, range(n), axis=axis) + np.take(values, range(1, n + 1), axis=axis)
        )
    return values


def _utilisation(result: StaticResult) -> Values:
    factors = safety_factors(result)
    with np.errstate(divide="ignore"):
        used = np.where(np.isfinite(factors), 1.0 / factors, 0.0)
    return np.minimum(used, _MOST_UTILISATION)


def _component(axis: int) -> Callable[[StaticResult], Values]:
    return lambda result: np.abs(_node_to_voxel(result.displacement[..., axis]))


#: Fields of a result by name, without their unit.
FIELDS: Mapping[str, _Kind] = {
    "displacement": _Kind("mm", "viridis", None, lambda r: _node_to_voxel(r.size)),
    "displacement along x": _Kind("mm", "viridis", None, _component(0)),
    "displacement along y": _Kind("mm", "viridis", None, _component(1)),
    "displacement along z": _Kind("mm", "viridis", None, _component(2)),
    "von Mises stress": _Kind("MPa", "cividis", 4.0, lambda r: r.von_mises),
    "stress over strength": _Kind("", "cividis", None, _utilisation),
    "strain energy density": _Kind("mJ/mm^3", "cividis", 4.0, lambda r: r.energy_density),
}


def field_values(result: StaticResult, field: str) -> tuple[Values, str]:
    """A field at the voxel centres, shape (nx, ny, nz), and its unit.

    Raises
    ------
    InputError
        For a field that is not one of `FIELDS`.
    """
    if field not in FIELDS:
        raise InputError(f"There is no field '{field}'; use one of {', '.join(FIELDS)}.")
    return FIELDS[field].values(result), FIELDS[field].unit


def of_result(
    result: StaticResult, field: str = "displacement", factor: float | None = None
) -> Shown:
    """A solved load case: the deformed part, coloured by a field.

    Parameters
    ----------
    result : StaticResult
    field : str
        One of `FIELDS`.
    factor : float, optional
        By which displacements are drawn larger; chosen to be visible where left out.
    """
    part = result.part
    if factor is None:
        factor = magnification(result)
    values, _ = field_values(result, field)
    fields: list[Field] = []
    for name in (field, *(n for n in ("displacement", "von Mises stress") if n != field)):
        kind = FIELDS[name]
        shown, paint = scalar_field(
            name, kind.unit, kind.values(result), part.solid, kind.cmap, kind.decades
        )
        if name == field:
            colour = paint
        fields.append(shown)
    drawn, step = coarser(part)
    # Nodes of the coarser grid are every n-th of the part's; the last one may lie beyond it.
    pick = [
        np.minimum(np.arange(n + 1) * step, m)
        for n, m in zip(drawn.grid.shape, part.grid.shape, strict=True)
    ]
    shift = factor * result.displacement[np.ix_(*pick)]
    thin = values[::step, ::step, ::step]

    def surface(axis: str, share: float) -> tuple[Quads, Rgb]:
        quads = quads_of(drawn, cut_mask(drawn, "xyz".index(axis), share), shift)
        return quads, colour(thin[tuple(quads.voxel.T)])

    return Shown(
        title=f"{part.name}, load case {result.load_case.name}",
        html=result_table(result),
        fields=(*fields, material_field(part)),
        surface=surface,
        legend=fields[0].legend,
        note=f"deformed {factor:g} times as much as in truth{preview_words(step)}",
        **slices_of(part),
    )


def result_table(result: StaticResult) -> str:
    """The figures of a result, with units."""
    size = result.size
    at = np.unravel_index(int(size.argmax()), size.shape)
    place = [float(n[i]) for n, i in zip(result.part.grid.nodes(), at, strict=True)]
    strain, turn = result.largest_strain, result.largest_rotation
    rows = [
        ["largest displacement", quantity(float(size.max()), "mm"), _at(place)],
        *[
            [f"mean movement along {k}", quantity(v, "mm"), ""]
            for k, v in result.load_displacement.items()
        ],
        *[
            [f"reaction of {k}", _vector(v) + " N", "along x, y, z"]
            for k, v in result.reactions.items()
        ],
        ["largest strain", f"{number(100 * strain.value)} %", _at(strain.place_mm)],
        ["largest rotation", f"{number(float(np.degrees(turn.value)))}°", _at(turn.place_mm)],
        ["strain energy", quantity(result.energy, "mJ"), ""],
        [
            "solver",
            f"{result.iterations} iterations",
            f"residual {result.residual:.1e} of the load",
        ],
    ]
    caption = f"{result.part.name}, load case '{result.load_case.name}'"
    notes = "".join(f"<p>{_escape(c)}</p>" for c in result.cautions)
    return table(["figure", "value", "note"], rows, caption) + notes


def _escape(text: str) -> str:
    from html import escape

    return escape(text)


def _vector(values: Any) -> str:
    """Components; what is nothing beside the largest is 0."""
    top = max(abs(v) for v in values)
    return ", ".join(number(v if abs(v) > 1e-6 * top else 0.0) for v in values)


def _at(place: Any) -> str:
    return f"at {_vector(place)} mm"
