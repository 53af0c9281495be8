"""voxelmat: decide, prove and print the material at every droplet site of a jetted part.

The names below are loaded on first use, so that ``import voxelmat`` stays fast and needs
neither numba nor VTK nor widgets.
"""

from __future__ import annotations

import sys
from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from voxelmat.fea.static import solve
    from voxelmat.io.design import load_design
    from voxelmat.io.materials import load_library
    from voxelmat.io.mesh import read_mesh
    from voxelmat.model.blend import Blend
    from voxelmat.model.grid import VoxelGrid
    from voxelmat.model.loadcase import LoadCase
    from voxelmat.model.material import Material
    from voxelmat.model.part import Part
    from voxelmat.model.profile import PrintProfile
    from voxelmat.printing.preflight import preflight
    from voxelmat.printing.profile import load_profile
    from voxelmat.printing.readback import read_stack
    from voxelmat.printing.stack import write_stack
    from voxelmat.topopt.optimise import optimise
    from voxelmat.workflow.build import build
    from voxelmat.workflow.pipeline import run
    from voxelmat.workflow.report import write_report

__version__ = "0.1.0"

_HOMES = {
    "Blend": "voxelmat.model.blend",
    "LoadCase": "voxelmat.model.loadcase",
    "Material": "voxelmat.model.material",
    "Part": "voxelmat.model.part",
    "PrintProfile": "voxelmat.model.profile",
    "VoxelGrid": "voxelmat.model.grid",
    "build": "voxelmat.workflow.build",
    "load_design": "voxelmat.io.design",
    "load_library": "voxelmat.io.materials",
    "load_profile": "voxelmat.printing.profile",
    "optimise": "voxelmat.topopt.optimise",
    "preflight": "voxelmat.printing.preflight",
    "read_mesh": "voxelmat.io.mesh",
    "read_stack": "voxelmat.printing.readback",
    "run": "voxelmat.workflow.pipeline",
    "solve": "voxelmat.fea.static",
    "write_report": "voxelmat.workflow.report",
    "write_stack": "voxelmat.printing.stack",
}

__all__ = [
    "Blend",
    "LoadCase",
    "Material",
    "Part",
    "PrintProfile",
    "VoxelGrid",
    "__version__",
    "build",
    "load_design",
    "load_library",
    "load_profile",
    "optimise",
    "preflight",
    "read_mesh",
    "read_stack",
    "run",
    "solve",
    "write_report",
    "write_stack",
]


def __getattr__(name: str) -> Any:
    if name in _HOMES:
        return getattr(import_module(_HOMES[name]), name)
    raise AttributeError(f"module 'voxelmat' has no attribute {name!r}")


def __dir__() -> list[str]:
    return sorted(__all__)


if "IPython" in sys.modules:  # in a notebook, parts, results and stacks then show themselves
    from voxelmat.workbench.hook import register

    register()
