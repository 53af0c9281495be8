"""Writes a part as 3MF with the volumetric extension: outline mesh, labels, fractions, colour.

Namespaces, elements and attributes are those of the 3MF Consortium's open specifications (core,
and volumetric 2022/01 with functions of implicit 2023/12). Everything is sampled nearest and
clamped:

- property ``vm:label``: the label of each voxel;
- composite: for every resin its fraction, in 65535ths, over the base materials; the same as
  properties ``vm:fraction.NAME``, for readers that do not know composites;
- colour: the mixed colour, for viewers.

Sheets are stacked along z. Columns run along x; the lower left corner of a sheet is u = v = 0, as
for textures in the 3MF family (from memory), so the first row of a PNG has the largest y. The
label table is in the model's metadata.
"""

from __future__ import annotations

import io
import json
import zipfile
from collections.abc import Iterator
from pathlib import Path
from typing import Any
from xml.sax.saxutils import escape, quoteattr

import numpy as np
from numpy.typing import NDArray
from PIL import Image

from voxelmat.errors import InputError
from voxelmat.io.atomic import aside
from voxelmat.io.label_surfaces import label_surfaces
from voxelmat.io.label_table import table_of
from voxelmat.model.mesh import TriangleMesh
from voxelmat.model.volume import Volume

__all__ = ["CORE", "IMPLICIT", "OWN", "TABLE", "VOLUMETRIC", "write_3mf"]

CORE = "http://schemas.microsoft.com/3dmanufacturing/core/2015/02"
VOLUMETRIC = "http://schemas.3mf.io/3dmanufacturing/volumetric/2022/01"
IMPLICIT = "http://schemas.3mf.io/3dmanufacturing/implicit/2023/12"
#: Our own namespace, for the name of the label property and of the metadata entry.
OWN = "urn:voxelmat:label"
TABLE = "vm:LabelTable"

_TEXTURE = "http://schemas.microsoft.com/3dmanufacturing/2013/01/3dtexture"
_MODEL = "http://schemas.microsoft.com/3dmanufacturing/2013/01/3dmodel"
_RELATIONS = "http://schemas.openxmlformats.org/package/2006/relationships"
_TYPES = """<?xml version="1.0" encoding="UTF-8"?>
<Types xmlns="http://schemas.openxmlformats.org/package/2006/content-types">
 <Default Extension="rels" ContentType="application/vnd.openxmlformats-package.relationships+xml"/>
 <Default Extension="model" ContentType="application/vnd.ms-package.3dmanufacturing-3dmodel+xml"/>
 <Default Extension="png" ContentType="image/png"/>
</Types>
"""
_MOST_SHEETS = 1 << 15
# A fixed date, so that the same part gives the same bytes.
_DATE = (1980, 1, 1, 0, 0, 0)


class _Stack:
    """One image stack: a table from labels to pixel values, and how it is named."""

    def __init__(self, name: str, table: NDArray[Any]) -> None:
        self.name = name
        self.table = table

    def sheet(self, plane: NDArray[np.uint16]) -> bytes:
        """PNG of one plane of labels ``[i, j]``."""
        pixels = np.ascontiguousarray(self.table[plane].swapaxes(0, 1)[::-1])
        out = io.BytesIO()
        Image.fromarray(pixels).save(out, "PNG", compress_level=3)
        return out.getvalue()

    def path(self, k: int) -> str:
        return f"/3D/volume/{self.name}/{k:05d}.png"


