"""Triangle meshes from STL, OBJ, PLY and 3MF files, and back to binary STL."""

from __future__ import annotations

import warnings
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import FileFormatError, InputError, ResourceError, VoxelmatError
from voxelmat.io.atomic import write_bytes
from voxelmat.io.mesh_checks import check_file
from voxelmat.io.package3mf import check_package
from voxelmat.model.mesh import TriangleMesh
from voxelmat.provenance import file_digest
from voxelmat.units import LENGTH_MM, length_factor, quantity

__all__ = ["PLAUSIBLE_MM", "read_mesh", "write_stl"]

#: A part whose largest edge lies outside this range is probably in another unit.
PLAUSIBLE_MM = (1.0, 1000.0)


def read_mesh(
    path: str | Path, unit: str | None = None, *, object_name: str | None = None
) -> list[TriangleMesh]:
    """Read the bodies of a mesh file, in mm.

    Parameters
    ----------
    path : str or Path
        A file ending in .stl (binary or ASCII), .obj, .ply or .3mf.
    unit : str, optional
        Unit of length of the file: "mm", "cm", "m", "um", "inch" or "foot". Must be given
        for STL, OBJ and PLY, which do not say; a 3MF states its own.
    object_name : str, optional
        Read only the body of this name.

    Returns
    -------
    list of TriangleMesh
        One a solid (ASCII STL), object (OBJ) or placed object (3MF, placed by its build
        transform). Corners at the same place are one vertex.

    Raises
    ------
    FileFormatError
        If the file is cut short, is not what its ending says, or is unsafe to open.
    InputError
        If the unit is missing, unknown or contradicts the file, the file holds no faces,
        or no body has the name asked for.
    """
    file = Path(path)
    kind = check_file(file)
    stated = check_package(file) if kind == "3mf" else None
    factor = _factor(file, unit, stated.unit if stated else None)
    found = [
        (name or file.stem, vertices * factor, faces)
        for name, vertices, faces in _load(file, kind)
        if len(faces)
    ]
    if not found:
        raise InputError(
            "The file holds no triangles. Export the part as a triangle mesh.", file=file.name
        )
    names = _distinct([name for name, _, _ in found])
    if object_name is not None and object_name not in names:
        raise InputError(
            f"No object is called '{object_name}'; the file holds: {', '.join(names)}.",
            file=file.name,
        )
    cautions = (*_size_caution(found, unit), *(stated.cautions if stated else ()))
    digest = file_digest(file)
    meshes = []
    for name, (_, vertices, faces) in zip(names, found, strict=True):
        if object_name not in (None, name):
            continue
        try:
            welded = _welded(vertices, faces)
            meshes.append(
                TriangleMesh(
                    vertices=welded[0],
                    faces=welded[1],
                    name=name,
                    source=file.name,
                    source_digest=digest,
                    cautions=cautions,
                )
            )
        except InputError as error:
            raise FileFormatError(f"{file.name}: {error.message}") from error
    return meshes


def _factor(file: Path, unit: str | None, stated: str | None) -> float:
    """Millimetres in one unit of the file."""
    known = ", ".join(LENGTH_MM)
    if stated is not None:
        if unit is not None and length_factor(unit) != length_factor(stated):
            raise InputError(
                f"The unit was given as '{unit}', but this 3MF states '{stated}'. Leave the "
                "unit out, or export the file again in the unit that is meant.",
                file=file.name,
            )
        return length_factor(stated)
    if unit is None:
        raise InputError(
            f"A {file.suffix.lower()} file does not say its unit of length; give one of {known}.",
            file=file.name,
            key="unit",
        )
    return length_factor(unit)


