"""Parts, results and stacks show themselves in a notebook, while `model` knows no widgets."""

from __future__ import annotations

import sys
from typing import Any

__all__ = ["register"]

#: Where the types live; IPython looks them up by name, so that nothing is imported here.
_TYPES = (
    ("voxelmat.model.part", "Part"),
    ("voxelmat.model.result", "StaticResult"),
    ("voxelmat.printing.readback", "Stack"),
)


def register(shell: Any = None) -> bool:
    """Tell a notebook's kernel how to show what voxelmat makes.

    Nothing heavy is imported before something is shown. Called by ``import voxelmat`` where
    IPython runs already; calling it again does no harm.

    Parameters
    ----------
    shell : InteractiveShell, optional
        The running one where left out.

    Returns
    -------
    bool
        False where there is no notebook (a plain interpreter, a terminal).
    """
    if shell is None:
        ipython = sys.modules.get("IPython")
        shell = ipython.get_ipython() if ipython is not None else None
    if shell is None or getattr(shell, "kernel", None) is None:
        return False
    formatter = shell.display_formatter.mimebundle_formatter
    for module, name in _TYPES:
        formatter.for_type_by_name(module, name, _bundle)
    return True


def _bundle(thing: Any, include: Any = None, exclude: Any = None) -> Any:
    from voxelmat.workbench.show import show

    return show(thing)._repr_mimebundle_(include=include, exclude=exclude)
