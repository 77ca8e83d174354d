"""What is printed, as fixed-width text; totals in the text agree with the objectives."""

from __future__ import annotations

import dataclasses
from io import StringIO

import pytest
from plain_print import plain_text
from rich.console import Console

from archopt.present.amounts import counted, fixed, mechanism_word, money, number, place_word, signed, times
from archopt.present.assumed import assumed_rows
from archopt.present.explanation import slack_text
from archopt.present.front import Front
from archopt.present.losses import loss_table, state_at, year_kwh
from archopt.present.overview import flat_band, front_sections
from archopt.present.power_tree import tree_lines
from archopt.present.questions import gain_lines, volts_text
from archopt.present.record import CheckResult, FrontRecord
from archopt.present.state_tables import design_states_table, load_states_table
from archopt.present.tables import console_for, put, table
from archopt.present.terminal import print_check, print_front
from archopt.present.understood import option_rows


def printed(record: FrontRecord, width: int | None = None) -> str:
    """The result as printed on a pipe, or on a terminal so many columns wide."""
    buffer = StringIO()
    console = console_for(buffer) if width is None else Console(file=buffer, width=width, force_terminal=True)
    print_front(console, record)
    return buffer.getvalue()


def block(text: str, title: str) -> list[str]:
    """The lines of one section, without its heading."""
    lines = text.splitlines()
    start = lines.index(title) + 1
    return lines[start : lines.index("", start)]


@pytest.mark.parametrize(
    ("value", "expected"),
    [(53.5, "53.5"), (8760.0, "8,760"), (0.00012346, "0.0001235"), (None, "-"), (float("nan"), "-"), (0, "0"),
     (12345.6, "12,346"), (-0.25, "-0.25"), (1e-15, "0")],
)  # fmt: skip
def test_number(value: object, expected: str) -> None:
    assert number(value) == expected


def test_other_amounts() -> None:
    assert fixed(-0.001, 2) == "0.00"
    assert signed(3.14159, 2) == "+3.14"
    assert signed(-3.0) == "-3.0"
    assert signed(None) == "-"
    assert money(1234.5, "EUR") == "1,234.50 EUR"
    assert times("2", "BRICK") == "2 x BRICK"
    assert times(1, "BRICK") == "BRICK"
    assert counted(1, "rail") == "1 rail"
    assert counted(12, "rail") == "12 rails"
    assert mechanism_word("dead_time_w") == "dead time"
    assert place_word("bus_a plane") == "bus A plane"


def test_energy_cost_front_comes_first_and_is_pinned(record: FrontRecord) -> None:
    text = printed(record)
    order = [
        "Understood", "Search", "Energy against cost, every rail's droop within its budget",
        "Beside it: designs that give way in energy or cost for something else", "What droop margin costs",
        "Which limit binds", "Today's design", "The same hardware with another bus voltage",
        "Topologies that lost", "Catalogue numbers with the most leverage on the knee", "Remarks", "Cautions",
        "Not modelled",
    ]  # fmt: skip
    titles = [line for line in text.splitlines() if line and not line.startswith(" ")]
    assert titles == order
    assert block(text, order[2]) == [
        "  design  kWh a year  cost, EUR  droop, % of budget  life cost, EUR  W at 30 %  W at 50 %  W at 100 %"
        "  topology               bus V    bus converter  stack      marked as",
        "  D001         52.56     100.00                  72          180.94        3.0        6.0        12.0"
        "  one bus, follows load  8 to 12  2 x BRICK-8    S12-2x2oz  least loss",
        "  D003         63.07      80.00                  84          177.13        3.6        7.2        14.4"
        "  one bus, follows load  8 to 12  2 x BRICK-8    S12-2x2oz  knee",
        "  D005         94.61      60.00                  98          205.70        5.4       10.8        21.6"
        "  one bus, fixed         10       2 x BRICK-8    S12-2x2oz  least cost",
        "  4 of 5 designs printed; 1 other within 2 % of loss and 5 % of cost of these.",
    ]


