"""A small result made by hand. Every number is invented; sums agree so that totals can be checked."""

from __future__ import annotations

from archopt.present.plain import plain_dict
from archopt.present.record import Data, FrontRecord

HOURS = 8760.0


def design(
    name: str,
    *,
    scale: float = 1.0,
    cost: float = 80.0,
    droop: float = 84.0,
    roles: tuple[str, ...] = (),
    topology: str = "one bus, follows load",
    control: str = "follow_load",
) -> Data:
    """A board with one bus, a core rail, an I/O rail and a linear rail below it; losses times ``scale``."""
    losses_w = {
        "core stage": {"overlap_w": 3.0 * scale, "winding_w": 1.0 * scale},
        "bus_a converter": {"fixed_w": 2.0 * scale},
    }
    total_w = 6.0 * scale
    energy = total_w * HOURS / 1000.0

    def state(label: str, kind: str, hours: float, times: float) -> Data:
        return {
            "state": label, "kind": kind, "hours": hours, "input_v": 53.5, "volts": {"bus_a": 9.5 * times},
            "load_w": 60.0 * times, "input_w": 60.0 * times + total_w * times, "loss_w": total_w * times,
            "balance": 2e-12,
            "losses": {
                part: {mechanism: watts * times for mechanism, watts in terms.items()}
                for part, terms in losses_w.items()
            },
        }  # fmt: skip

    binding = {
        "limit": "rail droop", "where": "core", "state": "band 2 worst mix, low input", "value": droop,
        "bound": 100.0, "slack": 100.0 - droop, "unit": "%", "normalised": (100.0 - droop) / 5,
    }  # fmt: skip
    whole = {
        "design": name, "roles": list(roles), "topology": topology,
        "choices": {
            "core.feed": "bus_a", "core.stage": "STAGE-40", "core.phases": "2", "core.fewest": "one",
            "core.bank": "POLY-470", "core.bank_count": "6", "core.pairs": "2",
            "io.feed": "bus_a", "io.stage": "STAGE-10", "io.phases": "1", "io.fewest": "all",
            "io.bank": "CER-47", "io.bank_count": "4", "io.pairs": "1",
            "pll.feed": "io", "pll.stage": "LIN-1", "pll.phases": "1", "pll.fewest": "all",
            "pll.bank": "CER-10", "pll.bank_count": "1", "pll.pairs": "1",
            "bus_a.converter": "BRICK-8", "bus_a.count": "2", "bus_a.fewest": "one", "bus_a.nominal_v": "10",
            "bus_a.control": control, "bus_a.lower_v": "8", "bus_a.upper_v": "12", "bus_a.bulk": "POLY-100",
            "bus_a.bulk_count": "4", "bus_a.pairs": "1", "bus_b.converter": "none",
            "board.stack": "S12-2x2oz", "board.bias": "BIAS-5", "board.bias_feed": "input",
            "board.supervisor": "SUP-1",
        },
        "bands": [
            {"band": 1, "load_from_w": 20.0, "load_to_w": 60.0, "raise_above_input_w": 66.0,
             "fall_below_input_w": None, "volts": {"bus_a": 8.0}, "converters": {"bus_a": 1},
             "phases": {"core": 1, "io": 1}},
            {"band": 2, "load_from_w": 60.0, "load_to_w": 120.0, "raise_above_input_w": None,
             "fall_below_input_w": 62.7, "volts": {"bus_a": 12.0}, "converters": {"bus_a": 2},
             "phases": {"core": 2, "io": 1}},
        ],
        "objectives": {
            "energy_loss_kwh_per_year": energy, "cost_per_board": cost,
            "worst_droop_percent": max(60.0, droop), "worst_droop_exact_percent": droop - 0.55,
        },
        "beside": {
            "energy_input_kwh_per_year": energy + 525.6, "energy_cost_per_year": 0.22 * energy,
            "co2_kg_per_year": 0.4 * energy, "lifetime_cost": cost + 7 * 0.22 * energy,
            "payback_years": 1.25, "area_mm2": 3120.0,
        },
        "watts": {
            "30 %": 0.5 * total_w, "50 %": total_w, "100 %": 2 * total_w, "hottest": 2.5 * total_w,
        },
        "binding": binding,
        "limits": [
            {"limit": "stability", "where": "bus_a", "state": "after a jump", "value": 310.0, "bound": 120.0,
             "slack": 190.0, "unit": "uF", "normalised": 9.0},
            binding,
        ],
        "parts": [
            {"part": "STAGE-40", "family": "buck_stages", "used_for": ["core"], "quantity": 2,
             "unit_price": 4.5, "total": 9.0},
            {"part": "BRICK-8", "family": "bus_converters", "used_for": ["bus_a"], "quantity": 2,
             "unit_price": 20.0, "total": 40.0},
        ],
        "cost": {"parts": 49.0, "placement": 1.0, "new part numbers": 5.0, "board": cost - 55.0},
        "states": [
            state("typical", "year", HOURS, 1.0), state("30 %", "share", 0.0, 0.5),
            state("50 %", "share", 0.0, 1.0), state("100 %", "share", 0.0, 2.0),
            state("hottest", "hottest", 0.0, 2.5),
        ],
        "heat": [
            {"part": "core stage", "loss_w": 5.0, "temperature_degc": 96.5, "limit_degc": 110.0},
            {"part": "bus_a converter", "loss_w": 5.0, "temperature_degc": 104.0, "limit_degc": 110.0},
        ],
        "tolerance": [
            {"rail": "core", "tolerance_mv": 45.0, "set_point_mv": 9.0, "ripple_mv": 2.9,
             "ripple_allowed_mv": 4.5, "drop_mv": 0.0,
             "budget_mv": 31.5, "droop_mv": 26.3, "release_mv": 20.0, "left_mv": 5.2},
        ],
        "input_current_low_line_a": 3.71,
    }  # fmt: skip
    return dict(plain_dict(whole))  # twelve digits, as read back


