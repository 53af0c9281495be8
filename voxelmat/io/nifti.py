"""NIfTI-1: labels with an affine in single precision, out and in (needs nibabel).

The affine is written as both qform and sform in mm. A header extension (code 6, text) keeps the
label table, and with it the grid in double precision.
"""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import numpy as np

from voxelmat.errors import FileFormatError, InputError, ResourceError
from voxelmat.io.atomic import aside
from voxelmat.io.axes import millimetres, straighten
from voxelmat.io.label_table import KEY, LabelTable, labelled, parse_table, read_beside, table_of
from voxelmat.io.volume_limits import check_size, check_whole, needed
from voxelmat.model.volume import Volume

__all__ = ["read_nifti", "write_nifti"]

_MOST = 32767  # voxels along an axis: the format counts in 16 bits
_TEXT = 6  # extension code of plain text
_LABELS = 1002  # intent code: values are labels


def _is_packed(path: Path) -> bool:
    return path.name.lower().endswith(".gz")


def write_nifti(volume: Volume, path: Path) -> None:
    """Write labels as ``.nii`` or ``.nii.gz``.

    Raises
    ------
    InputError
        More than 32767 voxels along an axis, or nibabel is missing.
    ResourceError
        If it cannot be written; nothing is left half there.
    """
    nib = needed("nibabel", "nibabel")
    grid = volume.grid
    if max(grid.shape) > _MOST:
        raise InputError(
            f"NIfTI counts at most {_MOST} voxels along an axis; the part has {grid.shape}. Use "
            "NRRD, VTI or OME-Zarr.",
            file=path.name,
        )
    affine = np.diag([*grid.spacing, 1.0])
    affine[:3, 3] = np.add(grid.origin, np.multiply(grid.spacing, 0.5))
    values = volume.values
    if volume.is_labels and (not values.size or int(values.max()) < 256):
        values = values.astype(np.uint8)
    image = nib.Nifti1Image(values, affine)
    image.set_qform(affine, code=1)
    image.set_sform(affine, code=1)
    head = image.header
    head.set_xyzt_units("mm")
    if volume.is_labels:
        head.set_intent(_LABELS, name="labels")
    head["descrip"] = b"labels of a voxel part, mm"
    text = json.dumps({KEY: table_of(volume)}).encode()
    head.extensions.append(nib.nifti1.Nifti1Extension(_TEXT, text))
    with aside(path) as temporary:
        # The library tells by the name whether to pack.
        named = temporary.with_name(temporary.name + (".nii.gz" if _is_packed(path) else ".nii"))
        try:
            nib.save(image, named)
            named.replace(temporary)
        finally:
            named.unlink(missing_ok=True)


def _shape(head: Any, file: str) -> tuple[int, ...]:
    shape = tuple(int(n) for n in head.get_data_shape())
    if len(shape) > 3 and any(n != 1 for n in shape[3:]):
        raise InputError(
            f"The file holds a series ({shape}); one volume is read. Save one time step or one "
            "component.",
            file=file,
        )
    if len(shape) < 3:
        raise InputError(f"The file holds {len(shape)} axes; a volume has three.", file=file)
    return shape[:3]


def _table(head: Any, file: str) -> LabelTable:
    for extension in head.extensions:
        if extension.get_code() != _TEXT:
            continue
        content = extension.get_content()
        text = content.decode("utf-8", "replace") if isinstance(content, bytes) else str(content)
        if f'"{KEY}"' not in text:
            continue
        try:
            inner = json.loads(text.rstrip("\0"))[KEY]
        except (ValueError, KeyError, RecursionError) as error:
            raise FileFormatError(f"{file}: its label table is damaged ({error}).") from error
        return parse_table(json.dumps(inner), file)
    return LabelTable()


def _placing(image: Any, file: str) -> np.ndarray:
    head = image.header
    if not int(head["sform_code"]) and not int(head["qform_code"]):
        raise InputError(
            "The file does not say where its voxels lie (neither qform nor sform is set). Save it "
            "with an affine.",
            file=file,
        )
    return np.asarray(image.affine, dtype=np.float64)


def read_nifti(path: Path, unit: str | None = None) -> Volume:
    """Read a NIfTI-1 or -2 volume.

    Raises
    ------
    InputError
        Missing unit or affine, oblique axes, a time series, values that are no numbers.
    FileFormatError
        Damaged or cut files, heads that state more than is there or than is read.
    """
    nib = needed("nibabel", "nibabel")
    file = path.name
    try:
        image = nib.load(path)
        head = image.header
        shape = _shape(head, file)
        dtype = head.get_data_dtype()
        if dtype.kind not in "iuf":
            raise InputError(
                f"Values of type {dtype} are not read; save one number a voxel.", file=file
            )
        size = check_size(
            file, shape, max(8, dtype.itemsize) if dtype.kind == "f" else dtype.itemsize
        )
        stored = size // (max(8, dtype.itemsize) if dtype.kind == "f" else dtype.itemsize)
        packed = _is_packed(path)
        check_whole(path, stored * dtype.itemsize, packed=packed)
        code = head.get_xyzt_units()[0]
        factor = millimetres(None if code == "unknown" else code, unit, file)
        affine = _placing(image, file)
        # The head forgets its scaling when it is loaded; the values keep it.
        plain = (image.dataobj.slope, image.dataobj.inter) == (1.0, 0.0)
        values = (
            np.asanyarray(image.dataobj.get_unscaled())
            if plain
            else np.asanyarray(image.dataobj).astype(np.float32)
        )
        table = _table(head, file)
    except (InputError, FileFormatError):
        raise
    except FileNotFoundError as error:
        raise ResourceError(f"{file} cannot be read: there is no such file.") from error
    except MemoryError as error:
        raise ResourceError(f"{file} does not fit into memory.") from error
    except Exception as error:
        raise FileFormatError(
            f"{file} is no whole NIfTI file ({type(error).__name__}: {error})."
        ) from error
    values = values.reshape(shape, order="F")
    turned = straighten(values, factor * affine[:3, :3], factor * affine[:3, 3], file)
    beside = read_beside(path)
    table = table if beside is None else beside
    return labelled(path, turned, table)
