"""A published design computed again from the two files that hold it, ``problem.json`` and ``designs.json``.

The files are read with nothing but a JSON reader; the scalar reference then computes the design as it computes
one of a problem in memory. No array of the model, no compiled problem and no study object has a part in it.
"""

from __future__ import annotations

from types import SimpleNamespace
from typing import Any, cast

import numpy as np

from archopt.inputs.parts import FAMILIES, Part
from archopt.inputs.resolved import Catalogue, ResolvedStudy
from archopt.model.states import FALLBACK, KIND_NAMES, MIX, StateTable
from equivalence.reference import ORDER, Reference

Data = dict[str, Any]


def attributes(value: object) -> Any:
    """Return JSON objects as objects with attributes, at any depth."""
    if isinstance(value, dict):
        return SimpleNamespace(**{key: attributes(entry) for key, entry in value.items()})
    return [attributes(entry) for entry in value] if isinstance(value, list) else value


def parts_of(problem: Data) -> dict[str, dict[str, Part]]:
    """Return the catalogue rows the file holds, by family and name."""
    return {
        family: {name: FAMILIES[family].model_validate(row) for name, row in rows.items()}
        for family, rows in problem["parts"].items()
    }


def states_of(problem: Data) -> StateTable:
    """Return the states and bands of the file under the names the reference reads them by."""
    rows, bands, rails = problem["states"], problem["bands"], problem["copper"]["rails"]
    kind = np.array([KIND_NAMES.index(row["kind"]) for row in rows])
    off = np.array([[name in row["off"] for name in rails] for row in rows])

    def by_rail(table: list[Data], key: str) -> Any:
        return np.array([[row[key][name] for name in rails] for row in table])

    rated_a = by_rail(rows, "current_a")[np.flatnonzero(kind == FALLBACK)[0]]
    given = SimpleNamespace(
        name=[row["state"] for row in rows],
        kind=kind,
        hours=[row["hours"] for row in rows],
        input_v=[row["input_v"] for row in rows],
        ambient_degc=[row["ambient_degc"] for row in rows],
        band=[row["band"] - 1 for row in rows],
        useful_w=[row["load_w"] for row in rows],
        tap_w=[row["tap_w"] for row in rows],
        current_a=by_rail(rows, "current_a"),
        off=off,
        bands=len(bands),
        mix_a=np.vstack([by_rail(bands, "worst_mix_a"), rated_a]),
        after_a=np.vstack([by_rail(bands, "after_jump_a"), rated_a]),
        mix_off=np.vstack([off[np.flatnonzero(kind == MIX)[0::2]], np.zeros(len(rails), dtype=bool)]),
        transitions_per_year=np.array([row["transitions_per_year"] for row in bands]),
    )
    return cast(StateTable, given)


class FromFiles(Reference):
    """One design of a result directory, computed from its files."""

    def __init__(self, problem: Data, design: Data) -> None:
        self.study = cast(ResolvedStudy, attributes(problem["study"]))
        measured = {name: attributes(table) for name, table in problem.get("measured", {}).items()}
        self.catalogue = cast(Catalogue, SimpleNamespace(families=parts_of(problem), measured=measured))
        self.states = states_of(problem)
        self.choices = design["choices"]
        bands = design["bands"]
        self.volts = [[band["volts"].get(bus, 0.0) for band in bands] for bus in ORDER[1:]]
        self.units = [[band["converters"].get(bus, 0) for band in bands] for bus in ORDER[1:]]
        self.phases = [[band["phases"][rail] for band in bands] for rail in problem["copper"]["rails"]]
        self.build()

    def raise_above_w(self, design: Data) -> list[float]:
        """Return the input power at the load that ends each band but the last, between its states and the next's."""
        shares = [KIND_NAMES.index("energy"), KIND_NAMES.index("shown load")]

        def points(band: int) -> list[tuple[float, float]]:
            """Return input power and load of a band's states with hours, or of the loads shown in it."""
            for kind in shares:
                found = [
                    (result.input_w, float(self.states.useful_w[s])) for s, result in enumerate(self.results)
                    if self.states.kind[s] == kind and self.states.band[s] == band
                ]  # fmt: skip
                if found:
                    return found
            raise AssertionError(f"nothing solved in band {band + 1}")

        count = len(design["bands"])
        found: list[float] = []
        for band in range(count - 1):
            (below_w, below_load), (above_w, above_load) = max(points(band)), min(points(band + 1))
            edge = design["bands"][band]["load_to_w"]
            share = min(max((edge - below_load) / (above_load - below_load), 0.0), 1.0)
            least = min(min(points(higher))[0] for higher in range(band + 1, count))
            found.append(min(below_w + share * (above_w - below_w), least * (1.0 - 1e-6)))
        for band in range(count - 3, -1, -1):
            found[band] = min(found[band], found[band + 1] * (1.0 - 1e-6))
        return found
