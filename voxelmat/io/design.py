"""Reads a design file: TOML to a checked `Design`, every error with its file and key."""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import replace
from pathlib import Path
from typing import Any, NoReturn

from voxelmat.errors import InputError
from voxelmat.io.design_checks import check_design, resin_uses
from voxelmat.io.design_measures import measure_goal, measure_limit
from voxelmat.io.design_print import dimension_entry, print_entry
from voxelmat.io.schema import check_document, read_toml
from voxelmat.model.design import (
    FORMAT,
    RULE_KEYS,
    BodyEntry,
    BoughtIn,
    CaseEntry,
    Design,
    Gaps,
    LayoutEntry,
    LimitEntry,
    LoadEntry,
    OptimiseEntry,
    PlateEntry,
    RegionEntry,
    RequirementEntry,
    SupportEntry,
    TargetEntry,
)
from voxelmat.model.region import parse_side
from voxelmat.provenance import file_digest

__all__ = ["complete_design", "load_design", "parse_design"]

Table = Mapping[str, Any]


def load_design(path: str | Path) -> Design:
    """Read and check a design file and note the digest of every file that it names.

    Parameters
    ----------
    path : path
        A TOML file after the shipped schema ``design.json``.

    Returns
    -------
    Design

    Raises
    ------
    InputError
        For an unknown key (with the nearest known one), a missing key, a value of the wrong
        type or out of range, a file that is not there, or a name that nothing bears; it names
        the file and the key.
    FileFormatError, ResourceError
        If the file is not TOML, or cannot be read.
    """
    file = Path(path)
    return complete_design(read_toml(file), file)


def complete_design(data: Table, file: Path) -> Design:
    """Check the tables of a design and note the digest of every file that they name.

    Parameters
    ----------
    data : mapping
        As `tomllib` gives it.
    file : Path
        Where they came from or will be saved; files are looked for beside it.

    Raises
    ------
    InputError
        As `load_design`.
    """
    design = parse_design(data, path=file)
    inputs = {file.name: file_digest(file)} if file.is_file() else {}
    for name, key in _files(design):
        where = design.file(name)
        if not where.is_file():
            raise InputError(
                f"There is no file '{name}' in the folder of the design; files are looked for "
                f"from {design.folder.as_posix()}.",
                file=str(file),
                key=key,
            )
        inputs[name if not Path(name).is_absolute() else Path(name).name] = file_digest(where)
    design = replace(design, inputs=inputs)
    _check_resins(design)
    return design


def parse_design(data: Table, *, path: Path | None = None) -> Design:
    """Check the tables of a design and turn them into a `Design`; reads no other file.

    Parameters
    ----------
    data : mapping
        As `tomllib` gives it.
    path : Path, optional
        Where they came from: named in errors, and where files are looked for.

    Raises
    ------
    InputError
        As `load_design`.
    """
    file = str(path) if path is not None else "design"
    number = data.get("format")
    if isinstance(number, int) and number > FORMAT:
        raise InputError(
            f"This design has format {number}; this version of voxelmat reads up to {FORMAT}. "
            "Install a newer voxelmat.",
            file=file,
            key="format",
        )
    check_document(data, "design", file=file)
    try:
        design = _design(data, path)
        check_design(design)
    except InputError as error:
        raise InputError(error.message, file=file, key=error.key) from None
    return design


def _rest(table: Table, *taken: str) -> dict[str, Any]:
    return {k: v for k, v in table.items() if k not in taken}


