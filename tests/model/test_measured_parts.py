"""Parts whose loss is read from measured points: as the row they were measured on, never beyond, one number."""

from __future__ import annotations

import sys
from collections.abc import Sequence
from datetime import date
from functools import cache
from pathlib import Path
from tempfile import TemporaryDirectory

import numpy as np
import pytest
from equivalence.reference import Reference
from numpy.typing import NDArray

sys.path.append(str(Path(__file__).parents[1] / "inputs"))

from fitting_bench import measure

from archopt.errors import InputError
from archopt.inputs.load import load
from archopt.inputs.measured import loss_table, part_table
from archopt.inputs.measured_catalogue import read_catalogue
from archopt.inputs.measured_files import places, table_text, write_part
from archopt.inputs.parts import Part
from archopt.model.compiled import compile_study, incumbent_row
from archopt.model.evaluator import Detail, Evaluator
from archopt.model.limits import ROOM
from archopt.model.loss_lists import all_losses
from archopt.trade.leverage import loss_numbers

STUDY = """\
catalogue = "parts"
[input]
low_v = 40
high_v = 60
[board]
area_cm2 = 200
[choices]
max_buses = 1
[[load.states]]
name = "light"
hours = 3000
utilisation = 0.1
[[load.states]]
name = "busy"
hours = 5760
utilisation = 0.7
[[rails]]
name = "core"
voltage_v = 1.0
max_current_a = 20
[[rails]]
name = "io"
voltage_v = 3.3
max_current_a = 8
[incumbent]
"core.feed" = "bus_a"
"core.stage" = "STAGE"
"core.phases" = 2
"core.bank" = "polymer_560u_2v5_can"
"core.bank_count" = 8
"io.feed" = "IO_FEED"
"io.stage" = "IO_STAGE"
"io.phases" = 2
"io.bank" = "polymer_560u_6v3_can"
"io.bank_count" = 4
"bus_a.converter" = "CONVERTER"
"bus_a.nominal_v" = 10.5
"bus_a.control" = "fixed"
"bus_a.bulk" = "ceramic_22u_25v"
"bus_a.bulk_count" = 4
"""
PLAIN = {
    "STAGE": "buck_20a_400k_bus_gate", "CONVERTER": "trim_bus_150w",
    "IO_FEED": "bus_a", "IO_STAGE": "buck_10a_500k_mid_bus_gate",
}  # fmt: skip
DIRECT = PLAIN | {"IO_FEED": "input", "IO_STAGE": "direct_48v_to_3v3_20a_isolated"}
VOLTS = (39.0, 45.0, 50.0, 55.0, 61.0)
BUS_VOLTS = (9.5, 10.5, 11.5, 13.3)
#: What is measured: family, row, voltages and currents of the bench.
BENCH: dict[str, tuple[str, Sequence[float], Sequence[float], float]] = {
    "trim_bus_150w": ("bus_converters", VOLTS, BUS_VOLTS, 12.5),
    "buck_20a_400k_bus_gate": ("buck_stages", (8.0, 9.0, 10.0, 11.0, 12.0), (0.9, 1.0, 1.2), 20.0),
    "direct_48v_to_3v3_20a_isolated": ("single_stages", VOLTS, (3.0, 3.3, 3.6), 20.0),
}
SHARES = np.array([0.0, 0.02, 0.05, 0.1, 0.15, 0.2, 0.3, 0.4, 0.5, 0.6, 0.7, 0.8, 0.9, 1.0])


def ranges(row: Part, volts: Sequence[float], out: Sequence[float]) -> Part:
    """Return the row used only where it was measured."""
    values = {"input_min_v": volts[0], "input_max_v": volts[-1], "output_min_v": out[0], "output_max_v": out[-1]}
    return row.model_copy(update=values)


