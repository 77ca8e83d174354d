"""Print what a bus that follows the load is worth against the largest unannounced jump that must be survived.

Run from the repository: ``python tests/benchmarks/worth_of_adaptation.py [STUDY] [DESIGN-CHOICE=VALUE ...]``.
Without choices three sets of hardware are asked, the last with no short-time current guaranteed.
The hardware is the study's incumbent, its choices exchanged as told; its bus is re-scheduled by a direct sweep
for every jump, against the best fixed voltage that the same hardware may have under the same jump.
"""

from __future__ import annotations

import sys
from dataclasses import replace
from pathlib import Path

import numpy as np

from archopt.inputs.load import load
from archopt.model.compiled import compile_study, incumbent_row
from archopt.model.evaluator import Evaluator
from archopt.trade.money import money_per_kwh
from archopt.trade.pinned import pinned_problem, with_jump
from archopt.trade.schedules import best_fixed, best_schedule, schedule_v

STUDY = Path(__file__).resolve().parents[2] / "studies" / "telecom_six" / "study.toml"
CASES = (
    ({"bus_a.converter": "wide_bus_150w"}, True),
    ({"bus_a.converter": "wide_bus_150w", "bus_a.bulk": "ceramic_22u_25v", "bus_a.bulk_count": "4"}, True),
    ({"bus_a.converter": "wide_bus_150w", "bus_a.bulk": "ceramic_22u_25v", "bus_a.bulk_count": "4"}, False),
)
LEAST_MONEY = 1e-9
JUMPS = tuple(float(percent) for percent in range(0, 101, 10))


def table(study_file: Path, changes: dict[str, str], overload: bool = True) -> list[str]:
    """Lines of the table, one a jump; without ``overload`` the converters carry no more than they do for ever."""
    loaded = load(study_file)
    problem = compile_study(loaded.study, loaded.catalogue)
    row = incumbent_row(problem)
    if row is None:
        return ["the study has no incumbent"]
    row = problem.space.encode(changes, row)
    pinned = pinned_problem(problem, row)
    if not overload:
        pinned = replace(pinned, converters=replace(pinned.converters, overload_a=pinned.converters.limit_a))
    worth = money_per_kwh(loaded.study)
    heads = (
        f"{'jump %':>7} {'fixed V':>8} {'fixed kWh':>10} {'moving kWh':>11} {'gain kWh':>9} {'gain %':>7}"
        f" {'money/year':>11} {'supervisor':>11} {'payback y':>10}  schedule V"
    )
    words = ", ".join(f"{name} {value}" for name, value in changes.items())
    short = "" if overload else ", no short-time current guaranteed"
    lines = [f"{loaded.study.name}, incumbent with {words}{short}", heads]
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
    for case, overload in ((changes, True),) if changes else CASES:
        print("\n".join(table(files[0] if files else STUDY, case, overload)), end="\n\n")


if __name__ == "__main__":
    main(sys.argv[1:])
