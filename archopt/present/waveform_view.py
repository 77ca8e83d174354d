"""A design's rail, bus or jump in time: the worst point beside closed form and limit, and the waveform drawn."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
from rich.console import RenderableType

from archopt.errors import OutputError
from archopt.model.bus_stability import LEAST_W
from archopt.model.parameters import FloatArray
from archopt.physics.averaged import LoadStep, RailCircuit, RailWave, rail_wave
from archopt.physics.averaged_bus import BusCircuit, PowerTrain, bus_wave
from archopt.physics.bus_network import damped_dip_ohm, joined_bank
from archopt.physics.stability import least_capacitance_f
from archopt.physics.transient import bus_dip_v, rail_droop_v, source_peak_ohm
from archopt.present.amounts import fixed, number
from archopt.present.part_chart import Curve, chart_lines
from archopt.present.record import BUSES, Data
from archopt.present.tables import HangingLines, pairs, section, table
from archopt.trade.circuits import (
    Waves,
    bus_case,
    bus_step,
    command_of,
    jump_of,
    rail_case,
    settled_s,
    tightest_band,
    waves_of,
)
from archopt.trade.rebuilt import detail_of, problem_of, row_of
from archopt.trade.waveforms import Finding

WIDTH = 64
SPANS = ((1e-9, "ns"), (1e-6, "us"), (1e-3, "ms"), (1.0, "s"))
OUT_OF_TIME = 1e-9


@dataclass(frozen=True)
class Trace:
    """One drawing: curves of one unit over time; words of the curves and their values (T,)."""

    y_words: str
    time_s: FloatArray
    curves: tuple[tuple[str, FloatArray], ...]


@dataclass(frozen=True)
class WaveView:
    """What ``transient`` prints: a title, words and values beside it, worst points, drawings, remarks."""

    title: str
    facts: tuple[tuple[str, str], ...]
    findings: tuple[Finding, ...]
    traces: tuple[Trace, ...]
    remarks: tuple[str, ...] = field(default=())

    def as_dict(self) -> dict[str, Any]:
        """Worst points and facts as plain data, without the waveforms."""
        return {
            "title": self.title,
            "facts": dict(self.facts),
            "worst_points": [vars_of(finding) for finding in self.findings],
            "remarks": list(self.remarks),
        }


def vars_of(finding: Finding) -> dict[str, Any]:
    """A worst point as plain data."""
    names = ("limit", "where", "state", "value", "closed", "bound", "unit", "met")
    return {name: getattr(finding, name) for name in names}


def wave_view(
    record: Data, design: Data, rail: str | None = None, bus: str | None = None, before: str | None = None,
    after: str | None = None,
) -> WaveView:  # fmt: skip
    """Look at a design of a result in time, from its files alone.

    Parameters
    ----------
    record : ``problem.json``
    design : one entry of ``designs.json``
    rail, bus : what to look at; the jump of everything on the bus when neither is given
    before, after : states to go from and to; the band's worst mix and its largest jump when not given

    Raises
    ------
    OutputError : there is no such rail, bus or state, or the result cannot be computed again
    """
    if rail is not None and bus is not None:
        raise OutputError("a rail or a bus, not both")
    if (before is None) != (after is None):
        raise OutputError("a change needs both states, --from and --to")
    problem = problem_of(record)
    waves = waves_of(problem, detail_of(problem, row_of(problem, design)))
    name = str(design.get("design"))
    states = None if before is None or after is None else (state_at(waves, before), state_at(waves, after))
    if rail is not None:
        return rail_view(waves, name, index_of(rail, problem.rails.names, "rail"), states)
    used = [b for k, b in enumerate(BUSES) if waves.detail.hardware.converter[0, k] >= 0]
    if not used:
        raise OutputError(f"{name} has no bus: every rail hangs on the input; ask for a rail")
    chosen = BUSES.index(used[0] if bus is None else used[index_of(bus, used, "bus")])
    return bus_view(waves, name, chosen, states) if bus is not None else jump_view(waves, name, chosen, states)


def index_of(wanted: str, names: Sequence[str], what: str) -> int:
    """The place of a name among some.

    Raises
    ------
    OutputError : it is not there; says which there are.
    """
    if wanted not in names:
        raise OutputError(f"there is no {what} '{wanted}': {', '.join(names)}")
    return list(names).index(wanted)


def state_at(waves: Waves, wanted: str) -> int:
    """The place of a state by its name."""
    return index_of(wanted, waves.problem.states.name, "state")


def rail_view(waves: Waves, name: str, rail: int, states: tuple[int, int] | None) -> WaveView:
    """A rail at its step and its release, or between two states."""
    problem, detail = waves.problem, waves.detail
    if states is None:
        cases = [
            (rail_case(waves, 0, rail, band, rises=rises), band, rises)
            for percent, rises in ((detail.droop.droop_percent, True), (detail.droop.release_percent, False))
            for band in (int(percent[0, rail].argmax()),)
        ]
    else:
        first, last = states
        amps = detail.solution.current_a[0, [first, last], rail]
        step = LoadStep(float(amps[0]), float(amps[1]), float(problem.rails.load_slew_a_per_s[rail]))
        rises, band = bool(amps[1] >= amps[0]), int(problem.states.band[first])
        cases = [(rail_case(waves, 0, rail, band, rises=rises, step=step), band, rises)]
    findings, traces, facts = [], [], []
    for (circuit, step), band, rises in cases:
        wave = rail_wave(circuit, step)
        findings.append(rail_point(waves, rail, band, rises, circuit, step, wave))
        word = "rises" if rises else "falls"
        span = f"{fixed(step.before_a, 2)} to {fixed(step.after_a, 2)} A"
        facts.append((f"load {word}", f"{span} at {number(step.slew_a_per_s * 1e-6, 4)} A/us, band {band + 1}"))
        traces.append(Trace(f"rail when its load {word}, V", wave.time_s, (("rail", wave.output_v),)))
        traces.append(Trace("A", wave.time_s, (("load", wave.load_a), ("stage", wave.stage_a))))
    circuit = cases[0][0][0]
    facts += [
        ("bank, aged", f"{number(circuit.capacitance_f * 1e6, 4)} uF, {number(circuit.esr_ohm * 1e3, 3)} mohm"),
        ("current rises", f"{number(circuit.up_a_per_s * 1e-6, 4)} A/us after {number(circuit.delay_s * 1e9, 4)} ns"),
    ]
    return WaveView(f"{name}, rail {problem.rails.names[rail]}", tuple(facts), tuple(findings), tuple(traces))


def rail_point(
    waves: Waves, rail: int, band: int, rises: bool, circuit: RailCircuit, step: LoadStep, wave: RailWave
) -> Finding:
    """A rail's worst point in time beside the closed form at the same numbers."""
    size_a = abs(step.after_a - step.before_a)
    loop = (circuit.bandwidth_rad_s, circuit.delay_s, circuit.capacitance_f, circuit.esr_ohm, step.slew_a_per_s)
    missing = max(step.after_a - circuit.limit_a, 0.0) if rises else 0.0
    slew = circuit.up_a_per_s if rises else circuit.down_a_per_s
    scale = 100.0 / float(waves.problem.rails.budget_v[rail])
    closed = float(rail_droop_v(size_a, slew, *loop, missing, circuit.wakeup_s)) * scale
    value = (wave.droop_v if rises else wave.release_v) * scale
    name = "rail droop" if rises else "rail release"
    where = waves.problem.rails.names[rail]
    place = waves.problem.states.place_names[band]
    return Finding(0, name, where, place, value, closed, 100.0, "% of budget", value <= 100.1)


