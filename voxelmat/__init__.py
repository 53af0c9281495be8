"""voxelmat: decide, prove and print the material at every droplet site of a jetted part.

The names below are loaded on first use, so that ``import voxelmat`` stays fast and needs
neither numba nor VTK nor widgets.
"""

from __future__ import annotations

import sys
from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from voxelmat.fea.buckling import buckling
    from voxelmat.fea.cases import solve_cases
    from voxelmat.fea.contact import contact, press
    from voxelmat.fea.harmonic import harmonic
    from voxelmat.fea.heat import conduct, conduct_over_time
    from voxelmat.fea.homogenise import homogenise
    from voxelmat.fea.interfaces import interface_tractions
    from voxelmat.fea.modal import modes
    from voxelmat.fea.refine import error_estimate
    from voxelmat.fea.static import solve
    from voxelmat.io.design import load_design
    from voxelmat.io.materials import load_library
    from voxelmat.io.mesh import read_mesh
    from voxelmat.io.vti import write_vti
    from voxelmat.model.blend import Blend
    from voxelmat.model.grid import VoxelGrid
    from voxelmat.model.heatcase import HeatCase
    from voxelmat.model.loadcase import LoadCase
    from voxelmat.model.material import Material
    from voxelmat.model.part import Part
    from voxelmat.model.profile import PrintProfile
    from voxelmat.printing.blend_cell import homogenise_blend
    from voxelmat.printing.preflight import preflight
    from voxelmat.printing.profile import load_profile
    from voxelmat.printing.readback import read_stack
    from voxelmat.printing.stack import write_stack
    from voxelmat.topopt.optimise import optimise
    from voxelmat.workbench.app import open_workbench
    from voxelmat.workflow.build import build
    from voxelmat.workflow.pipeline import run
    from voxelmat.workflow.report import write_report

__version__ = "0.1.0"

_HOMES = {
    "Blend": "voxelmat.model.blend",
    "HeatCase": "voxelmat.model.heatcase",
    "LoadCase": "voxelmat.model.loadcase",
    "Material": "voxelmat.model.material",
    "Part": "voxelmat.model.part",
    "PrintProfile": "voxelmat.model.profile",
    "VoxelGrid": "voxelmat.model.grid",
    "buckling": "voxelmat.fea.buckling",
    "build": "voxelmat.workflow.build",
    "conduct": "voxelmat.fea.heat",
    "conduct_over_time": "voxelmat.fea.heat",
    "contact": "voxelmat.fea.contact",
    "error_estimate": "voxelmat.fea.refine",
    "harmonic": "voxelmat.fea.harmonic",
    "homogenise": "voxelmat.fea.homogenise",
    "homogenise_blend": "voxelmat.printing.blend_cell",
    "interface_tractions": "voxelmat.fea.interfaces",
    "load_design": "voxelmat.io.design",
    "load_library": "voxelmat.io.materials",
    "load_profile": "voxelmat.printing.profile",
    "modes": "voxelmat.fea.modal",
    "open_workbench": "voxelmat.workbench.app",
    "optimise": "voxelmat.topopt.optimise",
    "preflight": "voxelmat.printing.preflight",
    "press": "voxelmat.fea.contact",
    "read_mesh": "voxelmat.io.mesh",
    "read_stack": "voxelmat.printing.readback",
    "run": "voxelmat.workflow.pipeline",
    "solve": "voxelmat.fea.static",
    "solve_cases": "voxelmat.fea.cases",
    "write_report": "voxelmat.workflow.report",
    "write_stack": "voxelmat.printing.stack",
    "write_vti": "voxelmat.io.vti",
}

__all__ = [
    "Blend",
    "HeatCase",
    "LoadCase",
    "Material",
    "Part",
    "PrintProfile",
    "VoxelGrid",
    "__version__",
    "buckling",
    "build",
    "conduct",
    "conduct_over_time",
    "contact",
    "error_estimate",
    "harmonic",
    "homogenise",
    "homogenise_blend",
    "interface_tractions",
    "load_design",
    "load_library",
    "load_profile",
    "modes",
    "open_workbench",
    "optimise",
    "preflight",
    "press",
    "read_mesh",
    "read_stack",
    "run",
    "solve",
    "solve_cases",
    "write_report",
    "write_stack",
    "write_vti",
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