def test_droop_margin_is_priced(record: FrontRecord) -> None:
    assert block(printed(record), "What droop margin costs") == [
        "  droop, % of budget, at most  design  droop  kWh a year  cost, EUR  kWh more  cost more  life cost more",
        "                          100  D003       84       63.07      80.00     +0.00      +0.00           +0.00",
        "                           90  D003       84       63.07      80.00     +0.00      +0.00           +0.00",
        "                           80  D002       80       53.35      98.00     -9.72     +18.00           +3.03",
        "                           70  D004       60       68.33      90.00     +5.26     +10.00          +18.09",
        "                           60  D004       60       68.33      90.00     +5.26     +10.00          +18.09",
    ]


def test_few_droop_values_are_said_not_to_discriminate(record: FrontRecord) -> None:
    assert "does not discriminate" not in printed(record)
    for design in record.designs:
        design["objectives"]["worst_droop_percent"] = 60.0
    assert "Droop does not discriminate here: the front holds 1 value of it (60 %)." in printed(record)


def test_binding_limits_with_slack_and_violations_in_trade_units(record: FrontRecord) -> None:
    text = printed(record)
    assert "  D003    rail droop  core   16 % left  band 2 worst mix, low input" in text.splitlines()
    assert "  - rail droop at core, band 2 worst mix, low input: over by 12 %" in text.splitlines()


def test_the_gain_is_quoted_against_the_best_feasible_fixed_bus(record: FrontRecord) -> None:
    lines = block(printed(record), "The same hardware with another bus voltage")
    assert " ".join(line.strip() for line in lines[3:]) == (
        "knee: best fixed bus A 10.5 V (9.75 to 11 V within 1 % of its loss); following the load saves 1.93 kWh"
        " a year (3 % of its loss, 0.42 EUR); setting the bus costs 1.28 EUR a board and pays back after 3.05"
        " years; it would save 1.10 kWh were every jump unannounced; it would save 2.50 kWh were every jump"
        " announced."
    )


def test_a_gain_that_has_two_infeasible_sides_says_so() -> None:
    lines = [str(line) for line in gain_lines([{"of": "knee", "best_fixed_v": None}], "EUR")]
    assert lines == ["knee: no fixed bus voltage meets every limit."]
    lines = [str(line) for line in gain_lines([{"of": "incumbent", "note": "no regulated bus"}], "EUR")]
    assert lines == ["incumbent: no regulated bus."]
    losing = {"of": "knee", "best_fixed_v": {"bus_a": 10.0}, "gain_kwh_per_year": -0.5, "gain_percent": -1.0,
              "gain_money_per_year": -0.1, "supervisor_cost": 1.0, "supervisor_payback_years": None}  # fmt: skip
    assert "loses 0.5 kWh a year (1 % of its loss, 0.10 EUR)" in str(next(iter(gain_lines([losing], "EUR"))))
    assert "never pays back" in str(next(iter(gain_lines([losing], "EUR"))))


def test_the_nearest_losing_topology_says_why(record: FrontRecord) -> None:
    lines = block(printed(record), "Topologies that lost")
    assert lines[1].split() == ["two", "buses", "not", "on", "the", "front", "180.00", "+14.50", "+2.63", "+17.00", "-"]
    assert lines[2].endswith("on-time at core, over by 20 ns")
    assert lines[3] == "  Nearest, two buses, against the winner, kWh a year: fixed +9.00, overlap -4.00."


def test_only_the_five_strongest_numbers_are_printed(record: FrontRecord) -> None:
    many = [{**record.leverage[0], "part": f"PART-{k}", "lifetime_change": -float(k)} for k in range(8)]
    many += [{**record.leverage[0], "part": f"COST-{k}", "column": "price_1k"} for k in range(4)]
    text = printed(dataclasses.replace(record, leverage=many))
    assert text.count("COST-") == 3
    assert text.index("PART-3") < text.index("COST-0")
    assert "PART-7" in text
    assert "PART-3" in text
    assert "PART-2" not in text


def test_piped_text_is_plain(record: FrontRecord) -> None:
    text = printed(record)
    assert text.isascii()
    assert "\x1b" not in text
    assert all(line == line.rstrip() for line in text.splitlines())