def _stacks(volume: Volume) -> list[_Stack]:
    """Labels, colour, then one a resin."""
    size = max(int(volume.values.max(initial=0)), *volume.blends, *volume.names, 0) + 1
    small = size <= 256
    labels = np.arange(size).astype(np.uint8 if small else np.uint16)
    colour = np.full((size, 3), 255, dtype=np.uint8)
    # Without blends: tones far apart for neighbouring labels.
    colour[1:] = (np.arange(1, size)[:, None] * np.array([67, 139, 211])) % 200 + 28
    fractions: list[_Stack] = []
    light = np.zeros((size, 3))
    for resin in volume.resins:
        share = np.zeros(size)
        for label, blend in volume.blends.items():
            share[label] = blend.fraction(resin.name)
        rgb = [int(resin.colour[a : a + 2], 16) / 255 for a in (1, 3, 5)]
        light += share[:, None] * np.array(rgb) ** 2.2
        if share.any():
            name = f"fraction{len(fractions) + 1}"
            fractions.append(_Stack(name, np.rint(share * 65535).astype(np.uint16)))
    mixed = np.array(sorted(volume.blends), dtype=np.int64)
    if len(mixed):
        colour[mixed] = np.rint(255 * light[mixed] ** (1 / 2.2)).astype(np.uint8)
    return [_Stack("label", labels), _Stack("colour", colour), *fractions]


def _used(volume: Volume) -> list[tuple[str, str]]:
    """Name and colour of the resins that blends name, in the order of their stacks."""
    named = {name for blend in volume.blends.values() for name, _ in blend.fractions}
    return [(m.name, m.colour.upper()) for m in volume.resins if m.name in named]


def _numbers(values: list[float]) -> str:
    return " ".join(repr(float(v)) for v in values)


def _resources(volume: Volume, stacks: list[_Stack]) -> Iterator[str]:
    """Base materials, image stacks, functions and the volume data that binds them."""
    used = _used(volume)
    if used:
        yield '  <basematerials id="1">'
        for name, colour in used:
            yield f'   <base name={quoteattr(name)} displaycolor="{colour}"/>'
        yield "  </basematerials>"
    nx, ny, nz = volume.grid.shape
    for n, stack in enumerate(stacks):
        yield f'  <v:image3d id="{10 + n}" name={quoteattr(stack.name)}>'
        yield f'   <v:imagestack rowcount="{ny}" columncount="{nx}" sheetcount="{nz}">'
        for k in range(nz):
            yield f'    <v:imagesheet path="{stack.path(k)}"/>'
        yield "   </v:imagestack>"
        yield "  </v:image3d>"
    scales = [int(np.iinfo(stacks[0].table.dtype).max)] + [1] * (len(stacks) - 1)
    for n, (stack, scale) in enumerate(zip(stacks, scales, strict=True)):
        yield (
            f'  <v:functionfromimage3d id="{1000 + n}" displayname={quoteattr(stack.name)} '
            f'image3did="{10 + n}" valueoffset="0" valuescale="{scale}" filter="nearest" '
            'tilestyleu="clamp" tilestylev="clamp" tilestylew="clamp"/>'
        )
    size = [n * h for n, h in zip(volume.grid.shape, volume.grid.spacing, strict=True)]
    shift = [-o / s for o, s in zip(volume.grid.origin, size, strict=True)]
    rows = [1 / size[0], 0, 0, 0, 1 / size[1], 0, 0, 0, 1 / size[2], *shift]
    to_uvw = f'transform="{_numbers(rows)}"'
    yield '  <v:volumedata id="2">'
    if used:
        yield '   <v:composite basematerialid="1">'
        for n in range(len(used)):
            yield f'    <v:materialmapping {to_uvw} functionid="{1002 + n}" channel="red"/>'
        yield "   </v:composite>"
    yield f'   <v:color {to_uvw} functionid="1001" channel="color"/>'
    yield f'   <v:property name="vm:label" {to_uvw} functionid="1000" channel="red"/>'
    for n, (name, _) in enumerate(used):
        key = quoteattr(f"vm:fraction.{name}")
        yield f'   <v:property name={key} {to_uvw} functionid="{1002 + n}" channel="red"/>'
    yield "  </v:volumedata>"