def bus_view(waves: Waves, name: str, bus: int, states: tuple[int, int] | None) -> WaveView:
    """A bus at its largest coincident step, or through a change of power between two states."""
    problem, solution = waves.problem, waves.detail.solution
    if states is None:
        band = int((solution.dip_v[0, bus] / np.maximum(waves.detail.hardware.band_v[0, bus], 1e-3)).argmax())
        circuit, train = bus_case(waves, 0, bus, band), bus_step(waves, 0, bus, band)
        wave = bus_wave(circuit, train)
    else:
        first, last = states
        band, to_band = int(problem.states.band[first]), int(problem.states.band[last])
        circuit = bus_case(waves, 0, bus, band)
        before_w, after_w = (max(float(solution.bus_w[0, s, bus]), LEAST_W) for s in states)
        step_w = max(float(solution.step_w[0, bus, band]), LEAST_W)
        count = max(int(np.ceil(abs(after_w - before_w) / step_w - 1e-9)), 1)
        train = PowerTrain(before_w, after_w, count, settled_s(circuit))
        wave = bus_wave(circuit, train, command_of(waves, 0, bus, band, to_band))
    closed_v = dip_of(circuit, train)
    bound = problem.study.control.bus_dip_percent
    value = 100.0 * wave.dip_v / circuit.bus_v
    met = wave.survives and value <= bound * 1.001
    point = Finding(
        0, "bus dip", BUSES[bus], problem.states.place_names[band], value, 100.0 * closed_v / circuit.bus_v, bound,
        "% of bus", met,
    )  # fmt: skip
    facts = (
        ("power", f"{fixed(train.before_w, 1)} to {fixed(train.after_w, 1)} W in {train.steps} step(s)"),
        ("bus before", f"{fixed(circuit.bus_v, 3)} V"),
        *bank_facts(circuit),
        ("input capacitance", input_words(waves)),
    )
    traces = (
        Trace("bus, V", wave.time_s, (("bus", wave.bus_v),)),
        Trace("A", wave.time_s, (("drawn", wave.power_w / wave.bus_v), ("source", wave.source_a))),
    )
    return WaveView(f"{name}, {BUSES[bus]}", facts, (point,), traces, lost_words(wave.lost_s))