@pytest.mark.parametrize("width", [80, 100, 160])
def test_a_terminal_is_never_overrun_and_numbers_stay_whole(record: FrontRecord, width: int) -> None:
    plain = plain_text(Front(record), width)
    assert max(map(len, plain.splitlines())) <= width
    for whole in ("52.56", "100.00", "94.61", "+18.09", "least loss"):
        assert whole in plain


def test_a_flat_optimum_is_given_as_a_band(record: FrontRecord) -> None:
    assert flat_band(record.designs) == ""
    record.designs[1]["choices"]["bus_a.nominal_v"] = 11.0
    record.designs[1]["objectives"]["energy_loss_kwh_per_year"] = 52.8
    assert flat_band(record.designs) == ("2 designs within 1 % of the least loss; nominal bus A from 10 to 11 V.")


def test_an_interrupted_search_says_so(record: FrontRecord) -> None:
    run = record.run | {"interrupted": True, "stop_reason": "interrupted"}
    assert "interrupted; what was found until then is kept" in printed(dataclasses.replace(record, run=run))


def test_an_empty_front_prints_without_a_table(record: FrontRecord) -> None:
    assert not list(front_sections(dataclasses.replace(record, designs=[]), 200))


def test_the_power_tree_is_pinned(record: FrontRecord) -> None:
    assert tree_lines(record.designs[2], record.study) == [
        "input 36 to 75 V, through PATH-10",
        "  bus A: 2 x BRICK-8 (down to one at light load); 10 V nominal, follows the load between 8 and 12 V;"
        " 4 x POLY-100; copper on 1 pair",
        "    core 0.9 V 60 A: 2 x STAGE-40 (down to one at light load); 6 x POLY-470; copper on 2 pairs",
        "    io 3.3 V 10 A: STAGE-10; 4 x CER-47; copper on 1 pair",
        "      pll 1.8 V 0.5 A: LIN-1; CER-10; copper on 1 pair",
        "  stack: S12-2x2oz",
        "  gate bias: BIAS-5, from input",
        "  supervisor: SUP-1",
    ]


def test_a_rail_straight_from_the_input_and_a_tap(record: FrontRecord) -> None:
    design = record.designs[0]
    design["choices"]["core.feed"] = "input"
    for choice in [choice for choice in design["choices"] if choice.startswith("pll.")]:
        del design["choices"][choice]
    record.problem["study"]["rails"][2]["tap_of"] = "core"
    lines = tree_lines(design, record.study)
    assert lines[1].startswith("  core 0.9 V 60 A: 2 x STAGE-40")
    assert lines[2] == "    pll 1.8 V 0.5 A: tap of core"
    assert len(lines) == 8


def test_small_mechanisms_share_a_line_and_the_sum_stays(record: FrontRecord) -> None:
    design = record.designs[0]
    for state in design["states"]:
        state["losses"]["core stage"] |= {"gate": 1e-3, "core": 2e-3}
    text = plain_text(loss_table(design))
    stage = next(line for line in text.splitlines() if line.startswith("core stage"))
    small = next(line for line in text.splitlines() if "2 smaller ones" in line)
    assert stage.split()[2] == "35.07"  # 4.003 W over 8760 h
    assert small.split()[3] == "0.03"  # 3 mW over 8760 h
    assert "gate" not in text


def test_a_design_that_lost_its_states_still_prints(record: FrontRecord) -> None:
    design = record.designs[0]
    design["states"] = []
    assert "all losses" in plain_text(loss_table(design))


@pytest.mark.parametrize(("unit", "said"), [("% of bus", "3 % of bus left"), ("ratio", "3 left")])
def test_slack_in_its_unit(unit: str, said: str) -> None:
    assert slack_text({"slack": 3.0, "unit": unit}) == said


def test_losses_of_the_year_add_up_to_the_objective(record: FrontRecord) -> None:
    for design in record.designs:
        energy = design["objectives"]["energy_loss_kwh_per_year"]
        assert sum(year_kwh(design).values()) == pytest.approx(energy, rel=1e-12)


