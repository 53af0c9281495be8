"""The sections of the workbench, in the order of their tabs."""

from __future__ import annotations

from typing import TYPE_CHECKING

from voxelmat.workbench.answers_section import AnswersSection
from voxelmat.workbench.design_section import DesignSection
from voxelmat.workbench.loads_section import LoadsSection
from voxelmat.workbench.material_section import MaterialSection
from voxelmat.workbench.needs_section import NeedsSection
from voxelmat.workbench.optimise_section import OptimiseSection
from voxelmat.workbench.paint_section import PaintSection
from voxelmat.workbench.press_section import PressSection
from voxelmat.workbench.print_section import PrintSection
from voxelmat.workbench.section import Section
from voxelmat.workbench.shape_section import ShapeSection

if TYPE_CHECKING:
    from voxelmat.workbench.bench import Workbench

__all__ = ["sections_of"]


def sections_of(bench: Workbench) -> list[Section]:
    """One of each."""
    return [
        ShapeSection(bench),
        LoadsSection(bench),
        NeedsSection(bench),
        MaterialSection(bench),
        PaintSection(bench),
        PressSection(bench),
        AnswersSection(bench),
        OptimiseSection(bench),
        PrintSection(bench),
        DesignSection(bench),
    ]
