"""The test print kit as a part: walls, gaps, struts, holes, text, blends, a peel tab, bars."""

from __future__ import annotations

from voxelmat.errors import InputError, ResourceError
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.material import Material
from voxelmat.model.part import Part
from voxelmat.printing.glyphs import text_cells
from voxelmat.printing.kit_field import KitField
from voxelmat.printing.kit_rows import KitPlan, KitRow

__all__ = ["build_kit"]

_MOST_VOXELS = 150_000_000


class _Builder:
    """Puts one row after the other into the field."""

    def __init__(self, plan: KitPlan, field: KitField, blends: dict[float, int]) -> None:
        self.plan = plan
        self.field = field
        self.blends = blends
        self.c, self.b, self.top = plan.cell_mm, plan.base_mm, plan.base_mm + plan.rise_mm
        self.half = 0.3 * plan.cell_mm
        self.sink = 0.5 * plan.base_mm

    def add(self, row: KitRow) -> None:
        x, y = (self.field.snapped(v, axis) for axis, v in enumerate(row.place_mm))
        getattr(self, f"_{row.kind}")(row, x, y)

    def _block(self, x: float, y: float, label: int = 1) -> None:
        half = self.half
        self.field.box((x - half, y - half, self.sink), (x + half, y + half, self.top), label)

    def _wall(self, row: KitRow, x: float, y: float) -> None:
        half, thin = self.half, row.nominal_mm / 2
        if row.axis == "z":  # a shelf that juts out from a post
            z = self.field.snapped(self.b + 0.7 * self.plan.rise_mm, 2)
            post = x - 0.4 * half
            self.field.box((x - half, y - half, self.sink), (post, y + half, self.top))
            self.field.box((x - half, y - half, z - thin), (x + half, y + half, z + thin))
            return
        dx, dy = (thin, half) if row.axis == "x" else (half, thin)
        self.field.box((x - dx, y - dy, self.sink), (x + dx, y + dy, self.top))

    def _gap(self, row: KitRow, x: float, y: float) -> None:
        self._block(x, y)
        half, thin, far = self.half, row.nominal_mm / 2, 0.45 * self.c
        if row.axis == "z":
            z = self.field.snapped(self.b + 0.5 * self.plan.rise_mm, 2)
            low, high = (x - 0.4 * half, y - far, z - thin), (x + far, y + far, z + thin)
        else:
            deep = self.b + 0.25 * self.plan.rise_mm
            dx, dy = (thin, far) if row.axis == "x" else (far, thin)
            low, high = (x - dx, y - dy, deep), (x + dx, y + dy, self.top + self.c)
        self.field.box(low, high, cut=True)

    def _strut(self, row: KitRow, x: float, y: float) -> None:
        if row.axis == "z":
            self.field.rod(2, (x, y, 0.0), row.nominal_mm, (self.sink, self.top), cut=False)
            return
        axis, half = "xy".index(row.axis), self.half
        z = self.field.snapped(self.b + 0.7 * self.plan.rise_mm, 2)
        for side in (-1, 1):  # two posts that carry it
            low, high = [x - half, y - half, self.sink], [x + half, y + half, self.top]
            middle = (x, y)[axis] + side * 0.8 * half
            low[axis], high[axis] = middle - 0.2 * half, middle + 0.2 * half
            self.field.box(low, high)
        at = (x, y)[axis]
        ends = (at - 0.8 * half, at + 0.8 * half)
        self.field.rod(axis, (x, y, z), row.nominal_mm, ends, cut=False)

    def _hole(self, row: KitRow, x: float, y: float) -> None:
        self._block(x, y)
        axis = "xyz".index(row.axis)
        z = self.field.snapped(self.b + 0.5 * self.plan.rise_mm, 2)
        at = (x, y, z)[axis]
        ends = (
            (-self.c, self.top + self.c) if axis == 2 else (at - 0.45 * self.c, at + 0.45 * self.c)
        )
        self.field.rod(axis, (x, y, z), row.nominal_mm, ends, cut=True)

    def _text(self, row: KitRow, x: float, y: float) -> None:
        cells = text_cells(("E",))
        size = row.nominal_mm
        corner = (x - cells.shape[0] * size / 2, y - cells.shape[1] * size / 2)
        self.field.cells(cells, size, corner, (self.sink, self.b + 0.3 * self.plan.rise_mm))

    def _blend(self, row: KitRow, x: float, y: float) -> None:
        self._block(x, y, self.blends[row.nominal_mm])

    def _peel(self, row: KitRow, x: float, y: float) -> None:
        """A soft strip on a rigid pad; its free end, to pull at, juts out over the pad."""
        c = self.c
        level = self.b + 0.6 * self.plan.rise_mm
        low = x - 0.8 * c
        self.field.box((low, y - 0.6 * c, self.sink), (x + 0.2 * c, y + 0.6 * c, level))
        strip = (low, y - 0.4 * c, level - 0.5 * self.field.grid.spacing[0])
        self.field.box(strip, (x + 0.8 * c, y + 0.4 * c, self.top), self.blends[1.0])

    def _dimension(self, row: KitRow, x: float, y: float) -> None:
        """The bars along x have the heights of the steps; rows of z are these very bars."""
        if row.axis == "z":
            return
        x, y = row.place_mm
        half, wide = row.nominal_mm / 2, 0.2 * self.c
        dx, dy = (half, wide) if row.axis == "x" else (wide, half)
        top = self.top
        if row.axis == "x":
            top = next(
                r.nominal_mm for r in self.plan.rows if r.axis == "z" and r.place_mm == row.place_mm
            )
        self.field.box((x - dx, y - dy, self.sink), (x + dx, y + dy, top))