def test_energy_beyond_the_states_has_a_line_of_its_own(record: FrontRecord) -> None:
    design = record.designs[0]
    assert "changes of bus voltage" not in plain_text(loss_table(design))
    design["objectives"]["energy_loss_kwh_per_year"] += 1.5
    line = next(li for li in plain_text(loss_table(design)).splitlines() if "changes of bus voltage" in li)
    assert line.split()[-5] == "1.50"


def test_a_printed_load_is_found_by_name_kind_or_watts(record: FrontRecord) -> None:
    design = record.designs[0]
    states = design["states"]
    assert state_at(design, "50 %") is states[2]
    states[2]["state"], states[2]["kind"] = "half", "50 %"
    assert state_at(design, "50 %") is states[2]
    states[2]["kind"] = "share"
    assert state_at(design, "50 %") is states[2]  # the only one without hours that loses the printed watts


def test_an_explained_design_says_everything(record: FrontRecord) -> None:
    text = plain_text(Front(record).design("knee"))
    titles = [line for line in text.splitlines() if line and not line.startswith(" ")]
    assert titles == [
        "Design D003 (knee): one bus, follows load", "Power tree",
        "Bus voltage by load (load is what the rails draw; thresholds are power at the board's input)",
        "Losses by part and mechanism",
        "States of the year, and the shown loads", "Heat in the hottest case", "Tolerance of each rail, mV",
        "Limits, the worst place of each", "Cost of one board, EUR",
    ]  # fmt: skip
    for said in (
        "input current at low line         3.71 A",
        "worst rail's droop or release     84 % of its budget (exactly 83.45 %)",
        "pays back against today's design  after 1.25 years",
        "     1           20         60                   66                   -     8.00           1",
        "  core                 1       2",
        "  bus A converter, fixed       21.02       1.20       2.40        4.80       6.00",
        " 45.0        9.0     2.9  4.5   0.0    31.5   26.3     20.0   5.2",
        "  one board in all  80.00",
        "  Input power equals load plus listed losses within 2e-12 of itself.",
    ):
        assert said in text
    hottest = [line.split()[0] for line in block(text, "Heat in the hottest case")[1:]]
    assert hottest == ["bus", "core"]  # least kelvin left first


def test_check_prints_assumptions_space_and_power(record: FrontRecord) -> None:
    result = CheckResult(
        record.problem,
        space={"choices": 31, "designs_log10": 23.4, "parts": [{"family": "buck_stages", "offered": 24}]},
        power={"sum_of_maxima_w": 121.5, "coincident_w": 103.0},
        cautions=["io: the droop budget is small"],
    )
    buffer = StringIO()
    print_check(console_for(buffer), result)
    text = buffer.getvalue()
    assert "  economics.cooling_overhead      1.4    common practice" in text.splitlines()
    assert "  sum of the rails' maxima  121.5 W" in text.splitlines()
    assert "  most drawn at one time    103 W" in text.splitlines()
    assert "  designs      about 10^23" in text.splitlines()
    assert "  - io: the droop budget is small" in text.splitlines()
    assert [line.split()[0] for line in block(text, "Rails")[1:]] == ["core", "io", "pll"]


@pytest.mark.parametrize(
    ("volts", "expected"),
    [(12.0, "12"), ([8.0, 9.5, 12.0], "8 to 12"), ([12.0, 12.0], "12"), (None, "-"),
     ({"bus_a": 10.0, "bus_b": [5.0, 6.0]}, "10, 5 to 6")],
)  # fmt: skip
def test_volts_of_a_baseline(volts: object, expected: str) -> None:
    assert volts_text(volts) == expected


def test_markup_in_names_is_printed_as_written() -> None:
    buffer = StringIO()
    put(console_for(buffer), [table(["part", "value"], [["[bold]X[/bold] :smile:", "1"]], left=["part"])])
    assert "[bold]X[/bold] :smile:" in buffer.getvalue()


