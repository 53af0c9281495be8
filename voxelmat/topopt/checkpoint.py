"""An interrupted optimisation on disk: written aside and renamed, resumed to the same bits."""

from __future__ import annotations

import dataclasses
import json
import zipfile
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import FileFormatError, InputError
from voxelmat.io.atomic import aside
from voxelmat.model.design_result import IterationRecord
from voxelmat.topopt.loop import State

__all__ = ["read_checkpoint", "write_checkpoint"]

_FORMAT = 2
_FIGURES = tuple(f.name for f in dataclasses.fields(IterationRecord))
_COUNTS = ("iteration", "cg_iterations")


def write_checkpoint(path: Path, state: State, digest: str) -> None:
    """Keep `state`; `digest` names the problem that it belongs to.

    Raises
    ------
    ResourceError
        If the file cannot be written; an earlier checkpoint is then still whole.
    """
    head = {
        "format": _FORMAT,
        "digest": digest,
        "scale": state.scale.hex(),
        "first": state.first.hex(),
        "finished": state.finished,
    }
    table = np.array([[float(getattr(r, f)) for f in _FIGURES] for r in state.history])
    arrays: dict[str, NDArray[np.float64]] = {
        "x": state.x,
        "whole": state.whole,
        "history": table.reshape(-1, len(_FIGURES)),
        **{f"optimiser/{k}": v for k, v in state.optimiser.items()},
        **{f"warm/{k}": v for k, v in state.warm.items()},
    }
    with aside(path) as temporary, temporary.open("wb") as handle:
        np.savez(handle, head=np.array(json.dumps(head)), **arrays)  # type: ignore[arg-type]


def read_checkpoint(path: Path, digest: str) -> State | None:
    """The state kept in a file, or None where there is no file.

    Raises
    ------
    InputError
        If the checkpoint belongs to another problem.
    FileFormatError
        If the file is no checkpoint or is damaged.
    """
    if not path.exists():
        return None
    try:
        with path.open("rb") as handle, np.load(handle, allow_pickle=False) as data:
            head = json.loads(str(data["head"]))
            arrays = {name: data[name] for name in data.files if name != "head"}
        if head["format"] != _FORMAT:
            raise FileFormatError(
                f"The checkpoint '{path.name}' has format {head['format']}; this version reads "
                f"{_FORMAT}. Delete it to start afresh."
            )
        if head["digest"] != digest:
            raise InputError(
                f"The checkpoint '{path.name}' belongs to another design: the part, the load "
                "cases or the settings differ. Delete it or name another file."
            )
        return State(
            x=arrays["x"],
            whole=arrays["whole"],
            scale=float.fromhex(head["scale"]),
            first=float.fromhex(head["first"]),
            history=tuple(_record(row) for row in arrays["history"]),
            optimiser=_under(arrays, "optimiser/"),
            warm=_under(arrays, "warm/"),
            finished=head["finished"],
        )
    except (OSError, KeyError, ValueError, EOFError, zipfile.BadZipFile) as error:
        if isinstance(error, InputError | FileFormatError):
            raise
        raise FileFormatError(
            f"'{path.name}' is no whole checkpoint of an optimisation ({error}). Delete it to "
            "start afresh."
        ) from error


def _record(row: NDArray[np.float64]) -> IterationRecord:
    values = {f: int(v) if f in _COUNTS else float(v) for f, v in zip(_FIGURES, row, strict=True)}
    return IterationRecord(**values)  # type: ignore[arg-type]


def _under(arrays: dict[str, NDArray[np.float64]], prefix: str) -> dict[str, NDArray[np.float64]]:
    return {k.removeprefix(prefix): v for k, v in arrays.items() if k.startswith(prefix)}