def _mesh(mesh: TriangleMesh, name: str) -> Iterator[str]:
    yield f'  <object id="3" type="model" name={quoteattr(name)}>'
    yield '   <mesh v:volumeid="2">'
    yield "    <vertices>"
    for x, y, z in mesh.vertices.tolist():
        yield f'     <vertex x="{x!r}" y="{y!r}" z="{z!r}"/>'
    yield "    </vertices>"
    yield "    <triangles>"
    for a, b, c in mesh.faces.tolist():
        yield f'     <triangle v1="{a}" v2="{b}" v3="{c}"/>'
    yield "    </triangles>"
    yield "   </mesh>"
    yield "  </object>"


def _model(volume: Volume, stacks: list[_Stack], mesh: TriangleMesh) -> Iterator[str]:
    yield '<?xml version="1.0" encoding="UTF-8"?>'
    yield (
        f'<model unit="millimeter" xml:lang="en" xmlns="{CORE}" xmlns:v="{VOLUMETRIC}" '
        f'xmlns:i="{IMPLICIT}" xmlns:vm="{OWN}" requiredextensions="v i">'
    )
    yield f' <metadata name="Title">{escape(volume.name)}</metadata>'
    table = escape(json.dumps(table_of(volume)))
    yield f' <metadata name="{TABLE}" type="xs:string">{table}</metadata>'
    yield " <resources>"
    yield from _resources(volume, stacks)
    yield from _mesh(mesh, volume.name)
    yield " </resources>"
    yield ' <build>\n  <item objectid="3"/>\n </build>'
    yield "</model>"


def _relations(rows: Iterator[tuple[str, str]]) -> Iterator[str]:
    yield f'<?xml version="1.0" encoding="UTF-8"?>\n<Relationships xmlns="{_RELATIONS}">'
    for n, (kind, target) in enumerate(rows):
        yield f' <Relationship Id="rel{n}" Type="{kind}" Target="{target}"/>'
    yield "</Relationships>"


def _member(archive: zipfile.ZipFile, name: str, lines: Iterator[str]) -> None:
    head = zipfile.ZipInfo(name, _DATE)
    head.compress_type = zipfile.ZIP_DEFLATED
    with archive.open(head, "w", force_zip64=True) as handle:
        for line in lines:
            handle.write(f"{line}\n".encode())


def write_3mf(volume: Volume, path: Path) -> None:
    """Write labels, fractions and colour with the outline of all labels.

    Raises
    ------
    InputError
        Grey values, no filled voxel, or more than 32768 planes.
    ResourceError
        If it cannot be written; nothing is left half there.
    """
    if not volume.is_labels:
        raise InputError("Labels are written as 3MF; these are grey values.", file=path.name)
    whole = volume.crisp()
    if not whole.present():
        raise InputError("No voxel is at least half full, so there is no outline.", file=path.name)
    planes = whole.grid.shape[2]
    stacks = _stacks(whole)
    if planes * len(stacks) > _MOST_SHEETS:
        raise InputError(
            f"{planes} planes in {len(stacks)} stacks make more than {_MOST_SHEETS} sheets; use "
            "larger voxels or OME-Zarr.",
            file=path.name,
        )
    filled = Volume(grid=whole.grid, values=(whole.values > 0).astype(np.uint16))
    mesh = label_surfaces(filled).of(1, volume.name)
    sheets = [(s, k) for s in stacks for k in range(planes)]
    with aside(path) as temporary, zipfile.ZipFile(temporary, "w") as archive:
        _member(archive, "[Content_Types].xml", iter([_TYPES]))
        _member(archive, "_rels/.rels", _relations(iter([(_MODEL, "/3D/3dmodel.model")])))
        _member(archive, "3D/3dmodel.model", _model(whole, stacks, mesh))
        _member(
            archive,
            "3D/_rels/3dmodel.model.rels",
            _relations((_TEXTURE, s.path(k)) for s, k in sheets),
        )
        for stack, k in sheets:
            # PNG is packed already.
            head = zipfile.ZipInfo(stack.path(k)[1:], _DATE)
            archive.writestr(head, stack.sheet(whole.values[:, :, k]))