def test_assumptions_that_rails_share_take_one_line() -> None:
    rails = ["core", "core_2", "io"]
    assumed = [
        *({"place": f"rails.{r}.ripple_percent", "value": "0.5", "reason": "plain default"} for r in rails),
        {"place": "rails.core.step_a", "value": "30", "reason": "half"},
        {"place": "rails.core_2.step_a", "value": "20", "reason": "half"},
        {"place": "rails.core.capacitors", "value": "polymer_1, polymer_2", "reason": "rated"},
        {"place": "rails.io.capacitors", "value": "ceramic_1, ceramic_2", "reason": "rated"},
        {"place": "growth_percent", "value": "15", "reason": "plain default"},
    ]
    assert assumed_rows(assumed, rails) == [
        ["rails: ripple_percent", "all rails", "0.5", "plain default"],
        ["rails: step_a", "core, core_2", "core 30, core_2 20", "half"],
        ["rails: capacitors", "core", "polymer_1, polymer_2", "rated"],
        ["rails: capacitors", "io", "ceramic_1, ceramic_2", "rated"],
        ["growth_percent", "", "15", "plain default"],
    ]


def test_choices_that_every_rail_has_take_one_line() -> None:
    options = [
        {"choice": "core.stage", "values": 12}, {"choice": "io.stage", "values": 30},
        {"choice": "core.pairs", "values": 4}, {"choice": "io.pairs", "values": 4},
        {"choice": "bus_a.nominal_v", "values": 33}, {"choice": "board.stack", "values": 7},
    ]  # fmt: skip
    assert option_rows(options) == [
        ["rails: stage", "2", "12 to 30"], ["rails: pairs", "2", "4"],
        ["buses: nominal v", "1", "33"], ["board: stack", "1", "7"],
    ]  # fmt: skip


def test_one_load_at_several_inputs_is_one_line() -> None:
    states = [
        {"state": "day at 54 V", "hours": 900.0, "input_v": 54.0, "volts": {"bus_a": 9.5}, "load_w": 50.0,
         "input_w": 60.0, "loss_w": 10.0},
        {"state": "day at 40 V", "hours": 100.0, "input_v": 40.0, "volts": {"bus_a": 9.0}, "load_w": 50.0,
         "input_w": 62.0, "loss_w": 12.0},
        {"state": "30 % load", "hours": 0.0, "input_v": 54.0, "volts": {"bus_a": 8.0}, "load_w": 30.0,
         "input_w": 37.5, "loss_w": 7.5},
    ]  # fmt: skip
    lines = plain_text(design_states_table(states)).splitlines()
    assert lines[1].split() == ["day", "1,000", "54,", "40", "9.00", "to", "9.50", "50.0", "10.20", "83.1"]
    assert lines[2].split() == ["30", "%", "load", "0", "54", "8.00", "30.0", "7.50", "80.0"]
    lines = plain_text(load_states_table(states)).splitlines()
    assert lines[1].split() == ["day", "1,000", "11.4", "54,", "40", "50.0"]


def test_the_years_sums_of_a_design_stand_for_its_states(record: FrontRecord) -> None:
    design = record.designs[2]
    whole = plain_text(Front(record).design("knee"))
    sums: dict[str, dict[str, float]] = {}
    for (part, mechanism), kwh in year_kwh(design).items():
        sums.setdefault(part, {})[mechanism] = kwh
    design["year_kwh"] = sums
    del design["states"][0]["losses"]
    assert plain_text(Front(record).design("knee")) == whole


def test_the_best_of_a_topology_is_said_shortly(record: FrontRecord) -> None:
    record.designs[2]["roles"] = ["knee", "best of one bus, follows load", "best of two buses"]
    assert "  knee, best of its kind, best of two buses" in printed(record)


def test_sources_of_numbers_are_listed_once(record: FrontRecord) -> None:
    many = [{**record.leverage[0], "part": f"PART-{k}"} for k in range(3)]
    lines = block(
        printed(dataclasses.replace(record, leverage=many)),
        "Catalogue numbers with the most leverage on the knee",
    )
    assert [line.split()[-1] for line in lines[1:4]] == ["1", "1", "1"]
    assert lines[4:] == ["  source 1: maker's sheet, invented"]
