"""What the views draw of a result: the deformed part in the colours of a field, and its figures."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.html import table
from voxelmat.model.part import Part
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
from voxelmat.workbench.solid import Solid
from voxelmat.workbench.voxfaces import coarser
from voxelmat.workflow.colours import palette_rgb
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
    result: StaticResult,
    field: str = "displacement",
    factor: float | None = None,
    *,
    below: float | None = None,
    top: float | None = None,
) -> Shown:
    """A solved load case: the deformed part, coloured by a field.

    Parameters
    ----------
    result : StaticResult
    field : str
        One of `FIELDS`, or "material".
    factor : float, optional
        By which displacements are drawn larger; chosen to be visible where left out.
    below : float, optional
        Draw only voxels whose safety (strength over von Mises stress) is below this in full; the
        others are ghosts.
    top : float, optional
        Value of the last colour, so that two pictures have one scale; the field's largest where
        left out.
    """
    part = result.part
    if factor is None:
        factor = magnification(result)
    fields = _fields(result, field, top)
    drawn, step = coarser(part)
    # Nodes of the coarser grid are every n-th of the part's; the last one may lie beyond it.
    pick = [
        np.minimum(np.arange(n + 1) * step, m)
        for n, m in zip(drawn.grid.shape, part.grid.shape, strict=True)
    ]
    only, words = None, ""
    if below is not None:
        weak = _weak(result, below)
        only = weak[::step, ::step, ::step]
        words = (
            f"; in full: safety below {number(below)}, {np.count_nonzero(weak):,} of "
            f"{np.count_nonzero(part.solid):,} voxels"
        )
    solid = Solid(
        part,
        drawn,
        step,
        _paint(result, drawn, step, fields, field),
        shift=factor * result.displacement[np.ix_(*pick)],
        only=only,
    )

    def repaint(paint: str, factor: float | None) -> Shown:
        return of_result(result, paint, factor, below=below)

    made = {f.name: f for f, _ in fields}
    materials = material_field(part)
    legend = materials.legend if field == "material" else fields[0][0].legend
    return Shown(
        title=f"{part.name}, load case {result.load_case.name}",
        html=result_table(result),
        fields=(*made.values(), materials),
        solid=solid,
        legend=legend,
        note=f"deformed {factor:g} times as much as in truth{words}{preview_words(step)}",
        painted=field,
        paints=("material", *FIELDS),
        factor=factor,
        repaint=repaint,
        **slices_of(part),
    )


_Painted = tuple[Field, Callable[[Values], Rgb]]


def _fields(result: StaticResult, field: str, top: float | None) -> list[_Painted]:
    """The field that is asked for first, then those that slices always offer."""
    if field != "material":
        field_values(result, field)  # refuses what is none
    names = dict.fromkeys((field, "displacement", "von Mises stress"))
    made = []
    for name in names:
        if name == "material":
            continue
        kind = FIELDS[name]
        made.append(
            scalar_field(
                name,
                kind.unit,
                kind.values(result),
                result.part.solid,
                kind.cmap,
                kind.decades,
                top if name == field else None,
            )
        )
    return made


def _paint(
    result: StaticResult, drawn: Part, step: int, fields: list[_Painted], field: str
) -> Callable[[NDArray[np.intp]], Rgb]:
    """Colours of the voxels that are drawn."""
    if field == "material":
        colours = palette_rgb(result.part)
        return lambda voxel: colours[drawn.labels[tuple(voxel.T)]]
    shown, colour = fields[0]
    if shown.values is None:
        raise InputError(f"The field '{field}' has no numbers.")
    thin = shown.values[::step, ::step, ::step]
    return lambda voxel: colour(thin[tuple(voxel.T)])


def _weak(result: StaticResult, below: float) -> NDArray[np.bool_]:
    """Voxels whose safety lies below a number; those without a known strength do not."""
    if not below > 0:
        raise InputError(f"The safety must be above 0; got {below}.")
    with np.errstate(invalid="ignore"):
        return np.asarray(safety_factors(result) < below)


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
