"""The section of materials: mix a blend by numbers or by hardness, see what it is, lay it."""

from __future__ import annotations

import io
from functools import lru_cache
from typing import Any

import numpy as np
from PIL import Image

from voxelmat.errors import InputError
from voxelmat.io.materials import Library, load_library
from voxelmat.model.blend import Blend
from voxelmat.printing.mask import thresholds
from voxelmat.units import number, quantity
from voxelmat.workbench import controls as c
from voxelmat.workbench.plots import lines_png
from voxelmat.workbench.section import Section, number_from
from voxelmat.workflow.blendfacts import BlendFacts, blend_facts, blend_of_hardness
from voxelmat.workflow.draft_keys import add_at

__all__ = ["MaterialSection"]

_PATCH = (48, 24)  # sites of the halftone patch along columns and rows
_PIXELS = 6  # a site is drawn so wide
_MOST_COMPARED = 6
_NONE = "none"


class MaterialSection(Section):
    """One blend in hand: mixed here, put on a body or a region, or painted with."""

    name = "mix"
    title = "Material"

    def __init__(self, bench: Any) -> None:
        super().__init__(bench)
        self._library: tuple[Any, Library] | None = None
        self._curves: tuple[Any, ...] = (None, [], [], {})

    # ------------------------------------------------------------------ the blend in hand
    @property
    def library(self) -> Library:
        """The shipped materials with the design's own."""
        data = self.bench.draft.data
        files = tuple(data.get("materials", {}).get("files", ()))
        if self._library is None or self._library[0] != files:
            folder = self.bench.draft.path.parent
            self._library = (files, load_library([folder / f for f in files]))
        return self._library[1]

    @property
    def law(self) -> str:
        """Key of the design's blend law."""
        return str(self.bench.draft.data.get("materials", {}).get("law", "calibrated"))

    @property
    def resins(self) -> list[str]:
        """Resins that can be printed, those of the design first."""
        known = [m.name for m in self.library.values() if m.kind not in ("support", "bought-in")]
        used = dict.fromkeys(self.blend.fractions and [n for n, _ in self.blend.fractions])
        for body in self.bench.draft.data["body"]:
            used.update(
                dict.fromkeys([body["resin"]] if "resin" in body else body.get("blend", {}))
            )
        return [n for n in used if n in known] + [n for n in known if n not in used]

    @property
    def blend(self) -> Blend:
        """The blend in hand."""
        return Blend.of(self.parts)

    @property
    def parts(self) -> dict[str, float]:
        """Fractions of the blend in hand, also of resins whose share is 0 now."""
        kept = self.bench.draft.view.get("mix")
        if kept:
            return dict(kept)
        for body in self.bench.draft.data["body"]:
            if "resin" in body:
                return {body["resin"]: 1.0}
            if "blend" in body:
                return dict(Blend.of(body["blend"]).fractions)
        return {"elastomer-a27": 1.0}

    def mix(self, parts: dict[str, float]) -> BlendFacts:
        """Take a blend in hand, by parts by volume; they are scaled to sum 1.

        Returns
        -------
        BlendFacts
            Modulus with its band, density, cost, hardness.

        Raises
        ------
        InputError
            For a negative part, no part at all, or a resin that is not in the library.
        """
        facts = blend_facts(self.library, self.law, Blend.of(parts))
        for name in parts:
            self.library[name]
        self._hold({n: facts.blend.fraction(n) for n in parts})
        return facts

    def share(self, resin: str, fraction: float) -> BlendFacts:
        """Set the fraction of one resin; the others keep their proportions and the sum stays 1."""
        if not 0 <= fraction <= 1:
            raise InputError(f"A fraction lies between 0 and 1; got {fraction}.")
        parts = self.parts
        others = {n: f for n, f in parts.items() if n != resin}
        if not others and fraction < 1:
            raise InputError(
                f"'{resin}' is alone in the blend; add a second resin to blend it with."
            )
        total = sum(others.values())
        if total == 0:  # nothing to keep in proportion: the rest is shared alike
            others, total = dict.fromkeys(others, 1.0), float(len(others))
        scaled = {n: f / total * (1 - fraction) for n, f in others.items()}
        return self.mix({n: fraction if n == resin else scaled[n] for n in {**parts, resin: 0}})

    def add_resin(self, resin: str, fraction: float = 0.25) -> BlendFacts:
        """Bring another resin into the blend."""
        parts = {n: f * (1 - fraction) for n, f in self.parts.items() if n != resin}
        return self.mix({**parts, resin: fraction})

    def drop_resin(self, resin: str) -> BlendFacts:
        """Take a resin out of the blend; the others keep their proportions."""
        return self.mix({n: f for n, f in self.parts.items() if n != resin})

    def of_hardness(self, shore_A: float, soft: str, stiff: str) -> BlendFacts:
        """Take the blend of two resins in hand that stands for a Shore A hardness."""
        found = blend_of_hardness(self.library, self.law, shore_A, soft, stiff)
        return self.mix(dict(found.fractions))

    def _hold(self, parts: dict[str, float]) -> None:
        self.bench.draft.view["mix"] = parts
        self.bench.draft.autosave()
        self.bench.tell("mix")

    # ------------------------------------------------------------------ comparing
    def compare(self) -> None:
        """Put the blend in hand on the list of those compared."""
        kept = [b for b in self.compared if b != self.blend]
        kept = [*kept, self.blend][-_MOST_COMPARED:]
        self.bench.draft.view["compared"] = [dict(b.fractions) for b in kept]
        self.bench.draft.autosave()
        self.bench.tell("mix")

    @property
    def compared(self) -> list[Blend]:
        """Blends that are compared."""
        return [Blend.of(parts) for parts in self.bench.draft.view.get("compared", [])]

    # ------------------------------------------------------------------ laying it
    def put_on(self, where: str) -> None:
        """Lay the blend in hand on a body or a region, as one more layout rule.

        Raises
        ------
        InputError
            If there is no such body or region.
        """
        rule = {"region": where, "kind": "blend", "blend": dict(self.blend.fractions)}
        self.bench.draft.change(f"{self.blend} on {where}", lambda d: add_at(d, "layout", rule))

    def put_in(self, rule: int) -> None:
        """Give an existing layout rule of one blend (counted from 0) the blend in hand."""
        rules = self.bench.draft.data.get("layout", [])
        if not 0 <= rule < len(rules) or rules[rule]["kind"] != "blend":
            raise InputError(f"Layout rule {rule} is no rule of one blend.")
        self.bench.set(f"layout[{rule}].blend", dict(self.blend.fractions))

    def remove_rule(self, rule: int) -> None:
        """Take a layout rule (counted from 0) away."""
        self.bench.remove(f"layout[{rule}]")

    @property
    def _places(self) -> list[str]:
        data = self.bench.draft.data
        printed = [b["name"] for b in data["body"] if "bought_in" not in b]
        return [*printed, *(r["name"] for r in data.get("region", []))]

    # ------------------------------------------------------------------ the screen
    def controls(self) -> list[c.Control]:
        """The blend, what it is, where it goes, what is laid already."""
        blend = self.blend
        facts = blend_facts(self.library, self.law, blend)
        shown: list[c.Control] = [
            c.slider(
                f"share:{n}", n, round(f, 4), 0.0, 1.0, 0.01, "of 1",
                colour=self.library[n].colour,
            )
            for n, f in self.parts.items()
        ]  # fmt: skip
        more = [n for n in self.resins if n not in self.parts]
        shown.append(c.choice("add", "Blend in", _NONE, [_NONE, *more]))
        if len(self.parts) > 1:
            shown.append(c.choice("drop", "Take out", _NONE, [_NONE, *self.parts]))
        shown += self._by_hardness()
        shown += self._facts(facts)
        places = self._places
        if places:
            at = self.bench.draft.view.get("mix_on", places[0])
            at = at if at in places else places[0]
            shown.append(
                c.group(
                    c.choice("where", "Lay it on", at, places),
                    c.button("put", "Lay", main=True),
                )
            )
        else:
            shown.append(c.words("Choose a mesh under Shape; then it can be laid.", tone="hint"))
        return [*shown, *self._rules()]

    def _by_hardness(self) -> list[c.Control]:
        if len(self.parts) != 2:
            return []
        soft, stiff = self._soft_and_stiff()
        return [
            c.number_box("hardness", "Shore A asked for", None, hint=f"blend of {soft} and {stiff}")
        ]

    def _soft_and_stiff(self) -> list[str]:
        """The resins of the blend in hand, the softest first."""
        return sorted(self.parts, key=lambda n: self.library[n].E.value)

    def _facts(self, facts: BlendFacts) -> list[c.Control]:
        rows = _fact_rows(facts)
        shown = [
            c.table(["of this blend", "value"], rows, caption=str(facts.blend),
                    colours=[facts.colour, *[""] * (len(rows) - 1)]),
            c.picture(
                patch_png(tuple(facts.blend.fractions), tuple(
                    self.library[n].colour for n, _ in facts.blend.fractions)),
                f"One layer of droplets of {facts.blend}",
            ),
        ]  # fmt: skip
        pair = self._soft_and_stiff()
        if len(pair) == 2:
            png = self._curve(pair[0], pair[1], round(facts.blend.fraction(pair[1]), 3))
            shown.append(c.picture(png, f"Modulus against the share of {pair[1]}, with its band"))
        if not facts.calibrated:
            shown.append(c.words("No measured curve covers this blend; logarithms are mixed.",
                                 tone="warn"))  # fmt: skip
        if facts.indicative:
            names = ", ".join(facts.indicative)
            shown.append(c.words(f"Indicative records: {names}. Measure before you rely on it.",
                                 tone="warn"))  # fmt: skip
        shown.append(c.button("compare", "Compare this blend"))
        others = self.compared
        if others:
            table = [blend_facts(self.library, self.law, b) for b in others]
            shown.append(
                c.table(
                    ["blend", "E, MPa", "low", "high", "g/cm3"],
                    [
                        [str(f.blend), number(f.E), number(f.E_low), number(f.E_high),
                         number(1e9 * f.density)]
                        for f in table
                    ],
                    caption="Blends compared; choose one to take it in hand",
                    name="compared",
                    colours=[f.colour for f in table],
                )
            )  # fmt: skip
        return shown

    def _curve(self, soft: str, stiff: str, share: float) -> bytes:
        """Modulus and its band against the share of the stiffer resin, and the blend in hand."""
        key = (self.law, soft, stiff)
        if self._curves[0] != key:
            at = [n / 20 for n in range(21)]
            facts = [
                blend_facts(self.library, self.law, Blend.of({soft: 1 - x, stiff: x})) for x in at
            ]
            self._curves = (key, at, facts, {})
        _, at, facts, drawn = self._curves
        if share not in drawn:
            curves = {
                "E": (at, [f.E for f in facts]),
                "lowest": (at, [f.E_low for f in facts]),
                "highest": (at, [f.E_high for f in facts]),
                "in hand": ([share, share], [facts[0].E_low, facts[-1].E_high]),
            }
            drawn[share] = lines_png(curves, f"share of {stiff}", "E, MPa", logarithmic=True)
        return bytes(drawn[share])

    def _rules(self) -> list[c.Control]:
        rules = self.bench.draft.data.get("layout", [])
        rows = [[r.get("region", "whole part"), r["kind"], _rule_words(r)] for r in rules]
        return [
            c.table(
                ["on", "rule", "what"],
                rows,
                caption="Layout, in order; later rules win",
                name="rule",
                actions=["Use blend", "Remove"],
            )
        ]

    def act(self, name: str, value: Any) -> None:
        """One of the controls."""
        if name.startswith("share:"):
            fraction = number_from(value, "A fraction")
            self.call("share", resin=name.removeprefix("share:"), fraction=fraction)
        elif name == "add" and value != _NONE:
            self.call("add_resin", resin=str(value))
        elif name == "drop" and value != _NONE:
            self.call("drop_resin", resin=str(value))
        elif name == "hardness":
            names = sorted(
                (n for n, _ in self.blend.fractions), key=lambda n: self.library[n].E.value
            )
            shore = number_from(value, "The hardness")
            self.call("of_hardness", shore_A=shore, soft=names[0], stiff=names[1])
        elif name == "where":
            self.bench.draft.view["mix_on"] = str(value)
        elif name == "put":
            places = self._places
            at = str(self.bench.draft.view.get("mix_on", places[0]))
            self.call("put_on", where=at if at in places else places[0])
        elif name == "compare":
            self.call("compare")
        elif name == "compared":
            self.call("mix", parts=dict(self.compared[int(value[1])].fractions))
        elif name == "rule" and value[0] == "Remove":
            self.call("remove_rule", rule=int(value[1]))
        elif name == "rule":
            self.call("put_in", rule=int(value[1]))