def _design(data: Table, path: Path | None) -> Design:
    materials = data.get("materials", {})
    top = {k: data[k] for k in ("name", "note", "invented", "seed", "format") if k in data}
    return Design(
        **top,
        spacing_mm=_floats(data["grid"]["spacing_mm"]),
        margin_voxels=data["grid"].get("margin_voxels", 1),
        material_files=tuple(materials.get("files", ())),
        law=materials.get("law", "calibrated"),
        bodies=tuple(_body(b) for b in data["body"]),
        gaps=Gaps(**data["gaps"]) if "gaps" in data else None,
        layout=tuple(
            LayoutEntry(region=r.get("region"), kind=r["kind"], settings=_rest(r, "region", "kind"))
            for r in data.get("layout", ())
        ),
        regions=tuple(
            RegionEntry(name=r["name"], kind=r["kind"], settings=_rest(r, "name", "kind"))
            for r in data.get("region", ())
        ),
        cases=tuple(_case(c, i) for i, c in enumerate(data.get("load_case", ()))),
        targets=tuple(_target(t) for t in data.get("target", ())),
        requirements=tuple(_requirement(r) for r in data.get("requirement", ())),
        optimise=_optimise(data["optimise"]) if "optimise" in data else None,
        printing=print_entry(data["print"]) if "print" in data else None,
        dimensions=tuple(dimension_entry(d, i) for i, d in enumerate(data.get("dimension", ()))),
        path=path,
        data=dict(data),
    )


def _floats(values: Any) -> Any:
    return tuple(float(v) for v in values)


def _body(table: Table) -> BodyEntry:
    bought = None
    if "bought_in" in table:
        slug = re.sub(r"[^a-z0-9]+", "-", table["name"].lower()).strip("-") or "body"
        bought = BoughtIn(**{"name": f"bought-in-{slug}", **table["bought_in"]})
    blend = {table["resin"]: 1.0} if "resin" in table else dict(table.get("blend", {}))
    rest = _rest(table, "object", "resin", "blend", "bought_in")
    return BodyEntry(**rest, object_name=table.get("object"), blend=blend, bought_in=bought)


def _support(table: Table, key: str) -> SupportEntry:
    given = [k for k in ("fixed", "slide", "displacement_mm", "symmetry") if k in table]
    if len(given) != 1 or table.get("displacement_mm") == {}:
        raise InputError(
            "A support takes exactly one of fixed = true, slide = [directions left free], "
            "displacement_mm = { x = .. } and symmetry = a side; got "
            f"{', '.join(given) or 'none'}.",
            key=key,
        )
    mirrored = given == ["symmetry"]
    for name in ("region", "rotation_deg", "about_mm", "at_mm"):
        if name in table and mirrored != (name == "at_mm"):
            raise InputError(
                f"{name} does not go with {given[0]}.",
                key=f"{key}.{name}",
            )
    if mirrored:
        return SupportEntry(region=None, symmetry=table["symmetry"], at_mm=table.get("at_mm"))
    if "region" not in table:
        raise InputError("This key is missing.", key=f"{key}.region")
    free: list[str] = table.get("slide", [])
    held = table.get("displacement_mm", {a: 0.0 for a in "xyz" if a not in free})
    return SupportEntry(
        region=table["region"],
        displacement_mm=_maybe(held),
        **{k: _floats(table[k]) for k in ("rotation_deg", "about_mm") if k in table},
    )


def _maybe(given: Table) -> tuple[float | None, float | None, float | None]:
    """A table over x, y, z; None for what it leaves out."""
    x, y, z = (float(given[a]) if a in given else None for a in "xyz")
    return x, y, z


def _plate(table: Table) -> PlateEntry:
    vectors = {k: _floats(table[k]) for k in ("point_mm", "force_N", "moment_N_mm") if k in table}
    return PlateEntry(
        name=table["name"],
        region=table["region"],
        translation_mm=_maybe(table.get("translation_mm", {})),
        rotation_deg=_maybe(table.get("rotation_deg", {})),
        **vectors,
    )


def _case(table: Table, index: int) -> CaseEntry:
    key = f"load_case[{index}]"
    return CaseEntry(
        **_rest(table, "support", "load", "plate"),
        supports=tuple(
            _support(s, f"{key}.support[{i}]") for i, s in enumerate(table.get("support", ()))
        ),
        loads=tuple(
            LoadEntry(
                kind=load["kind"],
                region=load.get("region"),
                settings=_rest(load, "kind", "region"),
            )
            for load in table.get("load", ())
        ),
        plates=tuple(_plate(p) for p in table.get("plate", ())),
    )