def dip_of(circuit: BusCircuit, train: PowerTrain) -> float:
    """The closed form's dip at a train's last step, V."""
    step_w = max(train.after_w - train.before_w, 0.0) / max(train.steps, 1)
    w, delay_s, damper = circuit.bandwidth_rad_s, circuit.delay_s, (circuit.damper_f, circuit.damper_ohm)
    bank = (circuit.bulk_f + circuit.input_f, circuit.bulk_esr_ohm, *damper)
    esr, peak = float(joined_bank(*bank)[1]), float(damped_dip_ohm(*bank, w, delay_s))
    if not circuit.follows:
        source = (circuit.source_ohm, circuit.source_h)
        peak = float(source_peak_ohm(*source, circuit.bulk_f, circuit.bulk_esr_ohm, circuit.input_f, *damper))
        esr, w, delay_s = 0.0, 1e12, 0.0
    return float(
        bus_dip_v(step_w, circuit.bus_v, w, delay_s, circuit.capacitance_f, esr, train.after_w - step_w, peak)
    )


def bank_facts(circuit: BusCircuit) -> tuple[tuple[str, str], ...]:
    """What holds the bus up and what feeds it."""
    bank = f"{number(circuit.bulk_f * 1e6, 4)} uF, {number(circuit.bulk_esr_ohm * 1e3, 3)} mohm"
    if circuit.damper_f > 0.0:
        bank += f", damped by {number(circuit.damper_f * 1e6, 4)} uF, {number(circuit.damper_ohm * 1e3, 3)} mohm"
    source = (
        f"follows at {number(circuit.bandwidth_rad_s * 1e-3 / (2 * np.pi), 3)} kHz after"
        f" {number(circuit.delay_s * 1e6, 3)} us"
        if circuit.follows
        else f"{number(circuit.source_ohm * 1e3, 3)} mohm, {number(circuit.source_h * 1e9, 3)} nH"
    )
    return (
        ("bulk bank, aged", f"{bank}, and {number(circuit.input_f * 1e6, 4)} uF of the stages"),
        ("source", f"{source}; at most {fixed(circuit.limit_a, 1)} A for a short time"),
    )