def build_kit(plan: KitPlan, rigid: Material, soft: Material | None = None) -> Part:
    """The kit as a part with a true signed distance.

    Parameters
    ----------
    plan : KitPlan
    rigid : Material
    soft : Material, optional
        For blends and the peel tab; needed where the plan has them.

    Raises
    ------
    InputError
        If a soft resin is needed and not given, or is the rigid one.
    ResourceError
        If the smallest feature asks for more voxels than is sensible.
    """
    shares = sorted({r.nominal_mm for r in plan.rows if r.kind == "blend"})
    if shares and (soft is None or soft.name == rigid.name):
        raise InputError("This kit needs two resins, for its blends and its peel tab.")
    h = min(plan.smallest_mm, 0.5)
    margin = 2 * h
    shape = [int((s + 2 * margin) / h + 0.999) for s in plan.size_mm]
    if shape[0] * shape[1] * shape[2] > _MOST_VOXELS:
        raise ResourceError(
            f"The kit would take {' x '.join(map(str, shape))} voxels of {h:.3g} mm; its smallest "
            "features are too small beside its largest. Give it a larger scale."
        )
    grid = VoxelGrid(
        shape=(shape[0], shape[1], shape[2]), spacing=(h, h, h), origin=(-margin, -margin, -margin)
    )
    field = KitField(grid)
    palette, blends = [EMPTY, Blend.pure(rigid.name)], {0.0: 1}
    for share in shares:
        if share > 0 and soft is not None:
            blends[share] = len(palette)
            palette.append(Blend.of({rigid.name: 1 - share, soft.name: share}))
    x, y, _ = plan.size_mm
    field.box((0.0, 0.0, 0.0), (x, y, plan.base_mm))
    builder = _Builder(plan, field, blends)
    for row in sorted(plan.rows, key=lambda r: r.kind in ("gap", "hole")):  # cuts come last
        builder.add(row)
    occupancy, steps = field.occupancy(), field.steps()
    labels = field.label
    labels[(occupancy == 0) & (steps > 0)] = 0
    return Part(
        grid=grid,
        resins=(rigid,) if soft is None or not shares else (rigid, soft),
        palette=tuple(palette),
        labels=labels,
        distance=steps,
        occupancy=occupancy,
        name="test-kit",
    )
