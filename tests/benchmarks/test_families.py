"""The count of families: rows of unused buses left out, a bulk bank told from an output bank."""

from __future__ import annotations

from archopt.inputs.measured_catalogue import read_catalogue

from .families import uses


def test_uses_count_each_design_once_and_nothing_of_an_unused_bus() -> None:
    catalogue = read_catalogue()
    choices = {
        "core.stage": "buck_15a_500k_bus_gate", "io.stage": "buck_15a_500k_bus_gate",
        "core.bank": "polymer_560u_2v5_can", "bus_a.converter": "ratio5_bus_240w", "bus_a.bulk": "ceramic_22u_25v",
        "bus_b.converter": "trim_bus_150w", "bus_b.bulk": "electrolytic_470u_25v", "board.bias": "none",
    }  # fmt: skip
    one = {"choices": choices, "feeds": {"core": "bus_a", "io": "bus_a"}}
    both = {"choices": choices, "feeds": {"core": "bus_a", "io": "bus_b"}}
    by_row, by_family = uses(catalogue, [one, both])
    assert by_family["buck stage, middle"] == 2
    assert by_row["buck stage, middle"] == {"buck_15a_500k_bus_gate": 2}
    assert by_family["bus converter, fixed ratio"] == 2
    assert by_family["bus converter, regulated isolated"] == 1
    assert by_family["bulk bank, ceramic"] == 2
    assert by_family["bulk bank, electrolytic"] == 1
    assert by_family["output bank, polymer"] == 2
    assert "bias supply" not in by_family
