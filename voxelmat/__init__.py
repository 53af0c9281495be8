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
    from voxelmat.io.bigpart import StoredPart, open_big_part
    from voxelmat.io.bigpart_write import fill_big_part, save_big_part
    from voxelmat.io.design import load_design
    from voxelmat.io.materials import load_library
    from voxelmat.io.mesh import read_mesh
    from voxelmat.io.volumes import export, import_volume, volume_to_part
    from voxelmat.io.vti import write_vti
    from voxelmat.model.blend import Blend
    from voxelmat.model.design_rules import Robust
    from voxelmat.model.design_spec import DesignSpec
    from voxelmat.model.goal import AtLeast, AtMost, Maximise, Minimise
    from voxelmat.model.grid import VoxelGrid
    from voxelmat.model.halftone import Halftone
    from voxelmat.model.heatcase import HeatCase
    from voxelmat.model.inspection import Dimension
    from voxelmat.model.loadcase import LoadCase
    from voxelmat.model.material import Material
    from voxelmat.model.part import Part
    from voxelmat.model.profile import PrintProfile
    from voxelmat.model.volume import Volume
    from voxelmat.printing.blend_cell import homogenise_blend
    from voxelmat.printing.estimate import estimate, forecast
    from voxelmat.printing.fixes import fix_part
    from voxelmat.printing.inspection import measure
    from voxelmat.printing.job import PrintJob
    from voxelmat.printing.orient import compare_orientations
    from voxelmat.printing.preflight import check_stack, preflight
    from voxelmat.printing.profile import load_profile
    from voxelmat.printing.proof import write_proof
    from voxelmat.printing.readback import read_stack
    from voxelmat.printing.stack import write_job, write_stack
    from voxelmat.printing.tray import Tray, TrayEntry, lay_out, write_tray
    from voxelmat.shape.to_store import voxelise_to_store
    from voxelmat.topopt.feasibility import reachable
    from voxelmat.topopt.optimise import optimise
    from voxelmat.topopt.sizes import minimum_from_profile
    from voxelmat.workbench.app import open_workbench
    from voxelmat.workbench.comparison import compare
    from voxelmat.workflow.build import build
    from voxelmat.workflow.pipeline import run
    from voxelmat.workflow.report import write_report
    from voxelmat.workflow.ticket import write_ticket
    from voxelmat.workflow.tradeoff import Sweep, tradeoff
    from voxelmat.workflow.traying import run_tray

__version__ = "0.1.0"

_HOMES = {
    "AtLeast": "voxelmat.model.goal",
    "AtMost": "voxelmat.model.goal",
    "Blend": "voxelmat.model.blend",
    "DesignSpec": "voxelmat.model.design_spec",
    "Dimension": "voxelmat.model.inspection",
    "Halftone": "voxelmat.model.halftone",
    "HeatCase": "voxelmat.model.heatcase",
    "LoadCase": "voxelmat.model.loadcase",
    "Material": "voxelmat.model.material",
    "Maximise": "voxelmat.model.goal",
    "Minimise": "voxelmat.model.goal",
    "Part": "voxelmat.model.part",
    "PrintJob": "voxelmat.printing.job",
    "PrintProfile": "voxelmat.model.profile",
    "Robust": "voxelmat.model.design_rules",
    "StoredPart": "voxelmat.io.bigpart",
    "Sweep": "voxelmat.workflow.tradeoff",
    "Tray": "voxelmat.printing.tray",
    "TrayEntry": "voxelmat.printing.tray",
    "Volume": "voxelmat.model.volume",
    "VoxelGrid": "voxelmat.model.grid",
    "buckling": "voxelmat.fea.buckling",
    "build": "voxelmat.workflow.build",
    "check_stack": "voxelmat.printing.preflight",
    "compare": "voxelmat.workbench.comparison",
    "compare_orientations": "voxelmat.printing.orient",
    "conduct": "voxelmat.fea.heat",
    "conduct_over_time": "voxelmat.fea.heat",
    "contact": "voxelmat.fea.contact",
    "error_estimate": "voxelmat.fea.refine",
    "estimate": "voxelmat.printing.estimate",
    "export": "voxelmat.io.volumes",
    "fill_big_part": "voxelmat.io.bigpart_write",
    "fix_part": "voxelmat.printing.fixes",
    "forecast": "voxelmat.printing.estimate",
    "harmonic": "voxelmat.fea.harmonic",
    "homogenise": "voxelmat.fea.homogenise",
    "homogenise_blend": "voxelmat.printing.blend_cell",
    "import_volume": "voxelmat.io.volumes",
    "interface_tractions": "voxelmat.fea.interfaces",
    "lay_out": "voxelmat.printing.tray",
    "load_design": "voxelmat.io.design",
    "load_library": "voxelmat.io.materials",
    "load_profile": "voxelmat.printing.profile",
    "measure": "voxelmat.printing.inspection",
    "minimum_from_profile": "voxelmat.topopt.sizes",
    "modes": "voxelmat.fea.modal",
    "open_big_part": "voxelmat.io.bigpart",
    "open_workbench": "voxelmat.workbench.app",
    "optimise": "voxelmat.topopt.optimise",
    "preflight": "voxelmat.printing.preflight",
    "press": "voxelmat.fea.contact",
    "reachable": "voxelmat.topopt.feasibility",
    "read_mesh": "voxelmat.io.mesh",
    "read_stack": "voxelmat.printing.readback",
    "run": "voxelmat.workflow.pipeline",
    "run_tray": "voxelmat.workflow.traying",
    "save_big_part": "voxelmat.io.bigpart_write",
    "solve": "voxelmat.fea.static",
    "solve_cases": "voxelmat.fea.cases",
    "tradeoff": "voxelmat.workflow.tradeoff",
    "volume_to_part": "voxelmat.io.volumes",
    "voxelise_to_store": "voxelmat.shape.to_store",
    "write_job": "voxelmat.printing.stack",
    "write_proof": "voxelmat.printing.proof",
    "write_report": "voxelmat.workflow.report",
    "write_stack": "voxelmat.printing.stack",
    "write_ticket": "voxelmat.workflow.ticket",
    "write_tray": "voxelmat.printing.tray",
    "write_vti": "voxelmat.io.vti",
}

__all__ = [
    "AtLeast",
    "AtMost",
    "Blend",
    "DesignSpec",
    "Dimension",
    "Halftone",
    "HeatCase",
    "LoadCase",
    "Material",
    "Maximise",
    "Minimise",
    "Part",
    "PrintJob",
    "PrintProfile",
    "Robust",
    "StoredPart",
    "Sweep",
    "Tray",
    "TrayEntry",
    "Volume",
    "VoxelGrid",
    "__version__",
    "buckling",
    "build",
    "check_stack",
    "compare",
    "compare_orientations",
    "conduct",
    "conduct_over_time",
    "contact",
    "error_estimate",
    "estimate",
    "export",
    "fill_big_part",
    "fix_part",
    "forecast",
    "harmonic",
    "homogenise",
    "homogenise_blend",
    "import_volume",
    "interface_tractions",
    "lay_out",
    "load_design",
    "load_library",
    "load_profile",
    "measure",
    "minimum_from_profile",
    "modes",
    "open_big_part",
    "open_workbench",
    "optimise",
    "preflight",
    "press",
    "reachable",
    "read_mesh",
    "read_stack",
    "run",
    "run_tray",
    "save_big_part",
    "solve",
    "solve_cases",
    "tradeoff",
    "volume_to_part",
    "voxelise_to_store",
    "write_job",
    "write_proof",
    "write_report",
    "write_stack",
    "write_ticket",
    "write_tray",
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
