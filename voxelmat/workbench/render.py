"""VTK drawing on one thread of its own: callbacks come on any thread, OpenGL belongs to one."""

from __future__ import annotations

import atexit
import io
import math
import os
import threading
from collections.abc import Callable
from concurrent.futures import Future
from dataclasses import dataclass
from queue import SimpleQueue
from typing import Any, ParamSpec, TypeVar

import numpy as np
from numpy.typing import NDArray
from PIL import Image, ImageDraw, ImageFont

from voxelmat.workbench.glprobe import probe_gl
from voxelmat.workbench.voxfaces import Quads
from voxelmat.workflow.depth import Camera

__all__ = ["SIZE", "Scene", "on_render_thread"]

P = ParamSpec("P")
T = TypeVar("T")
#: Width and height of every picture, pixels.
SIZE = (840, 480)
_MARGIN = 1.15


class _RenderThread:
    """One daemon thread that runs what it is given, in order, until the interpreter ends."""

    def __init__(self) -> None:
        self._jobs: SimpleQueue[Callable[[], None] | None] = SimpleQueue()
        self._thread = threading.Thread(target=self._work, name="voxelmat-render", daemon=True)
        self._thread.start()

    def _work(self) -> None:
        while (job := self._jobs.get()) is not None:
            job()

    def call(self, function: Callable[P, T], *args: P.args, **kwargs: P.kwargs) -> T:
        """Run on the render thread and wait for the answer."""
        if threading.current_thread() is self._thread:
            return function(*args, **kwargs)
        if not self._thread.is_alive():
            raise RuntimeError("The program is ending; nothing is drawn any more.")
        answer: Future[T] = Future()

        def job() -> None:
            try:
                answer.set_result(function(*args, **kwargs))
            except BaseException as error:  # noqa: BLE001 (handed to the caller, not hidden)
                answer.set_exception(error)

        self._jobs.put(job)
        return answer.result()

    def stop(self) -> None:
        """End after what is queued."""
        self._jobs.put(None)
        self._thread.join(timeout=10)


_lock = threading.RLock()  # a widget may be collected, and closed, while it is held
_thread: _RenderThread | None = None
_open: set[Scene] = set()


def _the_thread() -> _RenderThread:
    global _thread
    with _lock:
        if _thread is None:
            _thread = _RenderThread()
            atexit.register(_shut_down)
        return _thread


def _shut_down() -> None:
    if _thread is not None:
        for scene in list(_open):
            scene.close()
        _thread.stop()


def on_render_thread(function: Callable[P, T], *args: P.args, **kwargs: P.kwargs) -> T:
    """Run `function` on the one thread that may touch VTK, and wait for its answer."""
    return _the_thread().call(function, *args, **kwargs)


@dataclass(slots=True)
class _Eye:
    """Where the viewer stands: a turntable that never rolls."""

    azimuth: float = -62.0
    elevation: float = 24.0
    zoom: float = 1.0

    def turn(self, across: float, up: float) -> None:
        self.azimuth = (self.azimuth - across) % 360.0
        self.elevation = min(89.0, max(-89.0, self.elevation + up))

    def camera(self) -> Camera:
        return Camera(azimuth=self.azimuth, elevation=self.elevation)


