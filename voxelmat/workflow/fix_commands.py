"""`voxelmat fix`: safe repairs of what a preflight found, as a new design with before and after."""

from __future__ import annotations

import html
from collections import Counter
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.io.atomic import aside
from voxelmat.io.store import save_part
from voxelmat.model.finding import Finding
from voxelmat.model.fix import DrainHole, FixResult
from voxelmat.monitor import Monitor
from voxelmat.printing.fixes import fix_part
from voxelmat.printing.readback import Stack, read_stack
from voxelmat.printing.stack import write_stack
from voxelmat.workflow.build import Built, build
from voxelmat.workflow.checking import check_built
from voxelmat.workflow.finding_pictures import finding_picture
from voxelmat.workflow.report_canvas import Picture
from voxelmat.workflow.trayparts import part_of_run

__all__ = ["drain_from_text", "fix", "protected_voxels"]

Answer = tuple[int, dict[str, Any], str]


def drain_from_text(text: str) -> DrainHole:
    """A drain hole from ``"x,y,z:dx,dy,dz"`` or ``"x,y,z:dx,dy,dz:diameter"``, mm.

    Raises
    ------
    InputError
        If the text is not so made.
    """
    parts = text.split(":")
    try:
        point, way = ([float(v) for v in p.split(",")] for p in parts[:2])
        diameter = float(parts[2]) if len(parts) == 3 else None
        if len(point) != 3 or len(way) != 3 or len(parts) > 3:
            raise ValueError
    except ValueError:
        raise InputError(
            f"A drain hole is given as x,y,z:dx,dy,dz[:diameter] in mm; got {text!r}.", key="drain"
        ) from None
    return DrainHole(
        point_mm=(point[0], point[1], point[2]),
        direction=(way[0], way[1], way[2]),
        diameter_mm=diameter,
    )


def protected_voxels(built: Built) -> NDArray[np.bool_]:
    """What no repair may touch: protected and kept regions, and where loads and supports act."""
    design = built.design
    names = [*design.optimise.protected, *design.optimise.keep] if design.optimise else []
    for case in design.cases:
        names += [s.region for s in case.supports if s.region]
        names += [load.region for load in case.loads if load.region]
    out = np.zeros(built.part.grid.shape, dtype=np.bool_)
    for name in dict.fromkeys(names):
        out |= built.regions[name].voxels(built.part)
    return out


def fix(
    *, stack: Path, design: Path, out: Path, drain: Sequence[str] = (), monitor: Monitor
) -> Answer:
    """Repair the part that a run left, write it and its stack anew, and compare the findings."""
    holes = [drain_from_text(text) for text in drain]
    built = build(design, monitor=monitor)
    part = part_of_run(built.design, out)
    opened = read_stack(stack)
    if len(opened.parts) != 1:
        raise InputError(
            f"The stack holds {len(opened.parts)} parts; repair each in a stack of its own."
        )
    before = check_built(opened, built, part, monitor=monitor).findings
    done = fix_part(part, before, opened.profile, protected=protected_voxels(built), drains=holes)
    if not done.steps:
        return 0, _data(done, before, before, None), done.text()
    target = _free(out)
    save_part(done.part, target)
    printing = built.design.printing
    again = write_stack(
        done.part,
        opened.profile,
        target.with_suffix(".stack"),
        orientation=() if printing is None else printing.orientation,
        position=None if printing is None else printing.position_mm,
        support=opened.support_policy,
        seed=built.design.seed,
        halftone=None if printing is None else printing.halftone,
        monitor=monitor,
    )
    after = check_built(again, built, done.part, monitor=monitor).findings
    page = target.with_suffix(".html")
    _write_page(page, done, before, after, opened, again)
    lines = [done.text(), *_compared(before, after), f"  new part: {target}", f"  page: {page}"]
    worse = sum(f.severity == "stop" for f in after) > sum(f.severity == "stop" for f in before)
    if worse:
        lines.append("  the repaired part has more findings that say stop: do not use it as it is")
    return (1 if worse else 0), _data(done, before, after, target), "\n".join(lines)


def _free(out: Path) -> Path:
    """``part.fixed.npz``, or the first number after it that is free; nothing is overwritten."""
    target, number = out / "part.fixed.npz", 2
    while target.exists() or target.with_suffix(".stack").exists():
        target, number = out / f"part.fixed-{number}.npz", number + 1
    return target


def _compared(before: Sequence[Finding], after: Sequence[Finding]) -> list[str]:
    old, new = Counter(f.code for f in before), Counter(f.code for f in after)
    return ["  finding: before, after"] + [
        f"    {code}: {old[code]}, {new[code]}" for code in dict.fromkeys([*old, *new])
    ]


def _data(
    done: FixResult, before: Sequence[Finding], after: Sequence[Finding], target: Path | None
) -> dict[str, Any]:
    return {
        "steps": [
            {
                "name": s.name,
                "message": s.message,
                "place_mm": list(s.place_mm),
                "added_mm3": s.added_mm3,
                "removed_mm3": s.removed_mm3,
                "voxels": s.voxels,
            }
            for s in done.steps
        ],
        "refused": [{"code": r.finding.code, "reason": r.reason} for r in done.refused],
        "volumes_mm3": {"before": done.before.volumes(), "after": done.part.volumes()},
        "findings": {
            "before": dict(Counter(f.code for f in before)),
            "after": dict(Counter(f.code for f in after)),
        },
        "part": None if target is None else str(target),
    }


def _write_page(
    page: Path,
    done: FixResult,
    before: Sequence[Finding],
    after: Sequence[Finding],
    old: Stack,
    new: Stack,
) -> None:
    """One page with each repaired place before and after."""
    said = "\n".join([done.text(), *_compared(before, after)])
    blocks = []
    for step in done.steps:
        spot = Finding(
            severity="note", code=step.name, message=step.message, place_mm=step.place_mm
        )
        pair = (
            ("before", finding_picture(spot, old, done.before)),
            ("after", finding_picture(spot, new, done.part)),
        )
        blocks.append(f"<h2>{html.escape(step.name)}: {html.escape(step.message)}</h2>")
        blocks += [_figure(words, picture) for words, picture in pair]
    text = (
        '<!doctype html><html lang="en"><meta charset="utf-8"><title>Repairs</title>'
        "<style>body{font-family:sans-serif;max-width:60rem;margin:2rem auto}"
        "img{max-width:100%}</style>"
        f"<h1>Repairs of {html.escape(done.before.name)}</h1><pre>{html.escape(said)}</pre>"
        + "".join(blocks)
        + "</html>"
    )
    with aside(page) as temporary:
        temporary.write_text(text, encoding="utf-8")


def _figure(words: str, picture: Picture) -> str:
    return (
        f'<figure><img src="{picture.data_uri}" alt="{html.escape(picture.alt)}">'
        f"<figcaption>{words}</figcaption></figure>"
    )
