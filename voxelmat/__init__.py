"""voxelmat: decide, prove and print the material at every droplet site of a jetted part."""

from __future__ import annotations

__version__ = "0.1.0"
