"""One drawing with VTK: a surface, its ghosts and its arrows, an eye, and pictures of them."""

from __future__ import annotations

import io
import os
from collections.abc import Mapping, Sequence
from functools import cache
from typing import Any

import numpy as np
from numpy.typing import NDArray
from PIL import Image

from voxelmat.workbench.captions import Line, with_legend, write_on
from voxelmat.workbench.eye import Eye
from voxelmat.workbench.glprobe import probe_gl
from voxelmat.workbench.marks import Arrow
from voxelmat.workbench.renderthread import close_at_end, forget, on_render_thread
from voxelmat.workbench.solid import Surface
from voxelmat.workbench.voxfaces import Quads

__all__ = ["SIZE", "Scene"]

#: Width and height of a picture before the screen asks for its own size, pixels.
SIZE = (840, 480)
_NARROWEST, _WIDEST = 240, 1280  # pixels; wider ones take too long while the part is turned
_MARGIN = 1.15
_ROOM_ABOVE = 1.3  # for notes and arrows
_PAPER = {False: "white", True: "#1c1c1c"}
Rgb = NDArray[np.uint8]


class Scene:
    """What is drawn, and from where.

    Parameters
    ----------
    low, high : ndarray, shape (3,)
        The box that the first picture has room for, mm.
    size : tuple of int
        Width and height of the pictures, pixels.

    Attributes
    ----------
    scale : float
        Pixels of a picture to one on the screen.
    eye : Eye
    notes : list of str
        Written into every picture.
    lines : list of Line
        Places that are marked, and a measured line.
    dark : bool
        Whether the background is.

    Raises
    ------
    RuntimeError
        Where the machine cannot draw with OpenGL; the message says what to install.
    """

    def __init__(
        self,
        low: NDArray[np.float64],
        high: NDArray[np.float64],
        size: tuple[int, int] = SIZE,
    ) -> None:
        self.eye = Eye()
        self.notes: list[str] = []
        self.lines: list[Line] = []
        self.dark = False
        self.size = size
        self.scale = 1.0
        self._plotter: Any = None
        self._actors: dict[str, Any] = {}
        self._points: NDArray[np.float32] = np.zeros((0, 3), dtype=np.float32)
        self.frame(low, high)
        on_render_thread(self._build)
        close_at_end(self)

    def frame(self, low: NDArray[np.float64], high: NDArray[np.float64]) -> None:
        """Have room for a box at zoom 1."""
        self._centre = 0.5 * (low + high)
        self._radius = max(0.5 * float(np.linalg.norm(high - low)), 1e-6)
        # Wide enough at every azimuth, high enough at the first elevation.
        across = 0.5 * float(np.hypot(*(high - low)[:2]))
        up = np.abs(Eye().axes()[1])
        wide = across * self.size[1] / self.size[0]
        tall = 0.5 * float((high - low) @ up)
        self._half = max(_MARGIN * wide, _ROOM_ABOVE * tall, 1e-6)

    def fill(self, width: float, ratio: float) -> bool:
        """Draw for a place on the screen this wide, of `ratio` pixels each; True if that is new."""
        wanted = min(max(round(width * ratio), _NARROWEST), _WIDEST)
        self.scale = wanted / max(width, 1.0)
        if abs(wanted - self.size[0]) < 4:
            return False
        self.size = (wanted, round(wanted * self.size[1] / self.size[0]))
        return True

    def room_for(self, half: float) -> float:
        """Have room for at least this half height at zoom 1; what it is afterwards, mm."""
        self._half = max(self._half, half)
        return self._half

    @property
    def focus(self) -> NDArray[np.float64]:
        """What lies in the middle of the picture, mm."""
        return np.asarray(self._centre + np.array(self.eye.aside))

    @property
    def half(self) -> float:
        """Half the height of the picture, mm."""
        return self._half / self.eye.zoom

    @property
    def pixel_mm(self) -> float:
        """Edge of a pixel of a frame, mm."""
        return 2.0 * self.half / self.size[1]

    def line_of_sight(self, x: float, y: float) -> tuple[float, float]:
        """Coordinates along right and up, mm, of a place in the picture, shares of its size."""
        right, up, _ = self.eye.axes() @ self.focus
        return (
            float(right + (x - 0.5) * self.size[0] * self.pixel_mm),
            float(up + (0.5 - y) * self.size[1] * self.pixel_mm),
        )

    def along(self, axis: int, dx: float, dy: float) -> float:
        """How far a move in the picture (shares of its height, down) goes along an axis, mm."""
        across = self.eye.axes()[:2, axis]
        length = float(np.hypot(*across))
        # An axis that points at the viewer has no direction in the picture: then up is onwards.
        share = (dx * across[0] - dy * across[1]) / length**2 if length > 0.2 else -dy
        return share * 2.0 * self.half

    def fit(self) -> None:
        """Move and zoom so that what is drawn fills the picture."""
        if not len(self._points):
            return
        axes = self.eye.axes()
        flat = self._points @ axes.T.astype(np.float32)
        low, high = flat.min(axis=0).astype(float), flat.max(axis=0).astype(float)
        x, y, z = (0.5 * (low + high)) @ axes - self._centre
        self.eye.aside = (float(x), float(y), float(z))
        span = high - low
        need = 0.5 * max(span[1], span[0] * self.size[1] / self.size[0])
        self.eye.zoom = 1.0
        self.eye.nearer(self._half / (_MARGIN * max(float(need), 1e-9)))

    # ------------------------------------------------------------------ on the render thread
    def _build(self) -> None:
        probe = probe_gl()
        if not probe.works:
            raise RuntimeError(probe.reason)
        os.environ.update(dict(probe.environment))  # read when VTK is first imported
        import pyvista

        plotter = pyvista.Plotter(off_screen=True, window_size=self.size, lighting="none")
        plotter.disable_anti_aliasing()
        lamp = pyvista.Light(light_type="camera light", intensity=0.6)
        lamp.position = (-0.6, 0.9, 1.4)
        plotter.add_light(lamp)
        plotter.add_light(pyvista.Light(light_type="headlight", intensity=0.12))
        start = pyvista.Triangle()
        for name, opacity in (("firm", 1.0), ("ghost", 0.22), ("arrows", 1.0)):
            start.cell_data["rgb"] = np.zeros((1, 3), dtype=np.uint8)
            actor = plotter.add_mesh(
                start.copy(),
                scalars="rgb",
                rgb=True,
                ambient=0.35,
                opacity=opacity,
                show_scalar_bar=False,
            )
            actor.visibility = False
            self._actors[name] = actor
        self._plotter = plotter

    def _put(self, surface: Surface, rgb: Rgb, arrows: Sequence[Arrow]) -> None:
        for name, quads, colours in (
            ("firm", surface.quads, rgb),
            ("ghost", surface.ghost, surface.ghost_rgb),
        ):
            actor = self._actors[name]
            actor.visibility = len(quads) > 0
            if len(quads):
                actor.mapper.dataset = _mesh(quads, colours)
        actor = self._actors["arrows"]
        actor.visibility = len(arrows) > 0
        if arrows:
            actor.mapper.dataset = _arrow_mesh(arrows)

    def _image(self, scale: int = 1) -> Image.Image:
        axes = self.eye.axes()
        plotter = self._plotter
        if tuple(plotter.window_size) != self.size:
            plotter.window_size = self.size
        plotter.set_background(_PAPER[self.dark])
        camera = plotter.camera
        camera.parallel_projection = True
        camera.focal_point = tuple(self.focus)
        camera.position = tuple(self.focus + 4.0 * self._radius * axes[2])
        camera.up = tuple(axes[1])
        camera.parallel_scale = self.half
        plotter.renderer.ResetCameraClippingRange()
        plotter.render()  # a screenshot alone would give the last picture again
        pixels = plotter.screenshot(None, return_img=True, scale=scale)
        image = Image.fromarray(np.ascontiguousarray(pixels[..., :3]))
        write_on(
            image,
            axes,
            self.focus,
            self.half,
            self.notes,
            self.lines,
            dark=self.dark,
            scale=scale * self.scale,
        )
        return image

    def _close(self) -> None:
        if self._plotter is not None:
            self._plotter.close()
            self._plotter = None
            self._actors = {}

    # ------------------------------------------------------------------ from any thread
    def put(self, surface: Surface, rgb: Rgb, arrows: Sequence[Arrow] = ()) -> None:
        """Draw another surface from now on, in colours (n, 3), seen from the same place."""
        points = surface.quads.points
        self._points = points if len(points) else surface.ghost.points
        on_render_thread(self._put, surface, rgb, arrows)

    def jpeg(self, quality: int = 85) -> bytes:
        """A picture as JPEG bytes."""
        store = io.BytesIO()
        on_render_thread(self._image).save(store, "JPEG", quality=quality)
        return store.getvalue()

    def png(self, legend: Mapping[str, Any], scale: int = 2) -> bytes:
        """A picture as PNG bytes, `scale` times as large, over what its colours mean."""
        store = io.BytesIO()
        image = on_render_thread(self._image, scale)
        made = with_legend(image, legend, dark=self.dark, scale=scale * self.scale)
        made.save(store, "PNG", compress_level=4)
        return store.getvalue()

    @property
    def closed(self) -> bool:
        """True after `close`."""
        return self._plotter is None

    def close(self) -> None:
        """Free the plotter; twice is no harm, nor is it after the interpreter began to end."""
        forget(self)
        if not self.closed:
            on_render_thread(self._close)


