"""A bus behind a fixed ratio has no voltage of its own: what is printed is the span it follows the input in."""

from __future__ import annotations

from typing import Any

from archopt.present.overview import bus_text
from archopt.present.power_tree import followed_v, tree_lines

CHOICES = {
    "core.feed": "bus_a", "bus_a.converter": "ratio5_bus_240w", "bus_a.count": "1", "bus_a.nominal_v": "5",
    "bus_a.lower_v": "5", "bus_a.upper_v": "5", "bus_a.control": "fixed", "bus_b.converter": "none",
}  # fmt: skip


def design(topology: str, *volts: float) -> dict[str, Any]:
    return {"topology": topology, "choices": CHOICES, "states": [{"volts": {"bus_a": v}} for v in volts]}


def test_the_span_is_printed_of_a_bus_that_follows() -> None:
    following = design("one bus, fixed ratio", 10.62, 6.913, 15.09)
    assert followed_v(following, "bus_a") == (6.913, 15.09)
    assert bus_text(following) == "6.91 to 15.1"
    assert any("6.91 to 15.1 V, follows the input" in line for line in tree_lines(following, {}))
    assert not any("nominal" in line for line in tree_lines(following, {}))


def test_the_voltage_is_printed_of_a_bus_that_is_set() -> None:
    for given in (design("one bus, fixed", 4.0, 5.0), design("two buses, fixed ratio and fixed", 4.93, 5.07)):
        assert followed_v(given, "bus_a") is None
        assert bus_text(given) == "5"
        assert any("5 V nominal, fixed" in line for line in tree_lines(given, {}))
