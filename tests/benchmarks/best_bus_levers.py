"""What moves the best fixed bus voltage of the pinned board: a separate gate bias, a flat converter exponent.

Run ``python -m tests.benchmarks.best_bus_levers``; prints the best bus at each load for the shipped numbers and
with each lever alone.
"""

from __future__ import annotations

import tempfile
from dataclasses import replace
from pathlib import Path

import numpy as np

from archopt.inputs.load import load
from archopt.model.problem import Problem, compile_problem
from archopt.model.states import reduce_load
from tests.model.test_trade_facts import LOADS, VOLTS, best_v, loss_w, study_text


def pinned(folder: Path) -> Problem:
    """Return the pinned board at its usual input."""
    file = folder / "pinned.toml"
    file.write_text(study_text(53.5), encoding="utf-8")
    loaded = load(file)
    return compile_problem(loaded.study, loaded.catalogue, reduce_load(loaded.study))


def with_separate_bias(problem: Problem) -> Problem:
    """Return the board with the gates of every stage on a separate supply; its constant power moves nothing."""
    buck = replace(problem.stages.buck, gate_from_input=np.zeros_like(problem.stages.buck.gate_from_input))
    return replace(problem, stages=replace(problem.stages, buck=buck))


def with_output_exponent(problem: Problem, exponent: float) -> Problem:
    """Return the board with bus converters whose switching loss follows that power of their output voltage."""
    loss = problem.converters.loss
    flat = replace(loss, output_exponent=np.full_like(loss.output_exponent, exponent))
    return replace(problem, converters=replace(problem.converters, loss=flat))


def main() -> None:
    """Print the table."""
    with tempfile.TemporaryDirectory() as folder:
        shipped = pinned(Path(folder))
    cases = {
        "shipped": shipped,
        "gates on a separate bias": with_separate_bias(shipped),
        "loss falls with output, exponent 1": with_output_exponent(shipped, 1.0),
        "loss flat in output, exponent 0": with_output_exponent(shipped, 0.0),
    }
    print(f"{'best fixed bus, V, at load':38}" + "".join(f"{load:8.0%}" for load in LOADS))
    for name, problem in cases.items():
        losses = np.array([loss_w(problem, float(volts)) for volts in VOLTS])
        print(f"{name:38}" + "".join(f"{best_v(losses, k):8.2f}" for k in range(len(LOADS))))


if __name__ == "__main__":
    main()