def write_measured(folder: Path, name: str, least_a: float = 0.0) -> None:
    """Write the measured twin of a row, ``my_`` before its name, into a catalogue folder."""
    catalogue = read_catalogue()
    family, volts, out, most_a = BENCH[name]
    row = catalogue.families[family][name]
    amps = most_a * SHARES
    amps = np.concatenate([[least_a], amps[amps > least_a]])
    points = measure(catalogue, row, volts, out, np.maximum(amps, 1e-9), local_degc=(40.0,))
    twin = ranges(row, volts, out).model_copy(update={"name": f"my_{name}", "source": "bench"})
    table = part_table(twin, points)
    place = places(folder, family, twin.name)
    named = place.table.relative_to(folder).as_posix()
    write_part(place, twin.model_copy(update={"measured_points": named}), "bench", DATED, table, replace=True)


DATED = date(2026, 12, 1)


@cache
def evaluator(least_a: float = 0.0) -> Evaluator:
    with TemporaryDirectory() as place:
        folder = Path(place)
        for name in BENCH:
            write_measured(folder / "parts", name, least_a if name == "trim_bus_150w" else 0.0)
        (folder / "study.toml").write_text(text(PLAIN))
        loaded = load(folder / "study.toml")
    return Evaluator(compile_study(loaded.study, loaded.catalogue))


def text(names: dict[str, str]) -> str:
    out = STUDY
    for key, value in names.items():
        out = out.replace(f'"{key}"', f'"{value}"')
    return out


def row(names: dict[str, str], least_a: float = 0.0) -> NDArray[np.int64]:
    """Return the decided design of the study's incumbent with these parts."""
    problem = evaluator(least_a).problem
    start = incumbent_row(problem)
    assert start is not None
    choices = problem.space.describe(start) | {
        "core.stage": names["STAGE"], "io.stage": names["IO_STAGE"], "io.feed": names["IO_FEED"],
        "bus_a.converter": names["CONVERTER"],
    }  # fmt: skip
    return evaluator(least_a).decide(problem.space.encode(choices, start)[None])[0]


def detail(names: dict[str, str], least_a: float = 0.0) -> Detail:
    return evaluator(least_a).detail(row(names, least_a)[None], exact=True, explain=True)


def measured(names: dict[str, str]) -> dict[str, str]:
    return {key: f"my_{value}" if value in BENCH else value for key, value in names.items()}


@pytest.mark.parametrize("names", [PLAIN, DIRECT])
def test_a_measured_part_does_as_the_row_it_was_measured_on(names: dict[str, str]) -> None:
    by_terms, by_table = detail(names), detail(measured(names))
    assert (by_terms.designs.rows != by_table.designs.rows).any()
    # energy to what a line between measured currents misses; cost and droop exactly
    energy = by_table.evaluation.objectives[0, 0] / by_terms.evaluation.objectives[0, 0]
    assert energy == pytest.approx(1.0, rel=0.01)
    assert energy != 1.0
    np.testing.assert_allclose(by_table.evaluation.objectives[0, 1], by_terms.evaluation.objectives[0, 1], rtol=1e-12)
    np.testing.assert_allclose(by_table.evaluation.droop_exact, by_terms.evaluation.droop_exact, rtol=1e-3)
    degc = by_table.solution.converter_degc[..., 0] - by_terms.solution.converter_degc[..., 0]
    assert np.abs(degc).max() < 1.0
    assert by_table.ledger.worst["measured range"].normalised[0] > 0.0
    assert by_terms.ledger.worst["measured range"].normalised[0] >= ROOM  # of the row's own terms nothing is asked


@pytest.mark.parametrize("names", [PLAIN, DIRECT])
def test_measured_loss_is_one_number_and_balances(names: dict[str, str]) -> None:
    problem, found = evaluator().problem, detail(measured(names))
    losses = all_losses(problem, found)[0]
    assert list(losses["bus_a converter"]) == ["measured"]
    assert list(losses["core stage"]) == ["measured", "output bank"]
    listed = sum(sum(parts.values()) for parts in losses.values())
    error = np.abs(found.solution.loss_w[0] - listed) / found.solution.input_w[0]
    assert error.max() < 1e-9
    by_terms = all_losses(problem, detail(names))[0]
    assert "measured" not in by_terms["bus_a converter"]
    assert "measured" not in by_terms["core stage"]


