"""The section of the shape: mesh files, their unit, regions by click, the face on the tray."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np

from voxelmat.errors import InputError
from voxelmat.io.mesh import read_mesh
from voxelmat.printing.place import rotation_matrix
from voxelmat.units import LENGTH_MM, number
from voxelmat.workbench import controls as c
from voxelmat.workbench.files import bring_in
from voxelmat.workbench.section import Section, number_from
from voxelmat.workbench.shape_words import UNITS, edges_mm, free_name, made_of, start_edge
from voxelmat.workflow.draft_keys import add_at
from voxelmat.workflow.regions import grown_face

__all__ = ["ShapeSection"]

MESHES = (".stl", ".obj", ".ply", ".3mf")
#: A face may lie so far off an axis and still be laid on the tray, degrees; ours.
_LEVEL_DEG = 1.0
_SIDES = ("x-", "x+", "y-", "y+", "z-", "z+")


class ShapeSection(Section):
    """Bodies and regions.

    Attributes
    ----------
    offered : Path or None
        A mesh that was dropped and whose unit is to be confirmed.
    """

    name = "shape"
    title = "Shape"

    def __init__(self, bench: Any) -> None:
        super().__init__(bench)
        self.offered: Path | None = None
        self._form: dict[str, Any] = {"angle": 20.0, "region": "", "side": "z-"}

    # ------------------------------------------------------------------ bodies
    def bring(self, name: str, data: bytes) -> Path:
        """Put a mesh file that was dropped beside the design; its unit is asked for next."""
        path = bring_in(self.bench.draft.path.parent, name, data, MESHES)
        stated = path.suffix.lower() == ".3mf"
        read_mesh(path, None if stated else "mm")  # refuses what cannot be read, now
        self.offered = path
        self._form.update(unit="" if stated else "mm", body=free_name(path.stem, self._bodies))
        self.bench.tell("shape")
        return path

    def sizes(self, file: str) -> dict[str, tuple[float, float, float]]:
        """Edges of the box round a mesh file, mm, for each unit that it might be in.

        A 3MF states its unit, so that there is one entry, ``""``.
        """
        path = self.bench.draft.path.parent / file
        if path.suffix.lower() == ".3mf":
            return {"": edges_mm(path, None)}
        x, y, z = edges_mm(path, "mm")
        return {u: (x * f, y * f, z * f) for u, f in LENGTH_MM.items() if u in UNITS}

    def add_body(self, file: str, unit: str = "", name: str = "", resin: str = "") -> None:
        """Make a mesh file a body of the design.

        Parameters
        ----------
        file : str
            In the design's folder.
        unit : str
            Of its coordinates; may be left out for a 3MF.
        name : str
            The file's own where left out.
        resin : str
            The one in hand under Material where left out.
        """
        path = self.bench.draft.path.parent / file
        stated = path.suffix.lower() == ".3mf"
        meshes = read_mesh(path, unit or None)
        body: dict[str, Any] = {
            "name": name or free_name(path.stem, self._bodies),
            "mesh": file,
        }
        if unit and not stated:
            body["unit"] = unit
        if resin:
            body["resin"] = resin
        else:
            body["blend"] = dict(self.bench.mix.blend.fractions)
        several = len(meshes) > 1
        entries = [
            {
                **body,
                **({"name": free_name(m.name, self._bodies), "object": m.name} if several else {}),
            }
            for m in meshes
        ]
        edge = start_edge(np.concatenate([m.vertices for m in meshes]))

        def edit(data: dict[str, Any]) -> None:
            if not data["body"]:
                data["grid"]["spacing_mm"] = [edge] * 3
            data["body"] += entries

        self.bench.draft.change(f"body {body['name']}", edit)
        self.offered = None

    def remove_body(self, name: str) -> None:
        """Take a body out of the design; what names it must go first."""
        self.bench.remove(f"body[{self._index('body', name)}]")

    def revise(self, body: str, file: str) -> None:
        """Give a body another mesh file; regions are found again on it, or refused and shown."""
        self.bench.set(f"body[{self._index('body', body)}].mesh", file)

    @property
    def _bodies(self) -> list[str]:
        return [b["name"] for b in self.bench.draft.data["body"]]

    def _index(self, table: str, name: str) -> int:
        names = [entry["name"] for entry in self.bench.draft.data.get(table, [])]
        if name not in names:
            raise InputError(
                f"There is no {table} '{name}'; there are {', '.join(names) or 'none'}."
            )
        return names.index(name)

    # ------------------------------------------------------------------ regions
    def grow(
        self, name: str, seed_mm: list[float], angle_deg: float = 20.0, body: str = ""
    ) -> float:
        """Make a region of the face at a point and its neighbours up to an angle.

        Parameters
        ----------
        name : str
        seed_mm : list of float
            On the surface of a body's mesh.
        angle_deg : float
            Largest bend between neighbouring triangles.
        body : str
            The nearest where left out.

        Returns
        -------
        float
            Its area, mm2; kept in the design, so that a changed mesh is noticed.
        """
        design = self.bench.design
        body = body or self._body_at(seed_mm)
        found = grown_face(design, body, seed_mm, angle_deg)
        entry = {
            "name": name,
            "kind": "grown",
            "body": body,
            "seed_mm": [round(float(v), 4) for v in seed_mm],
            "angle_deg": float(angle_deg),
            "area_mm2": round(found.area_mm2, 4),
        }
        self.bench.draft.change(f"region {name}", lambda d: add_at(d, "region", entry))
        return found.area_mm2

    def _body_at(self, seed_mm: list[float]) -> str:
        """The body whose surface is nearest."""
        trouble: InputError | None = None
        for body in self._bodies:
            try:
                grown_face(self.bench.design, body, seed_mm, 0.0)
            except InputError as error:
                trouble = error
                continue
            return body
        raise trouble or InputError("There is no body yet; choose a mesh file first.")

    def side_region(self, name: str, side: str) -> None:
        """Make a region of the outermost face on one side: "z-" is the underside."""
        entry = {"name": name, "kind": "face", "side": side}
        self.bench.draft.change(f"region {name}", lambda d: add_at(d, "region", entry))

    def box_region(self, name: str, low_mm: list[float], high_mm: list[float]) -> None:
        """Make a region of what lies in a box."""
        entry = {"name": name, "kind": "box", "low_mm": low_mm, "high_mm": high_mm}
        self.bench.draft.change(f"region {name}", lambda d: add_at(d, "region", entry))

    def remove_region(self, name: str) -> None:
        """Take a region out of the design; what acts on it must go first."""
        self.bench.remove(f"region[{self._index('region', name)}]")

    def confirm_region(self, name: str) -> float:
        """Accept a grown region as it is found on the present mesh; its new area, mm2."""
        at = self._index("region", name)
        entry = self.bench.draft.data["region"][at]
        if entry["kind"] != "grown":
            raise InputError(
                f"Region '{name}' was not grown from a face; there is nothing to confirm."
            )
        found = grown_face(self.bench.design, entry["body"], entry["seed_mm"], entry["angle_deg"])
        self.bench.set(f"region[{at}].area_mm2", round(found.area_mm2, 4))
        return found.area_mm2

    # ------------------------------------------------------------------ on the tray
    def lie_on(self, seed_mm: list[float]) -> list[str]:
        """Print the part lying on the face at a point.

        Returns
        -------
        list of str
            The build orientation, as turns.

        Raises
        ------
        InputError
            If the face is not at right angles to an axis: parts are turned by quarters, for any
            other angle the mesh itself has to be turned.
        """
        found = grown_face(self.bench.design, self._body_at(seed_mm), seed_mm, 5.0)
        corners = np.array(found.mesh.triangles)[found.chosen]
        normal = np.cross(corners[:, 1] - corners[:, 0], corners[:, 2] - corners[:, 0]).sum(axis=0)
        normal = normal / np.linalg.norm(normal)
        axis = int(np.abs(normal).argmax())
        off = float(np.degrees(np.arccos(min(1.0, abs(normal[axis])))))
        if off > _LEVEL_DEG:
            raise InputError(
                f"This face leans {off:.3g} degrees from the nearest axis. Parts are turned by "
                "quarters here; turn the mesh in the program that made it, then lay it down."
            )
        wanted = np.zeros(3, dtype=int)
        wanted[axis] = 1 if normal[axis] > 0 else -1
        turns = next(
            t
            for t in ([], ["x 180"], ["x 90"], ["x -90"], ["y 90"], ["y -90"])
            if (rotation_matrix(t) @ wanted == (0, 0, -1)).all()
        )
        if "print" not in self.bench.draft.data:
            raise InputError("Choose a print profile under Print first.")
        self.bench.set("print.orientation", turns)
        return turns

    # ------------------------------------------------------------------ the screen
    def controls(self) -> list[c.Control]:
        """What is asked next first: the file, its unit; then bodies and regions."""
        shown: list[c.Control] = []
        if self.offered is not None:
            shown += self._unit_question(self.offered)
        bodies = self.bench.draft.data["body"]
        if not bodies and self.offered is None:
            shown.append(
                c.words("Start here: drop a mesh of the part, or choose one.", tone="hint")
            )
        shown.append(c.file_drop("file", "Mesh (STL, OBJ, PLY, 3MF)", ",".join(MESHES)))
        if not bodies:
            return shown
        rows = [[b["name"], b["mesh"], made_of(b)] for b in bodies]
        shown.append(
            c.table(["body", "file", "of"], rows, caption="Bodies", name="body",
                    actions=["Remove"])
        )  # fmt: skip
        return [*shown, *self._region_controls()]

    def _unit_question(self, path: Path) -> list[c.Control]:
        sizes = self.sizes(path.name)
        unit = str(self._form.get("unit", "mm"))
        x, y, z = sizes.get(unit) or next(iter(sizes.values()))
        shown = [c.heading(f"{path.name}: is this its size?")]
        if len(sizes) > 1:
            shown.append(c.choice("unit", "Its unit", unit, list(sizes)))
        shown += [
            c.words(f"{number(x)} x {number(y)} x {number(z)} mm"),
            c.text_box("name", "Name of the body", str(self._form.get("body", path.stem))),
            c.group(c.button("add", "Yes, add it", main=True), c.button("drop", "No, leave it")),
        ]
        names = self._bodies
        if names:
            shown.append(
                c.group(
                    c.choice("old", "Or as a new mesh of", names[0], names),
                    c.button("revise", "Revise"),
                )
            )
        return shown

    def _region_controls(self) -> list[c.Control]:
        data = self.bench.draft.data
        rows = [
            [r["name"], r["kind"], number(r["area_mm2"]) + " mm2" if "area_mm2" in r else ""]
            for r in data.get("region", [])
        ]
        picked = self.bench.picked
        shown = [
            c.table(
                ["region", "kind", "area"], rows, caption="Regions", name="region",
                actions=["Show", "Confirm", "Remove"],
            ),
            c.heading("New region"),
            c.text_box("region name", "Its name", str(self._form["region"])),
        ]  # fmt: skip
        if picked is None:
            shown.append(
                c.words("Click a face of the part in the picture to grow from.", tone="hint")
            )
        else:
            at = ", ".join(number(v) for v in picked["place_mm"])
            shown += [
                c.words(f"Clicked: {at} mm"),
                c.number_box("angle", "Grow up to a bend of", self._form["angle"], "°", step=5),
                c.group(
                    c.button("grow", "Grow the region", main=True),
                    c.button("lie", "Lies on the tray"),
                ),
            ]
        shown += [
            c.group(
                c.choice("side", "Or the whole side", str(self._form["side"]), _SIDES),
                c.button("side region", "Add"),
            )
        ]
        return shown

    def act(self, name: str, value: Any) -> None:
        """One of the controls."""
        if name == "file":
            self.bring(*value)
        elif name in ("unit", "angle", "region name", "name", "side", "old"):
            key = {"region name": "region", "name": "body"}.get(name, name)
            self._form[key] = number_from(value, "The angle", "°") if name == "angle" else value
        elif name == "drop":
            self.offered = None
        elif name == "add" and self.offered is not None:
            unit = "" if self.offered.suffix.lower() == ".3mf" else str(self._form["unit"])
            self.call("add_body", file=self.offered.name, unit=unit, name=str(self._form["body"]))
        elif name == "revise" and self.offered is not None:
            old = str(self._form.get("old") or self._bodies[0])
            self.call("revise", body=old, file=self.offered.name)
            self.offered = None
        elif name == "body":
            self.call("remove_body", name=self._bodies[int(value[1])])
        elif name == "region":
            self._on_region(str(value[0]), int(value[1]))
        elif name in ("grow", "side region", "lie"):
            self._new_region(name)

    def _on_region(self, action: str, row: int) -> None:
        region = self.bench.draft.data["region"][row]["name"]
        if action == "Remove":
            self.call("remove_region", name=region)
        elif action == "Confirm":
            area = self.call("confirm_region", name=region)
            self.bench.say(f"'{region}' is confirmed with {number(area)} mm2.")
        else:
            self.bench.highlight(region)

    def _new_region(self, kind: str) -> None:
        picked = self.bench.picked
        if kind == "lie" and picked is not None:
            turns = self.call("lie_on", seed_mm=list(picked["place_mm"]))
            self.bench.say(f"It is printed lying on this face ({', '.join(turns) or 'as it is'}).")
            return
        name = str(self._form["region"]).strip()
        if not name:
            raise InputError("Give the new region a name first.")
        if kind == "grow" and picked is not None:
            area = self.call(
                "grow", name=name, seed_mm=list(picked["place_mm"]), angle_deg=self._form["angle"]
            )
            self.bench.say(f"Region '{name}': {number(area)} mm2.")
        elif kind == "side region":
            self.call("side_region", name=name, side=str(self._form["side"]))
        self._form["region"] = ""
        self.bench.highlight(name)