def input_words(waves: Waves) -> str:
    """What the converters' own input capacitance must be at least: the catalogue has no figure for it."""
    path, solution = waves.problem.path, waves.detail.solution
    if path.inductance_h <= 0.0:
        return "the input path has no inductance stated"
    stated_uf = waves.problem.study.supply.filter_capacitance_uf
    if stated_uf > 0.0:
        return f"{number(stated_uf, 4)} uF stated; the limit input impedance margin counts it"
    at = int((solution.input_w[0] / solution.node_v[0]).argmax())
    drawn_w = float(solution.input_w[0, at] - solution.path_w[0, at])
    least = float(least_capacitance_f(path.resistance_ohm, path.inductance_h, drawn_w, float(solution.node_v[0, at])))
    margin = waves.problem.study.control.stability_margin
    return f"{number(margin * least * 1e6, 3)} uF or more behind the input path; not in the catalogue, check the part"


def jump_view(waves: Waves, name: str, bus: int, states: tuple[int, int] | None) -> WaveView:
    """A bus and all its rails through a jump of everything on it."""
    problem, detail = waves.problem, waves.detail
    if states is None:
        band = tightest_band(waves, 0, bus)
        if band is None:
            raise OutputError(f"{BUSES[bus]} carries nothing that could jump")
        jump = jump_of(waves, 0, bus, band)
        words = problem.states.name[int(waves.jump_at[band])]
    else:
        first, last = states
        band = int(problem.states.band[first])
        amps = detail.solution.current_a[0]
        jump = jump_of(waves, 0, bus, band, amps[first], amps[last], int(problem.states.band[last]))
        words = f"{problem.states.name[first]} to {problem.states.name[last]}"
    names, wave, left_v = problem.rails.names, jump.wave, jump.spare_v()
    closed_v = waves.spare_v[0, band, jump.rails]
    tight = int(left_v.argmin())
    percent = 100.0 * wave.droop_v() / problem.rails.budget_v[jump.rails]
    deep = int(percent.argmax())
    findings = (
        Finding(
            0, "jump survival: stage input", names[int(jump.rails[tight])], words, float(left_v[tight]),
            float(closed_v[tight]), 0.0, "V left", wave.survives,
        ),
        Finding(
            0, "rail droop", names[int(jump.rails[deep])], words, float(percent[deep]),
            float(detail.droop.droop_percent[0, jump.rails[deep], band]), 100.0, "% of budget",
            bool(percent[deep] <= 100.1),
        ),
    )  # fmt: skip
    place = problem.states.place_names[band]
    facts = (
        ("from", f"{place}, {fixed(float(wave.power_w[0]), 1)} W on the bus at {fixed(wave.bus_v[0], 3)} V"),
        ("to", f"{fixed(float(wave.power_w[-1]), 1)} W at {fixed(wave.bus_v[-1], 3)} V"),
        ("lowest bus", f"{fixed(float(wave.bus_v.min()), 3)} V"),
        ("most from the source", f"{fixed(float(wave.source_a.max()), 2)} A of {fixed(jump.circuit.limit_a, 1)} A"),
        *bank_facts(jump.circuit),
    )
    deep_name = names[int(jump.rails[deep])]
    traces = (
        Trace("bus, V", wave.time_s, (("bus", wave.bus_v),)),
        Trace("source current, A", wave.time_s, (("source", wave.source_a),)),
        Trace(f"{deep_name}, V", wave.time_s, ((deep_name, wave.output_v[:, deep]),)),
    )
    return WaveView(f"{name}, jump on {BUSES[bus]}: {words}", facts, findings, traces, lost_words(wave.lost_s))


def lost_words(lost_s: float) -> tuple[str, ...]:
    """Remarks where a load stopped."""
    if not np.isfinite(lost_s):
        return ()
    return (f"A stage stops {number(lost_s * 1e3, 4)} ms after the first step; the waveform ends there.",)