def _load(file: Path, kind: str) -> list[tuple[str, NDArray[np.float64], NDArray[np.int64]]]:
    """Name, vertices (file units) and faces of each body; library errors made readable."""
    import trimesh

    options: dict[str, Any] = {"process": False}
    if kind == "obj":
        options |= {"split_objects": True, "group_material": False, "skip_materials": True}
    try:
        with warnings.catch_warnings(), file.open("rb") as handle:
            # Number parsers only warn about a stray word; here it means a broken file.
            warnings.simplefilter("error", DeprecationWarning)
            scene = trimesh.load_scene(handle, file_type=kind, **options)
            bodies = []
            for node in scene.graph.nodes_geometry:
                matrix, key = scene.graph[node]
                part = scene.geometry[key]
                if not hasattr(part, "faces"):
                    continue
                vertices = np.asarray(part.vertices, dtype=np.float64)
                faces = np.asarray(part.faces, dtype=np.int64)
                if not (np.isfinite(vertices).all() and np.isfinite(matrix).all()):
                    raise FileFormatError(
                        f"{file.name} holds vertices that are not finite numbers. Export the "
                        "mesh again."
                    )
                if np.linalg.det(matrix[:3, :3]) < 0:
                    faces = faces[:, ::-1]
                name = str(node if kind == "3mf" else key)
                if name.startswith("geometry_") or name == file.name:
                    name = ""
                bodies.append((name, vertices @ matrix[:3, :3].T + matrix[:3, 3], faces))
    except VoxelmatError:
        raise
    except MemoryError as error:
        raise ResourceError(f"{file.name} does not fit into memory.") from error
    except Exception as error:
        detail = str(error).strip().splitlines()
        raise FileFormatError(
            f"{file.name} cannot be read as {kind.upper()} "
            f"({type(error).__name__}: {detail[0] if detail else 'no detail'}). The file is "
            "damaged or is something else; export the mesh again."
        ) from error
    # The library keeps no order of its own that could be relied on.
    return sorted(bodies, key=lambda body: body[0])


def _distinct(names: list[str]) -> list[str]:
    """Names made different by a number where they repeat."""
    result: list[str] = []
    for name in names:
        new, n = name, 2
        while new in result:
            new, n = f"{name} {n}", n + 1
        result.append(new)
    return result


def _welded(
    vertices: NDArray[np.float64], faces: NDArray[np.int64]
) -> tuple[NDArray[np.float64], NDArray[np.int32]]:
    """Make corners at exactly the same place one vertex; STL repeats them for each face."""
    if faces.min() < 0 or faces.max() >= len(vertices):
        raise InputError(
            f"A face points at vertex {int(faces.max())}, but there are only {len(vertices)}. "
            "Export the mesh again."
        )
    # Adding 0 turns -0 into 0, which compares equal but sorts as other bytes.
    unique, which = np.unique(vertices[faces.ravel()] + 0.0, axis=0, return_inverse=True)
    return unique, which.reshape(-1, 3).astype(np.int32)


def _size_caution(
    bodies: list[tuple[str, NDArray[np.float64], NDArray[np.int64]]], unit: str | None
) -> tuple[str, ...]:
    low = np.min([v.min(axis=0) for _, v, _ in bodies], axis=0)
    high = np.max([v.max(axis=0) for _, v, _ in bodies], axis=0)
    largest = float((high - low).max())
    if not np.isfinite(largest) or PLAUSIBLE_MM[0] <= largest <= PLAUSIBLE_MM[1]:
        return ()
    used = f" with unit '{unit}'" if unit else ""
    return (
        f"The largest edge of the box round the file's bodies is {quantity(largest, 'mm')}{used}; "
        f"a printed part is mostly {PLAUSIBLE_MM[0]:g} to {PLAUSIBLE_MM[1]:g} mm. Check the unit.",
    )


def write_stl(mesh: TriangleMesh, path: str | Path) -> None:
    """Write a mesh as binary STL, in mm, in one step: aside first, then renamed.

    STL keeps single precision: about 7 digits of each coordinate.
    """
    file = Path(path)
    record = np.dtype([("normal", "<f4", 3), ("corners", "<f4", (3, 3)), ("attribute", "<u2")])
    table = np.zeros(len(mesh.faces), dtype=record)
    a, b, c = mesh.triangles.transpose(1, 0, 2)
    normal = np.cross(b - a, c - a)
    length = np.linalg.norm(normal, axis=1, keepdims=True)
    table["normal"] = np.divide(normal, length, out=np.zeros_like(normal), where=length > 0)
    table["corners"] = mesh.triangles
    header = b"binary STL, unit mm".ljust(80) + np.uint32(len(table)).astype("<u4").tobytes()
    write_bytes(file, header + table.tobytes())