@pytest.mark.parametrize("names", [PLAIN, DIRECT])
def test_tables_are_read_as_the_reference_reads_them(names: dict[str, str]) -> None:
    problem, found = evaluator().problem, detail(measured(names))
    reference = Reference(problem, row(measured(names)))
    assert found.evaluation.objectives[0, 0] == pytest.approx(reference.energy_kwh(), rel=1e-9)
    assert found.evaluation.droop_exact[0] == pytest.approx(reference.droop_percent(), rel=1e-9)


def test_a_load_below_the_least_measured_current_is_named_with_its_size() -> None:
    found = detail(measured(PLAIN), least_a=3.0)
    worst = found.ledger.worst["measured range"]
    assert worst.where is not None
    assert worst.where[0].startswith("bus_a converter current; light")
    light = found.solution.bus_a[0, :, 0].min()
    assert light < 3.0
    assert worst.value[0] == pytest.approx(100.0 * (1.0 - light / 3.0), rel=1e-9)
    assert worst.bound[0] == pytest.approx(1.0, rel=1e-9)
    assert found.evaluation.violation[0] > 0.0


def test_leverage_names_no_term_of_a_measured_part() -> None:
    problem = evaluator().problem
    named = {number.name for number in loss_numbers(problem, row(measured(PLAIN)))}
    assert not any(name.startswith("my_") for name in named)
    assert "trim_bus_150w" in {number.name for number in loss_numbers(problem, row(PLAIN))}


def test_a_fixed_ratio_is_measured_over_input_and_current_alone() -> None:
    catalogue = read_catalogue()
    known = catalogue.families["bus_converters"]["ratio5_bus_600w"]
    points = [measure(catalogue, known, [v], [0.2 * v], [0.0001, 20.0, 56.0]) for v in (38.0, 50.0, 60.0)]
    whole = type(points[0])(
        "points.csv", tuple(range(2, 11)),
        *(np.concatenate([getattr(p, name) for p in points])
          for name in ("input_v", "output_v", "current_a", "loss_w", "temperature_degc")),
    )  # fmt: skip
    with pytest.raises(InputError, match="no point at"):
        loss_table(whole)
    table = part_table(known, whole)
    assert (len(table.input_v), len(table.output_v), len(table.current_a)) == (3, 1, 3)
    assert table.output_follows


@pytest.mark.parametrize(
    ("change", "place", "message"),
    [
        ("gone", "my_trim_bus_150w.csv: row 2, column measured_points", "there is no file parts/_measured/"),
        ("word", "points.csv: row 3, column loss_w", "needs a number in W"),
        ("hole", "points.csv", "no point at"),
        ("range", "points.csv", "my_trim_bus_150w is stated to input_min_v 39, measured 45 to 61"),
    ],
)
def test_a_bad_table_is_named(tmp_path: Path, change: str, place: str, message: str) -> None:
    write_measured(tmp_path / "parts", "trim_bus_150w")
    file = tmp_path / "parts" / "_measured" / "my_trim_bus_150w.points.csv"
    lines = file.read_text().splitlines()
    if change == "gone":
        file.unlink()
    elif change == "word":
        cells = lines[2].split(",")
        file.write_text("\n".join([*lines[:2], ",".join([*cells[:3], "many", cells[4]]), *lines[3:]]) + "\n")
    elif change == "hole":
        file.write_text("\n".join(lines[:-1]) + "\n")
    else:
        file.write_text("\n".join([lines[0], *(line for line in lines[1:] if not line.startswith("39"))]) + "\n")
    (tmp_path / "study.toml").write_text(text(PLAIN))
    with pytest.raises(InputError) as caught:
        load(tmp_path / "study.toml")
    assert any(place in str(problem) and message in str(problem) for problem in caught.value.problems), caught.value


def test_a_tables_file_says_the_air_it_was_measured_in(tmp_path: Path) -> None:
    write_measured(tmp_path, "trim_bus_150w")
    catalogue = read_catalogue(tmp_path)
    table = catalogue.measured["my_trim_bus_150w"]
    assert table.local_degc == pytest.approx(40.0, rel=1e-9)
    assert table_text(table) == (tmp_path / "_measured" / "my_trim_bus_150w.points.csv").read_text()