def _target(table: Table) -> TargetEntry:
    own = ("name", "region", "load_case", "deflection_mm", "file")
    axis, sense = parse_side(table["direction"], table["name"])
    x, y, z = (float(sense) if a == axis else 0.0 for a in range(3))
    return TargetEntry(
        **{k: table[k] for k in own if k in table},
        direction=(x, y, z),
        settings=_rest(table, *own, "direction"),
    )


def _requirement(table: Table) -> RequirementEntry:
    limits: dict[str, Any] = {}
    for key, value in table.items():
        for limit in ("at_least", "at_most"):
            if key.startswith(limit):
                limits[limit] = float(value)
    rest = {k: v for k, v in table.items() if not k.startswith(("at_least", "at_most"))}
    return RequirementEntry(**rest, **limits)


def _optimise(table: Table) -> OptimiseEntry:
    lists = ("resins", "design_in", "keep", "solid", "empty", "protected", "symmetry", "sharpness")
    limits, measured = [], []
    for i, limit in enumerate(table.get("limit", ())):
        if "measure" in limit:
            measured.append(measure_limit(limit, f"optimise.limit[{i}]"))
            continue
        most = limit["at_most_g"] if limit["kind"] == "mass" else limit["at_most_fraction"]
        limits.append(LimitEntry(kind=limit["kind"], at_most=float(most), resin=limit.get("resin")))
    listed: dict[str, Any] = {k: tuple(table[k]) for k in lists if k in table}
    return OptimiseEntry(
        **_rest(table, "limit", "fixed", "minimise", "maximise", *lists, *RULE_KEYS),
        rules={k: table[k] for k in RULE_KEYS if k in table},
        **listed,
        goal=measure_goal(table),
        measured=tuple(measured),
        limits=tuple(limits),
        fixed=tuple((f["region"], f["resin"]) for f in table.get("fixed", ())),
    )


def _files(design: Design) -> list[tuple[str, str]]:
    """Every file that a design names, with the key that names it."""
    found = [(n, f"materials.files[{i}]") for i, n in enumerate(design.material_files)]
    found += [(b.mesh, f"body[{i}].mesh") for i, b in enumerate(design.bodies)]
    for i, region in enumerate(design.regions):
        if "mesh" in region.settings:
            found.append((region.settings["mesh"], f"region[{i}].mesh"))
    for c, case in enumerate(design.cases):
        for i, load in enumerate(case.loads):
            if "file" in load.settings:
                found.append((load.settings["file"], f"load_case[{c}].load[{i}].file"))
    for i, rule in enumerate(design.layout):
        if "file" in rule.settings:
            found.append((rule.settings["file"], f"layout[{i}].file"))
    found += [(t.file, f"target[{i}].file") for i, t in enumerate(design.targets) if t.file]
    if design.printing is not None and design.printing.profile.endswith(".toml"):
        found.append((design.printing.profile, "print.profile"))
    return found


def _check_resins(design: Design) -> None:
    """Every material that the design names is in the library or in its own files."""
    from voxelmat.io.materials import load_library

    library = load_library([design.file(n) for n in design.material_files])

    def refuse(message: str, key: str) -> NoReturn:
        raise InputError(message, file=str(design.path), key=key)

    for i, body in enumerate(design.bodies):
        bought = body.bought_in
        if bought is None:
            continue
        key = f"body[{i}].bought_in.name"
        if bought.E_MPa is not None and bought.name in library:
            refuse(f"The library has a material '{bought.name}'; choose another name.", key)
        if bought.E_MPa is None and bought.name not in library:
            refuse(
                f"There is no material '{bought.name}' in the library; give E_MPa, nu and "
                "density_g_cm3 for one of your own.",
                key,
            )
        if bought.E_MPa is None and library[bought.name].kind != "bought-in":
            refuse(f"'{bought.name}' is a resin; write resin = \"{bought.name}\".", key)
    for name, key in resin_uses(design):
        try:
            material = library[name]
        except InputError as error:
            refuse(error.message, key)
        if material.kind == "support":
            refuse(f"'{name}' is a support, which is washed away; take another resin.", key)
        if material.kind == "bought-in" and not key.startswith("requirement"):
            refuse(f"'{name}' is not printed; write bought_in = {{ name = \"{name}\" }}.", key)