def _fact_rows(facts: BlendFacts) -> list[list[str]]:
    rows = [
        ["Young's modulus", quantity(facts.E, "MPa")],
        ["its band", f"{number(facts.E_low)} to {number(facts.E_high)} MPa"],
        ["Poisson's ratio", number(facts.nu)],
        ["density", quantity(1e9 * facts.density, "g/cm3")],
    ]
    if facts.shore_A is not None:
        low, high = (number(v, 2) for v in facts.shore_A)
        rows.append(["Shore A, from E", f"{low} to {high}"])
    cost = "not stated" if facts.cost_per_kg is None else f"{number(facts.cost_per_kg)} a kg"
    return [*rows, ["cost", cost]]


def _rule_words(rule: dict[str, Any]) -> str:
    if "blend" in rule:
        return str(Blend.of(rule["blend"]))
    if "from" in rule:
        return f"{Blend.of(rule['from'])} to {Blend.of(rule['to'])}"
    return str(rule.get("file", ""))


@lru_cache(maxsize=64)
def patch_png(fractions: tuple[tuple[str, float], ...], colours: tuple[str, ...]) -> bytes:
    """One layer of droplets of a blend, as the shipped mask lays them."""
    columns, rows = _PATCH
    threshold = thresholds()[0, :rows, :columns]
    total = np.cumsum([f for _, f in fractions])[:-1]
    which = np.searchsorted(total, threshold.ravel(), side="right").reshape(threshold.shape)
    rgb = np.array([[int(t[a : a + 2], 16) for a in (1, 3, 5)] for t in colours], dtype=np.uint8)
    picture = rgb[which].repeat(_PIXELS, axis=0).repeat(_PIXELS, axis=1)
    store = io.BytesIO()
    Image.fromarray(picture).save(store, "PNG")
    return store.getvalue()