def columns(time_s: FloatArray, values: FloatArray, count: int) -> tuple[FloatArray, FloatArray]:
    """A curve with one point a column of a drawing: the value there that is furthest from where it began."""
    edges = np.linspace(time_s[0], time_s[-1], count + 1)
    centre = 0.5 * (edges[:-1] + edges[1:])
    place = np.clip(np.searchsorted(edges, time_s, side="right") - 1, 0, count - 1)
    out = np.interp(centre, time_s, values)
    away = np.abs(out - values[0])
    for column, value in zip(place, values, strict=True):
        if abs(value - values[0]) > away[column]:
            out[column], away[column] = value, abs(value - values[0])
    return centre, out


def scaled(time_s: FloatArray) -> tuple[float, str]:
    """The unit that a span of time reads best in: its seconds and its word."""
    span_s = max(float(time_s[-1]), OUT_OF_TIME)
    return max((unit for unit in SPANS if unit[0] <= 0.7 * span_s), default=SPANS[0])


def view_sections(view: WaveView, width: int = WIDTH) -> Iterable[RenderableType]:
    """All that is printed of a view."""
    rows = [
        (
            f.limit, f.where, f.state, number(f.value, 4), number(f.closed, 4), number(f.bound, 4), f.unit,
            "yes" if f.met else "NO",
        )
        for f in view.findings
    ]  # fmt: skip
    heads = ("limit", "where", "when", "in time", "closed form", "limit at", "unit", "met")
    yield from section(view.title, pairs(view.facts))
    yield from section("Worst points", table(heads, rows, left=("limit", "where", "when", "unit", "met")))
    for trace in view.traces:
        unit_s, word = scaled(trace.time_s)
        curves = [
            Curve(name, (at / unit_s).tolist(), value.tolist())
            for name, (at, value) in ((n, columns(trace.time_s, v, width)) for n, v in trace.curves)
        ]
        yield from section("", HangingChart(chart_lines(curves, f"time, {word}", trace.y_words, width)))
    if view.remarks:
        yield from section("Remarks", HangingLines(view.remarks))


class HangingChart:
    """Lines of a drawing, none of them wrapped."""

    def __init__(self, lines: Sequence[str]) -> None:
        self.lines = tuple(lines)

    def __rich_console__(self, console: Any, options: Any) -> Iterable[RenderableType]:
        """Draw each line as it is."""
        from rich.text import Text  # noqa: PLC0415 - only where something is drawn

        for line in self.lines:
            yield Text(line, no_wrap=True, overflow="crop")


def write_png(view: WaveView, path: Path) -> None:
    """Draw a view's waveforms into a picture file.

    Raises
    ------
    OutputError : the file is not named as a PNG, or cannot be written
    """
    if path.suffix.lower() != ".png":
        raise OutputError(f"{path}: pictures of waveforms are PNG; let the name end in .png")
    from matplotlib.figure import Figure  # noqa: PLC0415 - half a second, and only pictures need it

    figure = Figure(figsize=(8.0, 2.6 * len(view.traces)), layout="constrained")
    axes = figure.subplots(len(view.traces), 1, squeeze=False)[:, 0]
    for axis, trace in zip(axes, view.traces, strict=True):
        unit_s, word = scaled(trace.time_s)
        for name, values in trace.curves:
            axis.plot(trace.time_s / unit_s, values, label=name, linewidth=1.2)
        axis.set_xlabel(f"time, {word}")
        axis.set_ylabel(trace.y_words)
        axis.grid(visible=True, linewidth=0.4)
        if len(trace.curves) > 1:
            axis.legend(frameon=False)
    figure.suptitle(view.title)
    try:
        figure.savefig(path, format="png", dpi=120)
    except OSError as error:
        raise OutputError(f"{path}: cannot be written: {error.strerror or error}") from error


__all__ = ["WaveView", "view_sections", "wave_view", "write_png"]
