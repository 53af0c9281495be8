"""Where the viewer stands: a turntable that never rolls, with zoom and a point looked at."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from voxelmat.workflow.depth import Camera

__all__ = ["VIEWS", "Eye"]

#: Azimuth and elevation of the named views, degrees.
VIEWS = {"x": (0.0, 0.0), "y": (-90.0, 0.0), "z": (-90.0, 89.0), "i": (-62.0, 24.0)}
_ZOOM = (0.2, 50.0)


@dataclass(slots=True)
class Eye:
    """Angles in degrees; `aside` is what is looked at, mm from the middle of the box."""

    azimuth: float = VIEWS["i"][0]
    elevation: float = VIEWS["i"][1]
    zoom: float = 1.0
    aside: tuple[float, float, float] = (0.0, 0.0, 0.0)

    def axes(self) -> NDArray[np.float64]:
        """Right, up and towards the viewer, as rows."""
        return Camera(azimuth=self.azimuth, elevation=self.elevation).axes()

    def turn(self, across: float, up: float) -> None:
        """Go round by degrees; over the poles it does not go."""
        self.azimuth = (self.azimuth - across) % 360.0
        self.elevation = min(89.0, max(-89.0, self.elevation + up))

    def nearer(self, factor: float) -> None:
        """Enlarge the picture by a factor."""
        if not (math.isfinite(factor) and factor > 0):
            raise ValueError(f"a zoom by {factor}")
        self.zoom = min(_ZOOM[1], max(_ZOOM[0], self.zoom * factor))

    def pan(self, right: float, up: float) -> None:
        """Move the part to the right and up in the picture, mm."""
        axes = self.axes()
        x, y, z = np.array(self.aside) - right * axes[0] - up * axes[1]
        self.aside = (float(x), float(y), float(z))

    def told(self, message: Mapping[str, Any], height_mm: float) -> None:
        """Move as the screen asks: "turn", "pan" (shares of the picture's height), "zoom", "view".

        `height_mm` is the height of the picture on the part.
        """
        kind = message["kind"]
        if kind == "turn":
            self.turn(0.5 * float(message["dx"]), 0.5 * float(message["dy"]))
        elif kind == "pan":
            self.pan(height_mm * float(message["dx"]), -height_mm * float(message["dy"]))
        elif kind == "zoom":
            self.nearer(float(message["factor"]))
        elif kind == "view":
            self.azimuth, self.elevation = VIEWS[message["to"]]

    def kept(self) -> dict[str, Any]:
        """As plain data that a draft keeps."""
        return {
            "azimuth_deg": round(self.azimuth, 3),
            "elevation_deg": round(self.elevation, 3),
            "zoom": round(self.zoom, 4),
            "aside_mm": [round(v, 4) for v in self.aside],
        }

    @classmethod
    def of(cls, view: Mapping[str, Any]) -> Eye:
        """From what a draft keeps; a broken record is as none."""
        try:
            x, y, z = map(float, view["aside_mm"])
            eye = cls(azimuth=float(view["azimuth_deg"]), aside=(x, y, z))
            eye.turn(0.0, float(view["elevation_deg"]) - eye.elevation)
            eye.nearer(float(view["zoom"]))
        except (KeyError, TypeError, ValueError):
            return cls()
        return eye
