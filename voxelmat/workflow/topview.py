"""The tray and what stands on it, seen from above, as SVG drawings for printed pages."""

from __future__ import annotations

import base64
from html import escape

import numpy as np
from numpy.typing import NDArray

from voxelmat.io.png import encode_bitmap
from voxelmat.model.profile import PrintProfile
from voxelmat.printing.kit_rows import KitPlan
from voxelmat.printing.raster import Raster
from voxelmat.printing.readback import Stack

__all__ = ["kit_drawing", "shadow_drawing", "tray_drawing"]

_LONGEST = 1200  # sites of a shadow along its longer side; beyond it every n-th is drawn


def _start(width: float, height: float, label: str) -> str:
    return (
        f'<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 {width:.2f} {height:.2f}" '
        f'role="img" aria-label="{escape(label)}">'
    )


def _rect(x: float, y: float, w: float, h: float, style: str) -> str:
    return f'<rect x="{x:.3f}" y="{y:.3f}" width="{w:.3f}" height="{h:.3f}" {style}/>'


def _text(x: float, y: float, size: float, text: str, anchor: str = "start") -> str:
    return (
        f'<text x="{x:.3f}" y="{y:.3f}" font-size="{size:.3f}" text-anchor="{anchor}" '
        f'font-family="sans-serif">{escape(text)}</text>'
    )


def _arrow(x: float, y: float, dx: float, dy: float, width: float) -> str:
    """A line with a head at its end."""
    length = float(np.hypot(dx, dy))
    ux, uy = dx / length, dy / length
    head = 4 * width
    tip = f"{x + dx:.3f},{y + dy:.3f}"
    bx, by = x + dx - head * ux, y + dy - head * uy
    left = f"{bx - head / 2 * uy:.3f},{by + head / 2 * ux:.3f}"
    right = f"{bx + head / 2 * uy:.3f},{by - head / 2 * ux:.3f}"
    return (
        f'<path d="M{x:.3f},{y:.3f} L{bx:.3f},{by:.3f}" stroke="#000" stroke-width="{width:.3f}"/>'
        f'<path d="M{tip} L{left} L{right} Z" fill="#000"/>'
    )


def _window(raster: Raster) -> tuple[float, float, float, float]:
    """Low x and y, width and depth on the tray, mm."""
    (x, y), (w, d) = raster.offset[:2], raster.shape[:2]
    px, py = float(raster.pitch[0]), float(raster.pitch[1])
    return x * px, y * py, w * px, d * py


def tray_drawing(stack: Stack) -> str:
    """The whole tray: usable area, windows of the parts, origin corner, way of the rows."""
    profile = stack.profile
    width, depth = profile.tray_size[:2]
    unit = max(width, depth) / 100
    pad = 8.5 * unit
    out = [_start(width + 2 * pad, depth + 2 * pad, "the tray from above, front at the bottom")]
    out.append(
        _rect(pad, pad, width, depth, f'fill="#fff" stroke="#000" stroke-width="{unit / 2}"')
    )
    m = profile.edge_margin
    dashed = f'fill="none" stroke="#777" stroke-width="{unit / 4}" stroke-dasharray="{unit} {unit}"'
    out.append(_rect(pad + m, pad + m, width - 2 * m, depth - 2 * m, dashed))
    for number, part in enumerate(stack.parts, 1):
        x, y, w, d = _window(part.raster)
        y = depth - y - d  # drawn with y upwards
        style = f'fill="#cfd8e6" stroke="#1f3a63" stroke-width="{unit / 3}"'
        out.append(_rect(pad + x, pad + y, w, d, style))
        if len(stack.parts) <= 60:
            out.append(
                _text(pad + x + w / 2, pad + y + d / 2 + unit, 3 * unit, str(number), "middle")
            )
    out += [*_origin(profile, pad, unit), "</svg>"]
    return "".join(out)


