"""What is said when no design meets a cap: the money or the area itself, not only a share of it."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from types import SimpleNamespace
from typing import Any, cast

from archopt.inputs.load import load
from archopt.search.published import infeasible

STUDY = Path(__file__).resolve().parents[2] / "studies" / "telecom_six" / "study.toml"


def test_a_cap_is_missed_by_an_amount() -> None:
    """Normalised excess counts tolerances of 2 % of the cap: 208 of them are 4.16 caps of 10 EUR."""
    study = load(STUDY).study
    study = replace(study, board=replace(study.board, cost_cap=10.0, area_cap_cm2=50.0))
    found = cast(Any, SimpleNamespace(excess={"cost cap": 208.0, "area cap": 1.0, "stage current": 2.0}))
    assert infeasible(found, study).limits == (
        "cost cap: missed by at least 41.60 EUR, 416 % of the cap of 10 EUR, in every design tried",
        "stage current: missed by at least 10 % of the limit in every design tried",
        "area cap: missed by at least 1.00 cm2, 2 % of the cap of 50 cm2, in every design tried",
    )
