"""What a report is made from: the run, gathered in one frozen object."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from voxelmat.fea.energy_error import EnergyError
from voxelmat.fea.refine import ErrorEstimate
from voxelmat.model.design_result import DesignResult
from voxelmat.model.deviation import OutlineDeviation
from voxelmat.model.finding import Finding
from voxelmat.model.inspection import InspectionSheet
from voxelmat.model.interface import InterfaceSpot
from voxelmat.model.part import Part
from voxelmat.model.requirement import Verdict
from voxelmat.model.result import StaticResult
from voxelmat.printing.bill import BillRow
from voxelmat.provenance import Provenance
from voxelmat.workflow.report_canvas import Picture

__all__ = ["LayerPicture", "RunData", "StackSummary"]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class LayerPicture:
    """One layer of the stack, as laid on the tray.

    Attributes
    ----------
    number : int
        From 0, lowest layer first.
    height_mm : float
        Middle of the layer over the tray.
    codes : ndarray of uint8, shape (rows, columns)
        0 where nothing is laid, else 1 + the place of the resin in `StackSummary.resins`;
        row 0 is drawn on top. May be thinned or a window of the layer.
    size_mm : tuple of float
        Width and height that `codes` covers.
    corner_mm : tuple of float
        Low x and y of what is drawn, from the low corner of the stack.
    note : str
        What the reader should know of the picture, a sentence.
    """

    number: int
    height_mm: float
    codes: NDArray[np.uint8]
    size_mm: tuple[float, float]
    corner_mm: tuple[float, float] = (0.0, 0.0)
    note: str = ""


@dataclass(frozen=True, slots=True, kw_only=True)
class StackSummary:
    """The written stack, in numbers.

    Attributes
    ----------
    folder : str
        Its name, not its path.
    pitch_mm : tuple of float
        Along the raster's x and y, and the layer thickness.
    sites : tuple of int
        Columns, rows and layers.
    size_mm : tuple of float
        What the stack occupies on the tray.
    resins : tuple of str
        In the order of the channels.
    channels : tuple of str
    volumes_mm3 : tuple of float
        Laid by each channel.
    designed_mm3 : tuple of (float or None)
        What the design asks for; None where it asks for none (support).
    support : str
        Who makes the support, in words.
    orientation : str
        How the part lies, in words.
    halftone : str
        Method and seed, in words.
    layers : tuple of LayerPicture
    estimate : mapping
        Name with unit to value, as text, in reading order ("time, h": "2.1 to 3.4").
    bill : tuple of BillRow
        What of each resin is needed, flushed and lost.
    """

    folder: str
    pitch_mm: tuple[float, float, float]
    sites: tuple[int, int, int]
    size_mm: tuple[float, float, float]
    resins: tuple[str, ...]
    channels: tuple[str, ...]
    volumes_mm3: tuple[float, ...]
    designed_mm3: tuple[float | None, ...] = ()
    support: str = ""
    orientation: str = ""
    halftone: str = ""
    layers: tuple[LayerPicture, ...] = ()
    estimate: Mapping[str, str] = field(default_factory=dict)
    bill: tuple[BillRow, ...] = ()


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class RunData:
    """One run of a design; whatever is missing is left out of the report, and said so.

    Attributes
    ----------
    name : str
        Of the design.
    part : Part
        As designed.
    invented : bool
        The design says that its data describe no real part.
    question : str
        What the customer wants to know, in their words.
    results, as_printed : mapping of str to StaticResult
        By load case; `as_printed` is solved on the stack read back.
    verdicts : tuple of Verdict
    safety : mapping of str to ndarray of float32, shape ``grid.shape``
        By load case, strength over stress in each voxel; nan where no strength is known.
    interfaces : mapping of str to tuple of InterfaceSpot
        By load case, the worst places where two resins meet.
    energy_error : mapping of str to EnergyError
        By load case, the estimated error by the voxel size, from the result itself.
    grid_error : mapping of str to ErrorEstimate
        By load case, the same from solving again at half resolution.
    optimised : DesignResult or None
    stack : StackSummary or None
    findings : tuple of Finding
    finding_pictures : mapping of int to Picture
        Of the findings that have a place, by their number.
    checked : bool
        Whether the preflight ran; no findings then means that it found nothing.
    outline : OutlineDeviation or None
        How far the outline of the stack lies off the design's.
    inspection : InspectionSheet or None
        Dimensions and protected surfaces of the design, measured on the stack.
    cautions : tuple of str
    notes : tuple of str
        What the program decided by itself: overlaps settled, gaps closed, repairs.
    provenance : Provenance
    timings : mapping of str to float
        Stage to seconds.
    """

    name: str
    part: Part
    invented: bool = False
    question: str = ""
    results: Mapping[str, StaticResult] = field(default_factory=dict)
    as_printed: Mapping[str, StaticResult] = field(default_factory=dict)
    verdicts: tuple[Verdict, ...] = ()
    safety: Mapping[str, NDArray[np.float32]] = field(default_factory=dict)
    interfaces: Mapping[str, tuple[InterfaceSpot, ...]] = field(default_factory=dict)
    energy_error: Mapping[str, EnergyError] = field(default_factory=dict)
    grid_error: Mapping[str, ErrorEstimate] = field(default_factory=dict)
    optimised: DesignResult | None = None
    stack: StackSummary | None = None
    findings: tuple[Finding, ...] = ()
    finding_pictures: Mapping[int, Picture] = field(default_factory=dict)
    checked: bool = False
    outline: OutlineDeviation | None = None
    inspection: InspectionSheet | None = None
    cautions: tuple[str, ...] = ()
    notes: tuple[str, ...] = ()
    provenance: Provenance = field(default_factory=Provenance)
    timings: Mapping[str, float] = field(default_factory=dict)
