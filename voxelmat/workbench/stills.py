"""Pictures that stand still: what a machine without OpenGL shows in place of the view in space."""

from __future__ import annotations

import base64
import io
from html import escape

import ipywidgets
from PIL import Image

from voxelmat.workbench.shown import Shown
from voxelmat.workflow.depth import draw_faces

__all__ = ["drawn_without_gl", "still_picture"]

_WIDTH = 840  # pixels


def drawn_without_gl(shown: Shown) -> bytes:
    """The part in space, cut open, drawn by NumPy alone, as JPEG."""
    quads, rgb = shown.surface("y", 0.5)
    shot = draw_faces(quads.faces, rgb, quads.spacing, width=_WIDTH)
    store = io.BytesIO()
    Image.fromarray(shot.rgb).save(store, "JPEG", quality=90)
    return store.getvalue()


def still_picture(jpeg: bytes, title: str) -> ipywidgets.Widget:
    """A JPEG as a widget."""
    data = base64.b64encode(jpeg).decode()
    return ipywidgets.HTML(
        f'<img src="data:image/jpeg;base64,{data}" alt="Picture of {escape(title)}, cut open">'
    )