def record() -> FrontRecord:
    """A front of five designs, two of them near twins."""
    designs = [
        design("D001", scale=1.0, cost=100.0, droop=72.0, roles=("least loss",)),
        design("D002", scale=1.015, cost=98.0, droop=80.0),
        design("D003", scale=1.2, cost=80.0, droop=84.0, roles=("knee",)),
        design("D004", scale=1.3, cost=90.0, droop=60.0, roles=("most margin",)),
        design("D005", scale=1.8, cost=60.0, droop=98.0, roles=("least cost",), topology="one bus, fixed",
               control="fixed"),
    ]  # fmt: skip
    incumbent = design(
        "incumbent", scale=2.0, cost=95.0, droop=112.0, topology="one bus, fixed", control="fixed"
    )  # fmt: skip
    incumbent["violated"] = [incumbent["binding"]]
    loser = design("best of two buses", scale=1.25, cost=97.0, topology="two buses")
    return FrontRecord(
        designs=designs,
        archive=[
            {"energy_loss_kwh_per_year": 52.56, "cost_per_board": 100.0, "core.stage": "1200",
             "core.phases": 2, "bus_a.nominal_v": 10.25},
            {"energy_loss_kwh_per_year": 94.608, "cost_per_board": 60.0, "core.stage": "STAGE-40",
             "core.phases": 1, "bus_a.nominal_v": None},
        ],
        problem={
            "study": {
                "name": "synthetic", "title": "an invented board", "file": "study.toml", "study_hash": "0f",
                "supply": {"low_v": 36.0, "high_v": 75.0, "nominal_v": 53.5, "isolation": True,
                           "path": "PATH-10", "inlet_degc": 40.0, "hottest_inlet_degc": 55.0,
                           "local_rise_k": 15.0, "air_speed_m_s": 1.5,
                           "levels": [{"voltage_v": 53.5, "share": 0.95},
                                      {"voltage_v": 36.0, "share": 0.05}]},
                "rails": [
                    {"name": "core", "voltage_v": 0.9, "max_current_a": 60.0, "typical_current_a": 30.0,
                     "tolerance_percent": 5.0, "step_a": 30.0, "slew_a_per_us": 100.0,
                     "droop_budget_v": 0.0315, "squares": 1.0, "remote_sense": True, "parents": [],
                     "tap_of": ""},
                    {"name": "io", "voltage_v": 3.3, "max_current_a": 10.0, "typical_current_a": 5.0,
                     "tolerance_percent": 5.0, "step_a": 5.0, "slew_a_per_us": 10.0, "droop_budget_v": 0.1,
                     "squares": 3.0, "remote_sense": False, "parents": [], "tap_of": ""},
                    {"name": "pll", "voltage_v": 1.8, "max_current_a": 0.5, "typical_current_a": 0.25,
                     "tolerance_percent": 3.0, "step_a": 0.1, "slew_a_per_us": 1.0, "droop_budget_v": 0.02,
                     "squares": 3.0, "remote_sense": False, "parents": ["io"], "tap_of": ""},
                ],
                "coincidence": 0.85, "growth": 1.15,
                "control": {"kinds": ["fixed", "follow_load"], "grid_v": 0.25, "bus_min_v": 7.0,
                            "bus_max_v": 13.0, "jump_percent": 100.0, "response_ms": 20.0},
                "economics": {"boards_per_year": 5000.0, "new_part_cost": 5000.0,
                              "energy_price_per_kwh": 0.15, "cooling_overhead": 1.4,
                              "upstream_efficiency": 0.95, "life_years": 7.0, "currency": "EUR"},
                "incumbent": {"core.stage": "STAGE-40"},
            },
            "assumed": [
                {"place": "economics.cooling_overhead", "value": "1.4", "reason": "common practice"},
            ],
            "states": [{"state": "typical", "kind": "year", "hours": HOURS, "input_v": 53.5, "load_w": 60.0}],
            "bands": [{"band": 1, "load_from_w": 20.0, "load_to_w": 60.0, "hours": HOURS}],
            "parts": {}, "copper": {"bus": [[6.0]]},
        },
        run={
            "seed": 7, "stop_reason": "all designs tried", "interrupted": False,
            "counts": {"evaluations": 12000, "feasible": 4321, "generations": 60,
                       "dropped_by_direct_physics": 1, "seconds": 12.34},
        },
        incumbent=incumbent,
        baselines=[
            {"baseline": "habitual fixed bus", "of": "knee", "energy_loss_kwh_per_year": 70.0,
             "cost_per_board": 78.0, "worst_droop_percent": 84.0, "volts": 12.0, "feasible": True,
             "note": ""},
            {"baseline": "best fixed bus", "of": "knee", "energy_loss_kwh_per_year": 65.0,
             "cost_per_board": 78.0, "worst_droop_percent": 84.0, "volts": 10.5, "feasible": True,
             "note": ""},
        ],
        gains=[
            {"of": "knee", "best_fixed_v": {"bus_a": 10.5}, "flat_band_v": {"bus_a": [9.75, 11.0]},
             "gain_kwh_per_year": 1.928, "gain_percent": 2.966, "gain_money_per_year": 0.42,
             "supervisor_cost": 1.28, "supervisor_payback_years": 3.048,
             "gain_all_unannounced_kwh_per_year": 1.1, "gain_announced_kwh_per_year": 2.5},
        ],
        losing=[
            {"topology": "two buses", "best_design": loser, "lifetime_cost": 180.0, "behind_by": 14.5,
             "energy_more_kwh": 2.63, "cost_more": 17.0,
             "difference_by_mechanism": {"fixed_w": 9.0, "overlap_w": -4.0}, "limit": None},
            {"topology": "direct", "best_design": None, "lifetime_cost": None, "behind_by": None,
             "energy_more_kwh": None, "cost_more": None,
             "difference_by_mechanism": {}, "limit": "on-time at core, over by 20 ns"},
        ],
        leverage=[
            {"part": "BRICK-8", "column": "fixed_w", "value": 1.0, "spread_percent": 15.0,
             "energy_change_kwh": 3.1, "cost_change": 0.0, "lifetime_change": 4.774,
             "source": "maker's sheet, invented"},
        ],
        not_modelled=["first droop inside the package", "EMC"],
        cautions=["io: the droop budget is small"],
        merged=37,
        notes=["the search had converged"],
    )  # fmt: skip
