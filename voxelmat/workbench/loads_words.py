"""Supports, loads and requirements of a design's tables, in a few words for the desk."""

from __future__ import annotations

from typing import Any

from voxelmat.units import number

__all__ = ["load_words", "need_words", "support_words"]

Table = dict[str, Any]


def _vector(values: Any, unit: str) -> str:
    return f"{', '.join(number(float(v)) for v in values)} {unit}"


def support_words(support: Table) -> str:
    """How a region is held."""
    if "symmetry" in support:
        return f"mirror plane on {support['symmetry']}"
    if "slide" in support:
        return f"slides along {', '.join(support['slide'])}"
    if "displacement_mm" in support:
        given = support["displacement_mm"]
        return "moved by " + ", ".join(f"{a} {number(float(v))} mm" for a, v in given.items())
    return "fixed"


def load_words(load: Table) -> str:
    """What acts."""
    kind = load["kind"]
    if kind == "force":
        return _vector(load["force_N"], "N")
    if kind == "pressure":
        return f"{number(float(load['pressure_MPa']))} MPa"
    if kind == "body force":
        return _vector(load["acceleration_m_s2"], "m/s2")
    if kind == "pressure map":
        return f"pressures of {load['file']}"
    return str(kind)


def need_words(need: Table) -> str:
    """What a requirement asks for."""
    said = [need["measure"]]
    for key, value in need.items():
        for start, words in (("at_least", "at least"), ("at_most", "at most")):
            if key.startswith(start):
                unit = key.removeprefix(start).strip("_").replace("N_mm", "N/mm")
                said.append(f"{words} {number(float(value))} {unit}".rstrip())
    if "region" in need:
        said.append(f"at {need['region']}")
    if "load_case" in need:
        said.append(f"under {need['load_case']}")
    return " ".join(str(s) for s in said)