def _mesh(quads: Quads, rgb: Rgb) -> Any:
    import pyvista

    corners = np.arange(4 * len(quads), dtype=np.int64).reshape(-1, 4)
    mesh = pyvista.PolyData.from_regular_faces(quads.points, corners)
    mesh.cell_data["rgb"] = rgb
    mesh.cell_data["Normals"] = quads.normals
    mesh.cell_data.active_normals_name = "Normals"
    return mesh


@cache
def _one_arrow() -> tuple[NDArray[np.float64], NDArray[np.int64]]:
    """An arrow of length 1 along x: points and triangles."""
    import pyvista

    arrow = pyvista.Arrow(
        tip_length=0.34, tip_radius=0.11, tip_resolution=12, shaft_radius=0.04, shaft_resolution=10
    ).triangulate()
    return np.array(arrow.points, dtype=float), np.array(arrow.regular_faces, dtype=np.int64)


def _arrow_mesh(arrows: Sequence[Arrow]) -> Any:
    """All arrows as one mesh."""
    import pyvista

    points, faces = _one_arrow()
    places, corners, rgb = [], [], []
    for n, arrow in enumerate(arrows):
        tail, tip = np.array(arrow.tail), np.array(arrow.tip)
        length = float(np.linalg.norm(tip - tail))
        along = (tip - tail) / length
        beside = np.cross(along, np.eye(3)[int(np.abs(along).argmin())])
        beside /= np.linalg.norm(beside)
        places.append(tail + length * points @ np.stack([along, beside, np.cross(along, beside)]))
        corners.append(faces + n * len(points))
        colour = [int(arrow.colour[a : a + 2], 16) for a in (1, 3, 5)]
        rgb.append(np.tile(np.array(colour, dtype=np.uint8), (len(faces), 1)))
    mesh = pyvista.PolyData.from_regular_faces(np.concatenate(places), np.concatenate(corners))
    mesh.cell_data["rgb"] = np.concatenate(rgb)
    return mesh
