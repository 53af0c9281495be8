"""What the tool bar over the picture asks of the workbench, each with its line of code."""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING, Any

from voxelmat.workbench.section import code_of, number_from

if TYPE_CHECKING:
    from voxelmat.workbench.bench import Workbench
    from voxelmat.workbench.stage import Stage

__all__ = ["AS_SHOWN", "asked"]

#: In the choice of colours: what a section has put into the pictures.
AS_SHOWN = "as shown"


def asked(bench: Workbench, stage: Stage, message: dict[str, Any]) -> bool:
    """Do what a message asks where it is more than looking; False where it is not.

    What goes wrong is shown on the message line.
    """
    value = message.get("value")

    def call(verb: str, **values: Any) -> None:
        bench.noted(f"bench.stage.{code_of(verb, values)}", lambda: getattr(stage, verb)(**values))

    def show(field: str, **values: Any) -> None:
        bench.answers.call("show", field=field, load_case=stage.case, **values)

    def paint() -> None:
        if value == "material":
            bench.answers.call("show_material")
        elif value != AS_SHOWN:
            show(str(value))

    def factor() -> None:
        size = number_from(value, "The factor of the displacements") if value else 0.0
        show(stage.field, factor=size)

    def below() -> None:
        call("only_below", safety=number_from(value, "The safety") if value else 0.0)

    deeds: dict[str, Callable[[], None]] = {
        "paint": paint,
        "factor": factor,
        "below": below,
        "case": lambda: call("choose_case", name=str(value)),
        "loads": lambda: call("show_loads", on=bool(message["on"])),
        "see": lambda: call("see", name=str(message["name"]), how=str(message["how"])),
    }
    if message["kind"] not in deeds:
        return False
    bench.guarded(deeds[message["kind"]])
    bench.tell("view")
    return True
