"""Print what a bus that follows the load is worth against the largest unannounced jump that must be survived.

Run from the repository: ``python tests/benchmarks/worth_of_adaptation.py [STUDY] [DESIGN-CHOICE=VALUE ...]``.
The hardware is the study's incumbent, its choices exchanged as told; its bus is re-scheduled by a direct sweep
for every jump, against the best fixed voltage that the same hardware may have under the same jump.
"""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np

from archopt.inputs.load import load
from archopt.model.compiled import compile_study, incumbent_row
from archopt.model.evaluator import Evaluator
from archopt.trade.money import money_per_kwh
from archopt.trade.pinned import pinned_problem, with_jump
from archopt.trade.schedules import best_fixed, best_schedule, schedule_v

STUDY = Path(__file__).resolve().parents[2] / "studies" / "telecom_six" / "study.toml"
WIDE = {"bus_a.converter": "wide_bus_200w"}
LEAST_MONEY = 1e-9
JUMPS = tuple(float(percent) for percent in range(0, 101, 10))


def table(study_file: Path, changes: dict[str, str]) -> list[str]:
    """Lines of the table, one a jump."""
    loaded = load(study_file)
    problem = compile_study(loaded.study, loaded.catalogue)
    row = incumbent_row(problem)
    if row is None:
        return ["the study has no incumbent"]
    row = problem.space.encode(changes, row)
    pinned = pinned_problem(problem, row)
    worth = money_per_kwh(loaded.study)
    heads = (
        f"{'jump %':>7} {'fixed V':>8} {'fixed kWh':>10} {'moving kWh':>11} {'gain kWh':>9} {'gain %':>7}"
        f" {'money/year':>11} {'supervisor':>11} {'payback y':>10}  schedule V"
    )
    lines = [f"{loaded.study.name}, incumbent with {changes}", heads]
    for jump in JUMPS:
        evaluator = Evaluator(with_jump(pinned, jump))
        fixed = best_fixed(evaluator, row)
        moving = best_schedule(evaluator, row)
        if not (fixed.feasible and moving.feasible):
            which = "no fixed bus" if not fixed.feasible else "no moving bus"
            lines.append(f"{jump:7.0f}  {which} meets every limit")
            continue
        gain = float(fixed.objectives[0] - moving.objectives[0])
        money, cost = gain * worth, float(moving.objectives[1] - fixed.objectives[1])
        payback = f"{cost / money:10.1f}" if money > LEAST_MONEY and cost > 0 else f"{'never':>10}"
        held = "/".join(f"{values[0]:g}" for values in schedule_v(problem, fixed.row).values())
        moves = " ".join(str(np.asarray(values).tolist()) for values in schedule_v(problem, moving.row).values())
        lines.append(
            f"{jump:7.0f} {held:>8} {fixed.objectives[0]:10.3f} {moving.objectives[0]:11.3f} {gain:9.3f}"
            f" {100 * gain / fixed.objectives[0]:7.2f} {money:11.3f} {cost:11.2f} {payback}  {moves}"
        )
    return lines


def main(words: list[str]) -> None:
    """Print the table of a study."""
    files = [Path(word) for word in words if "=" not in word]
    changes = dict(word.split("=", 1) for word in words if "=" in word)
    print("\n".join(table(files[0] if files else STUDY, changes or WIDE)))


if __name__ == "__main__":
    main(sys.argv[1:])
