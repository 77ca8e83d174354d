"""A small catalogue and a small study, written into a temporary folder; numbers are invented."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pytest

from archopt.errors import InputError
from archopt.inputs.load import LoadedStudy, load
from archopt.inputs.parts import FAMILIES

PLAIN = {
    "price_100": 2.0, "price_1k": 1.5, "price_10k": 1.2, "price_100k": 1.0, "area_mm2": 30, "placements": 3,
    "spread_percent": 5, "source": "made_up",
}  # fmt: skip
CONVERTER = {
    "isolated": "true", "input_min_v": 36, "input_max_v": 75, "output_min_v": 8, "output_max_v": 13,
    "input_nominal_v": 54, "output_nominal_v": 12, "fixed_w": 1.0, "switching_w": 1.5, "input_exponent": 1.0,
    "output_exponent": 1.0, "linear_w_per_a": 0.03, "resistance_mohm": 6, "resistance_per_k": 0.004,
    "thermal_k_per_w": 3.0, "air_speed_m_s": 1.5, "crossover_khz": 10,
}  # fmt: skip
ROWS: dict[str, list[dict[str, Any]]] = {
    "buck_stages": [
        {
            "name": "stage_40", "part": "stage_40", "inductor": "coil", "input_min_v": 4.5, "input_max_v": 16,
            "output_min_v": 0.6, "output_max_v": 5.5, "phase_current_a": 40, "max_phases": 2,
            "frequency_khz": 500, "high_side_mohm": 3, "low_side_mohm": 1, "resistance_per_k": 0.004,
            "edge_rise_ns": 7, "edge_fall_ns": 9, "dead_time_ns": 20, "diode_v": 0.7, "high_side_gate_nc": 12,
            "low_side_gate_nc": 24, "gate_supply": "bias", "gate_v": 5, "high_side_output_nc": 10,
            "low_side_output_nc": 20, "output_charge_at_v": 12, "recovery_nc": 20, "input_capacitor_mohm": 2,
            "input_capacitance_uf": 20, "quiescent_ma": 5, "light_load": "forced",
            "shedding": "ideal", "max_duty": 0.9, "min_on_ns": 40,
            "min_off_ns": 100, "crossover_khz": 80, "delay_ns": 300, "wakeup_us": 20, "loop_min_uf": 200,
            "loop_max_uf": 4000, "thermal_k_per_w": 10, "air_speed_m_s": 1.5,
        },
    ],
    "inductors": [
        {
            "name": "coil", "inductance_nh": 200, "winding_mohm": 0.3, "saturation_a": 60,
            "core_loss_mw": 200,
            "core_ripple_a": 10, "core_frequency_khz": 500, "core_frequency_exponent": 1.5,
            "core_ripple_exponent": 2.4,
        },
    ],
    "bus_converters": [
        {
            "name": "bus_200", "kind": "regulated", "ratio": 0, "max_current_a": 17, "max_power_w": 200,
            "overload_a": 22, "overload_ms": 50, "setting_grid_v": 0.05, "accuracy_percent": 1,
            "slew_v_per_ms": 1, "delay_us": 5, "output_mohm": 5, "startup_max_uf": 5000, "wakeup_ms": 5,
            "max_parallel": 2, **CONVERTER,
        },
    ],
    "single_stages": [
        {
            **CONVERTER, "name": "direct_5v", "output_min_v": 4, "output_max_v": 6, "output_nominal_v": 5,
            "phase_current_a": 10, "max_phases": 1, "transformer_ratio": 4, "inductance_nh": 1000,
            "frequency_khz": 300, "max_duty": 0.5, "delay_ns": 500, "wakeup_us": 50, "shedding": "ideal",
            "loop_min_uf": 20,
            "loop_max_uf": 1000, "input_capacitance_uf": 4,
        },
    ],
    "linear_regulators": [
        {
            "name": "linear_1", "input_min_v": 1.5, "input_max_v": 6, "output_min_v": 0.8, "output_max_v": 5,
            "dropout_mv": 200, "phase_current_a": 1, "quiescent_ma": 0.1, "crossover_khz": 200,
            "delay_ns": 200,
            "loop_min_uf": 4, "loop_max_uf": 500, "thermal_k_per_w": 60, "air_speed_m_s": 1.5,
        },
    ],
    "capacitors": [
        {
            "name": "ceramic_100", "kind": "ceramic", "capacitance_uf": 100, "rated_v": 6.3, "esr_mohm": 2,
            "half_capacitance_v": 4, "tolerance_percent": 20, "ripple_a": 4,
        },
        {
            "name": "polymer_330", "kind": "polymer", "capacitance_uf": 330, "rated_v": 16, "esr_mohm": 9,
            "half_capacitance_v": 1000, "tolerance_percent": 20, "ripple_a": 4,
        },
    ],
    "supervisors": [{"name": "watcher", "control": "follow_load", "power_mw": 100, "buses": 2}],
    "bias_supplies": [
        {
            "name": "bias_bus", "input_min_v": 5, "input_max_v": 15, "isolated": "false", "output_v": 5,
            "max_power_w": 5, "no_load_mw": 30, "efficiency": 0.9,
        },
    ],
    "stacks": [
        {"name": "two_pairs", "layers": 8, "pairs": 2, "copper_oz": 1, "price_per_cm2": 0.1},
        {"name": "four_pairs", "layers": 12, "pairs": 4, "copper_oz": 2, "price_per_cm2": 0.2},
    ],
    "copper_foils": [
        {"name": "foil_1", "copper_oz": 1, "nominal_um": 34.3, "finished_um": 24.9},
        {"name": "foil_2", "copper_oz": 2, "nominal_um": 68.6, "finished_um": 55.7},
    ],
    "input_paths": [
        {
            "name": "path_80", "input_max_v": 80, "resistance_mohm": 30, "inductance_uh": 1,
            "max_current_a": 10,
            "power_mw": 100,
        },
        {
            "name": "path_40", "input_max_v": 40, "resistance_mohm": 20, "inductance_uh": 1,
            "max_current_a": 10,
            "power_mw": 80, "price_1k": 1.2,
        },
    ],
}  # fmt: skip

STUDY = """\
[input]
low_v = 36
high_v = 75
[board]
area_cm2 = 300
[[rails]]
name = "core"
voltage_v = 0.9
max_current_a = 50
[[rails]]
name = "io"
voltage_v = 3.3
max_current_a = 6
"""


def family_csv(family: str, rows: list[dict[str, Any]]) -> str:
    """Return the CSV text of one family."""
    columns = list(FAMILIES[family].model_fields)
    filled = [{**PLAIN, **row} for row in rows]
    lines = [",".join(columns), *(",".join(str(row.get(name, "")) for name in columns) for row in filled)]
    return "\n".join(lines) + "\n"


@dataclass
class Desk:
    """A folder with a study and a small catalogue beside it."""

    folder: Path

    @property
    def catalogue(self) -> Path:
        return self.folder / "catalogue"

    def part(self, family: str, name: str, **columns: Any) -> None:
        """Write one family again with columns of one row changed, or a row copied to a new name."""
        rows = [dict(row) for row in ROWS[family]]
        if not any(row["name"] == name for row in rows):
            rows.append({**rows[0], "name": name})
        rows = [{**row, **columns} if row["name"] == name else row for row in rows]
        (self.catalogue / family / "rows.csv").write_text(family_csv(family, rows))

    def write(self, name: str, text: str) -> Path:
        path = self.folder / name
        path.write_text(text, encoding="utf-8")
        return path

    def load(self, study: str = STUDY) -> LoadedStudy:
        return load(self.write("study.toml", study), self.catalogue)

    def problems(self, study: str = STUDY) -> list[str]:
        """Return the problems of a study, file names shortened to the last part."""
        with pytest.raises(InputError) as caught:
            self.load(study)
        prefix = f"{self.folder}/"
        return [str(problem).replace(prefix, "") for problem in caught.value.problems]


@pytest.fixture
def desk(tmp_path: Path) -> Desk:
    found = Desk(tmp_path)
    for family, rows in ROWS.items():
        folder = found.catalogue / family
        folder.mkdir(parents=True)
        (folder / "rows.csv").write_text(family_csv(family, rows))
    sources = "key,kind,dated,title\nmade_up,invented,2024-01-31,made up for the tests\n"
    (found.catalogue / "sources.csv").write_text(sources)
    return found


@pytest.fixture
def rows_as_csv() -> Callable[[str, list[dict[str, Any]]], str]:
    return family_csv


@pytest.fixture
def study_text() -> str:
    return STUDY