def _origin(profile: PrintProfile, pad: float, unit: float) -> list[str]:
    width, depth = profile.tray_size[:2]
    right = profile.origin_corner.endswith("right")
    back = profile.origin_corner.startswith("back")
    x, y = pad + (width if right else 0.0), pad + (0.0 if back else depth)
    along = (-1 if right else 1, 1 if back else -1)
    beside = y + (-2.2 if back else 2.2) * unit
    out = [f'<circle cx="{x:.3f}" cy="{y:.3f}" r="{1.6 * unit:.3f}" fill="#b00020"/>']
    # The first pixel of an image lies at the origin corner; its rows run the way of the arrow.
    long = 14 * unit
    if profile.row_direction == "x":
        out.append(_arrow(x + along[0] * 2 * unit, beside, along[0] * long, 0, unit / 2))
    else:
        aside = x + (2.2 if right else -2.2) * unit
        out.append(_arrow(aside, y + along[1] * 2 * unit, 0, along[1] * long, unit / 2))
    anchor = "end" if right else "start"
    label = f"origin {profile.origin_corner}; rows run along {profile.row_direction}"
    out.append(_text(x, y + (-3.8 if back else 6.6) * unit, 4 * unit, label, anchor))
    middle, end = pad + width / 2, pad + depth
    if back:
        out.append(_text(middle, end + 5 * unit, 4 * unit, "front of the machine", "middle"))
    else:
        out.append(_text(middle, pad - 3 * unit, 4 * unit, "back of the machine", "middle"))
    return out


def shadow_drawing(stack: Stack, above: NDArray[np.bool_]) -> str:
    """The window of the images, with all sites over which there is material; y upwards."""
    step = max(1, -(-max(above.shape) // _LONGEST))
    thin = np.ascontiguousarray(~above[::step, ::step].T[::-1])
    png = encode_bitmap(np.packbits(thin, axis=1), thin.shape[1], (1000, 1000))
    x, y, w, d = _window(stack.raster)
    unit = max(w, d) / 100
    pad = 8 * unit
    uri = base64.b64encode(png).decode("ascii")
    return "".join(
        [
            _start(w + 2 * pad, d + 2 * pad, "shadow of the parts from above"),
            f'<image x="{pad:.3f}" y="{pad:.3f}" width="{w:.3f}" height="{d:.3f}" '
            f'preserveAspectRatio="none" opacity="0.6" href="data:image/png;base64,{uri}"/>',
            _rect(pad, pad, w, d, f'fill="none" stroke="#000" stroke-width="{unit / 3}"'),
            _text(pad, pad - 2 * unit, 5 * unit, f"y {y + d:.1f} mm"),
            _text(pad, pad + d + 5.5 * unit, 5 * unit, f"x {x:.1f}, y {y:.1f} mm"),
            _text(pad + w, pad + d + 5.5 * unit, 5 * unit, f"x {x + w:.1f} mm", "end"),
            "</svg>",
        ]
    )


def kit_drawing(plan: KitPlan) -> str:
    """The test kit from above, y upwards, each feature with the number of its row."""
    width, depth, _ = plan.size_mm
    c = plan.cell_mm
    out = [_start(width + 2, depth + 2, "the test kit from above, with the numbers of its rows")]
    out.append(_rect(1, 1, width, depth, 'fill="#fff" stroke="#000" stroke-width="0.25"'))
    for number, row in enumerate(plan.rows, 1):
        x, y = 1 + row.place_mm[0], 1 + depth - row.place_mm[1]
        w = h = 0.6 * c
        if row.kind == "dimension":
            w, h = (row.nominal_mm, 0.4 * c) if row.axis != "y" else (0.4 * c, row.nominal_mm)
            if row.axis == "z":  # the height of a bar that is drawn already
                out.append(_text(x + 0.9 * c, y + 0.12 * c, 0.3 * c, f"height {number}"))
                continue
        elif row.kind == "text":
            w, h = 5 * row.nominal_mm, 7 * row.nominal_mm
        elif row.kind == "peel":
            w, h = 1.6 * c, 1.2 * c
        out.append(
            _rect(x - w / 2, y - h / 2, w, h, 'fill="#e8edf5" stroke="#333" stroke-width="0.12"')
        )
        out.append(_text(x, y + 0.12 * c, 0.3 * c, str(number), "middle"))
    return "".join([*out, "</svg>"])