class Scene:
    """One drawing: quadrilaterals with a colour each, an eye, and JPEG pictures of both.

    Parameters
    ----------
    quads : Quads
    rgb : ndarray of uint8, shape (n, 3)
    note : str
        Written into every picture: the factor of a deformation, the step of a preview.
    """

    def __init__(self, quads: Quads, rgb: NDArray[np.uint8], note: str = "") -> None:
        self.eye = _Eye()
        self.note = note
        self._plotter: Any = None
        self._actor: Any = None
        low, high = quads.points.min(axis=0), quads.points.max(axis=0)
        self._centre = 0.5 * (low + high).astype(float)
        self._radius = 0.5 * float(np.linalg.norm(high - low))
        # Wide enough at every azimuth, high enough at the first elevation.
        across = 0.5 * float(np.hypot(*(high - low)[:2]))
        up = np.abs(self.eye.camera().axes()[1])
        self._half = _MARGIN * max(across * SIZE[1] / SIZE[0], 0.5 * float((high - low) @ up))
        on_render_thread(self._build, quads, rgb)
        _open.add(self)

    # Methods with a leading underscore run on the render thread.
    def _mesh(self, quads: Quads, rgb: NDArray[np.uint8]) -> Any:
        import pyvista

        corners = np.arange(4 * len(quads), dtype=np.int64).reshape(-1, 4)
        mesh = pyvista.PolyData.from_regular_faces(quads.points, corners)
        mesh.cell_data["rgb"] = rgb
        mesh.cell_data["Normals"] = quads.normals
        mesh.cell_data.active_normals_name = "Normals"
        return mesh

    def _build(self, quads: Quads, rgb: NDArray[np.uint8]) -> None:
        probe = probe_gl()
        if not probe.works:
            raise RuntimeError(probe.reason)
        os.environ.update(dict(probe.environment))  # read when VTK is first imported
        import pyvista

        self._plotter = pyvista.Plotter(off_screen=True, window_size=SIZE, lighting="none")
        self._plotter.set_background("white")
        self._plotter.disable_anti_aliasing()
        lamp = pyvista.Light(light_type="camera light", intensity=0.6)
        lamp.position = (-0.6, 0.9, 1.4)
        self._plotter.add_light(lamp)
        self._plotter.add_light(pyvista.Light(light_type="headlight", intensity=0.12))
        self._actor = self._plotter.add_mesh(
            self._mesh(quads, rgb), scalars="rgb", rgb=True, ambient=0.35, show_scalar_bar=False
        )

    def _picture(self, quality: int) -> bytes:
        axes = self.eye.camera().axes()
        camera = self._plotter.camera
        camera.parallel_projection = True
        camera.focal_point = tuple(self._centre)
        camera.position = tuple(self._centre + 4.0 * self._radius * axes[2])
        camera.up = tuple(axes[1])
        camera.parallel_scale = self._half / self.eye.zoom
        self._plotter.renderer.ResetCameraClippingRange()
        self._plotter.render()  # a screenshot alone would give the last picture again
        image = Image.fromarray(self._plotter.screenshot(None, return_img=True))
        self._write_on(image, axes, camera.parallel_scale)
        store = io.BytesIO()
        image.save(store, "JPEG", quality=quality)
        return store.getvalue()

    def _write_on(self, image: Image.Image, axes: NDArray[np.float64], half: float) -> None:
        """Arrows of the axes, a bar for the scale, and the note."""
        draw = ImageDraw.Draw(image)
        font = ImageFont.load_default(15)
        width, height = image.size
        x0, y0 = 48, height - 48
        for a in range(3):
            dx, dy = 34 * axes[0, a], -34 * axes[1, a]
            draw.line((x0, y0, x0 + dx, y0 + dy), fill="black", width=2)
            draw.text(
                (x0 + 1.35 * dx, y0 + 1.35 * dy), "xyz"[a], fill="black", font=font, anchor="mm"
            )
        span = 0.2 * width * 2.0 * half / height
        power = 10.0 ** math.floor(math.log10(span))
        bar = power * max(s for s in (1, 2, 5) if s * power <= span)
        x1 = width - 20
        left = x1 - bar * height / (2.0 * half)
        draw.line((left, height - 22, x1, height - 22), fill="black", width=3)
        draw.text(
            (0.5 * (left + x1), height - 28), f"{bar:g} mm", fill="black", font=font, anchor="mb"
        )
        if self.note:
            draw.text((12, 10), self.note, fill="black", font=font)

    def _swap(self, quads: Quads, rgb: NDArray[np.uint8]) -> None:
        self._actor.mapper.dataset = self._mesh(quads, rgb)

    def _close(self) -> None:
        if self._plotter is not None:
            self._plotter.close()
            self._plotter = self._actor = None

    # ------------------------------------------------------------------ from any thread
    def jpeg(self, quality: int = 85) -> bytes:
        """A picture as JPEG bytes."""
        return on_render_thread(self._picture, quality)

    def swap(self, quads: Quads, rgb: NDArray[np.uint8]) -> None:
        """Draw other quadrilaterals from now on, seen from the same place."""
        on_render_thread(self._swap, quads, rgb)

    @property
    def closed(self) -> bool:
        """True after `close`."""
        return self._plotter is None

    def close(self) -> None:
        """Free the plotter; twice is no harm, nor is it after the interpreter began to end."""
        _open.discard(self)
        if not self.closed:
            on_render_thread(self._close)
