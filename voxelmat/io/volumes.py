"""One way out to every open volume format and one way in, chosen by the ending of the file."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from pathlib import Path

from voxelmat.errors import InputError
from voxelmat.io.label_table import write_beside
from voxelmat.model.blend import Blend
from voxelmat.model.laws import BlendLaw, LogMix
from voxelmat.model.material import Material
from voxelmat.model.part import Part
from voxelmat.model.volume import Volume

__all__ = ["FORMATS", "Exported", "export", "import_volume", "volume_to_part"]

#: Formats and the endings that they are known by.
FORMATS: Mapping[str, tuple[str, ...]] = {
    "3mf": (".3mf",),
    "vti": (".vti",),
    "nrrd": (".nrrd",),
    "nifti": (".nii", ".nii.gz"),
    "ome-zarr": (".ome.zarr", ".zarr"),
    "stl": (".stl",),
}
_CRISP = (
    "{} holds one label a voxel: voxels at least half full are taken as full, the others as empty, "
    "and the signed distance is left out. VTI and OME-Zarr keep both."
)


@dataclass(frozen=True, slots=True, kw_only=True)
class Exported:
    """What was written.

    Attributes
    ----------
    format : str
        One of `FORMATS`.
    files : tuple of Path
        The volume, then its table of labels; or a surface a label.
    notes : tuple of str
        What the format does not hold, in words.
    """

    format: str
    files: tuple[Path, ...]
    notes: tuple[str, ...] = ()


def _format(path: Path, given: str | None) -> str:
    if given is not None:
        if given not in FORMATS:
            raise InputError(f"There is no format '{given}'; there are {', '.join(FORMATS)}.")
        return given
    name = path.name.lower()
    for key, endings in FORMATS.items():
        if name.endswith(endings):
            return key
    known = ", ".join(e for endings in FORMATS.values() for e in endings)
    raise InputError(f"The ending does not say the format; use one of {known}.", file=path.name)


def _lost(part: Part) -> list[str]:
    """What no format keeps of a part."""
    lost = []
    if part.bodies:
        lost.append("Which body owns a voxel is not kept, only its material.")
    if part.law != LogMix():
        lost.append(f"The blend law ({part.law.key}) is not kept; give it when reading.")
    return lost


def export(
    source: Part | Volume,
    path: str | Path,
    format: str | None = None,  # noqa: A002
    *,
    smooth: int = 0,
) -> Exported:
    """Write a part or a volume in an open format, in mm.

    Parameters
    ----------
    source : Part or Volume
    path : path
        ``.3mf``, ``.vti``, ``.nrrd``, ``.nii``, ``.nii.gz``, ``.ome.zarr`` or ``.stl`` (one file a
        label then: ``stem.LABEL-name.stl``).
    format : str, optional
        One of `FORMATS`; told by the ending where left out.
    smooth : int
        For STL: rounds of smoothing of the shared surfaces.

    Returns
    -------
    Exported
        The files, and what the format does not hold.

    Raises
    ------
    InputError
        Unknown format or ending, a missing optional package, more than a format can count.
    ResourceError
        If it cannot be written; no file is left half there.
    """
    path = Path(path)
    kind = _format(path, format)
    volume = source if isinstance(source, Volume) else Volume.from_part(source)
    notes: list[str] = []
    if kind == "stl":
        from voxelmat.io.mesh_out import write_label_stl

        files, said = write_label_stl(volume, path, smooth=smooth)
        return Exported(format=kind, files=files, notes=said)
    if kind in ("3mf", "nrrd", "nifti"):
        plain = volume.crisp()
        if plain is not volume:
            notes.append(_CRISP.format({"3mf": "3MF", "nrrd": "NRRD", "nifti": "NIfTI"}[kind]))
        volume = plain
    if kind == "vti":
        from voxelmat.io.vti import write_vti

        write_vti(volume, path)
        notes.append("VTI has no place for the unit of length; the label table says mm.")
    elif kind == "nrrd":
        from voxelmat.io.nrrd import write_nrrd

        write_nrrd(volume, path)
    elif kind == "nifti":
        from voxelmat.io.nifti import write_nifti

        write_nifti(volume, path)
        notes.append("NIfTI holds positions in single precision; the label table keeps all digits.")
    elif kind == "ome-zarr":
        from voxelmat.io.omezarr import write_omezarr

        write_omezarr(volume, path)
        notes.append("The image's fractions are 255ths; the label table keeps them exactly.")
    else:
        from voxelmat.io.volume3mf import write_3mf

        write_3mf(volume, path)
        notes.append("The composite's fractions are 65535ths; the label table keeps them exactly.")
    if isinstance(source, Part):
        notes += _lost(source)
    return Exported(format=kind, files=(path, write_beside(volume, path)), notes=tuple(notes))


def import_volume(
    path: str | Path,
    *,
    unit: str | None = None,
    field: str | None = None,
    channel: int | None = None,
    format: str | None = None,  # noqa: A002
) -> Volume:
    """Read a volume file.

    Parameters
    ----------
    path : path
        ``.3mf`` with a volume, ``.vti``, ``.nrrd``, ``.nii``, ``.nii.gz`` or ``.ome.zarr``.
    unit : str, optional
        Unit of length, for files that do not say it.
    field : str, optional
        Which array (VTI), property (3MF) or label image (OME-Zarr); else "label" or the only one.
    channel : int, optional
        OME-Zarr: this channel of the image, as grey values, instead of labels.
    format : str, optional
        Told by the ending where left out.

    Returns
    -------
    Volume
        Labels (with names and blends where the file has them) or grey values, axes along x, y, z.

    Raises
    ------
    InputError
        Unknown ending, missing unit, oblique axes, series, types that are not read.
    FileFormatError
        Damaged, cut or unsafe files, or larger than is read.
    """
    path = Path(path)
    kind = _format(path, format)
    if not path.exists():
        raise InputError("There is no such file.", file=str(path))
    if kind == "stl":
        raise InputError(
            "STL holds surfaces, not voxels; name it as a body of a design.", file=path.name
        )
    if kind == "3mf":
        from voxelmat.io.volume3mf_in import read_3mf_volume

        return read_3mf_volume(path, field=field)
    if kind == "vti":
        from voxelmat.io.vti_in import read_vti

        return read_vti(path, unit, field=field)
    if kind == "nrrd":
        from voxelmat.io.nrrd import read_nrrd

        return read_nrrd(path, unit)
    if kind == "nifti":
        from voxelmat.io.nifti import read_nifti

        return read_nifti(path, unit)
    from voxelmat.io.omezarr_in import read_omezarr

    return read_omezarr(path, unit, field=field, channel=channel)


def volume_to_part(
    path: str | Path,
    labels: Mapping[int, Blend | str | None] | None = None,
    resins: Iterable[Material] | None = None,
    law: BlendLaw | None = None,
    name: str | None = None,
    *,
    unit: str | None = None,
    field: str | None = None,
) -> Part:
    """A part from a volume file; see `import_volume` and `Volume.to_part`."""
    return import_volume(path, unit=unit, field=field).to_part(labels, resins, law, name)
