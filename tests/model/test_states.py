"""Reduction of the load to states, against pandas on the raw table (an independent check)."""

from __future__ import annotations

from dataclasses import replace
from importlib.metadata import distribution

import numpy as np
import pandas as pd
import pytest
from equivalence.shipped import FOLDER

from archopt.inputs.load import load
from archopt.inputs.resolved import LoadTable, ResolvedStudy
from archopt.model.states import ENERGY, FALLBACK, JUMP, MIX, PRINT, StateTable, own_rails, reduce_load

SAME = 1e-12


def plain_study() -> ResolvedStudy:
    """Return the ten-rail study: taps, a rail that goes off, growth of 15 %."""
    return load(FOLDER / "industrial_ten" / "study.toml").study


def with_load(study: ResolvedStudy, table: LoadTable) -> ResolvedStudy:
    return replace(study, load=table)


def series(study: ResolvedStudy, count: int = 4000, seed: int = 3) -> LoadTable:
    """Return a quarter-hour series of the shape of a business (BDEW g1, from demandlib), each rail noisy."""
    file = distribution("demandlib").locate_file("demandlib/bdew/bdew_data/selp_series.csv")
    shape = np.resize(pd.read_csv(str(file))["g1"].to_numpy(dtype=float), count)
    shape = 0.1 + 0.8 * shape / shape.max()
    rng = np.random.default_rng(seed)
    maximum = np.array([rail.max_current_a for rail in study.rails])
    current = shape[:, None] * maximum * rng.uniform(0.8, 1.1, (count, len(maximum))) * study.coincidence
    off = np.zeros(current.shape, dtype=bool)
    off[:, 0] = shape < 0.2
    current = np.where(off, 0.0, current)
    input_v = np.where(np.arange(count) % 7 == 0, 22.0 + rng.uniform(0, 4, count), np.nan)
    return LoadTable(
        hours=np.full(count, 8000.0 / count) * rng.uniform(0.5, 1.5, count),
        current_a=current,
        off=off,
        input_v=input_v,
        inlet_degc=25.0 + 10.0 * shape,
        label=(),
        series=True,
    )


@pytest.fixture(scope="module")
def study() -> ResolvedStudy:
    plain = plain_study()
    return with_load(plain, series(plain))


@pytest.fixture(scope="module")
def states(study: ResolvedStudy) -> StateTable:
    return reduce_load(study)


def frame(study: ResolvedStudy, states: StateTable) -> pd.DataFrame:
    """Return the raw moments with taps folded by name, useful power and band."""
    table = study.load
    amps = pd.DataFrame(table.current_a, columns=[rail.name for rail in study.rails])
    power = sum(amps[rail.name] * rail.voltage_v for rail in study.rails)
    tap_w = sum((amps[rail.name] ** 2 * rail.tap_mohm * 1e-3 for rail in study.rails if rail.tap_of), 0.0 * power)
    for rail in study.rails:
        if rail.tap_of:
            amps[rail.tap_of] = amps[rail.tap_of] + amps.pop(rail.name)
    edges = states.edges_w
    amps["band"] = pd.cut(power, [-np.inf, *edges[1:-1], np.inf], labels=False)
    amps["hours"], amps["useful"], amps["tap"], amps["inlet"] = table.hours, power, tap_w, table.inlet_degc
    return amps


def energy_sum(states: StateTable, values: np.ndarray) -> np.ndarray:
    energy = states.of_kind(ENERGY)
    return states.hours[energy] @ values[energy]


def test_hours_and_means_are_preserved_exactly(study: ResolvedStudy, states: StateTable) -> None:
    raw = frame(study, states)
    assert states.hours.sum() == pytest.approx(raw["hours"].sum(), rel=SAME)
    names = [rail.name for rail in own_rails(study)]
    charge = raw[names].mul(raw["hours"], axis=0).sum().to_numpy()
    np.testing.assert_allclose(energy_sum(states, states.current_a), charge, rtol=SAME)
    for column, values in (
        ("useful", states.useful_w), ("tap", states.tap_w), ("inlet", states.ambient_degc - study.supply.local_rise_k),
    ):  # fmt: skip
        assert energy_sum(states, values) == pytest.approx((raw[column] * raw["hours"]).sum(), rel=SAME)


def test_means_and_hours_of_each_band_are_preserved(study: ResolvedStudy, states: StateTable) -> None:
    by_band = frame(study, states).groupby("band")
    energy = states.of_kind(ENERGY)
    for band, group in by_band:
        mine = energy[states.band[energy] == band]
        assert states.hours[mine].sum() == pytest.approx(group["hours"].sum(), rel=SAME)
        useful = (group["useful"] * group["hours"]).sum()
        assert states.hours[mine] @ states.useful_w[mine] == pytest.approx(useful, rel=SAME)


def test_input_voltage_keeps_its_distribution(study: ResolvedStudy, states: StateTable) -> None:
    stated = np.isfinite(study.load.input_v)
    hours = study.load.hours
    level_mean = sum(level.voltage_v * level.share for level in study.supply.levels)
    expected = hours[stated] @ study.load.input_v[stated] + hours[~stated].sum() * level_mean
    assert energy_sum(states, states.input_v) == pytest.approx(expected, rel=SAME)
    energy = states.of_kind(ENERGY)
    for level in study.supply.levels:
        here = energy[states.input_v[energy] == level.voltage_v]
        assert states.hours[here].sum() == pytest.approx(hours[~stated].sum() * level.share, rel=1e-9)


def test_clusters_lie_inside_their_band(states: StateTable) -> None:
    energy = states.of_kind(ENERGY)
    low, high = states.edges_w[states.band[energy]], states.edges_w[states.band[energy] + 1]
    assert (states.useful_w[energy] >= low - 1e-9).all()
    assert (states.useful_w[energy] <= high + 1e-9).all()
    assert len({name.split(" at ")[0] for name in np.array(states.name)[energy]}) <= 24


def test_bands_are_equal_steps_from_lowest_to_highest(study: ResolvedStudy, states: StateTable) -> None:
    raw = frame(study, states)
    maximum = sum(r.max_current_a * study.coincidence * r.voltage_v for r in study.rails)
    low, high = raw["useful"].min(), max(raw["useful"].max(), maximum)
    steps = np.linspace(low, high, 9)
    assert states.bands <= 8
    for edge in states.edges_w:
        assert np.abs(steps - edge).min() <= 1e-9 * high
    assert states.edges_w[0] == pytest.approx(low)
    assert states.edges_w[-1] == pytest.approx(high)


def test_a_step_without_moments_joins_the_next_higher() -> None:
    study = plain_study()
    share = np.array([0.1, 0.12, 0.9])
    maximum = np.array([rail.max_current_a for rail in study.rails]) * study.coincidence
    table = LoadTable(
        hours=np.array([100.0, 200.0, 300.0]), current_a=share[:, None] * maximum,
        off=np.zeros((3, len(maximum)), dtype=bool), input_v=np.full(3, np.nan), inlet_degc=np.full(3, 30.0),
        label=("a", "b", "c"), series=False,
    )  # fmt: skip
    states = reduce_load(with_load(study, table))
    full = float(sum(m * rail.voltage_v for m, rail in zip(maximum, study.rails, strict=True)))
    steps = np.linspace(0.1 * full, full, 9)
    # 0.1 and 0.12 in the first step; 0.9 ends up in the eighth with the coincident maximum
    np.testing.assert_allclose(states.edges_w, [steps[0], steps[1], steps[8]], rtol=SAME)


def test_off_is_not_zero_amperes(study: ResolvedStudy, states: StateTable) -> None:
    energy = states.of_kind(ENERGY)
    off_hours = states.hours[energy] @ states.off[energy, 0]
    raw_off = study.load.off[:, 0]
    assert off_hours == pytest.approx(study.load.hours[raw_off].sum(), rel=SAME)
    assert (states.current_a[energy][states.off[energy]] == 0.0).all()
    assert not states.off[energy, 1:].any()
    assert not states.off[states.of_kind(FALLBACK)].any()


def test_a_rail_with_a_live_tap_is_on() -> None:
    study = plain_study()
    place = {rail.name: k for k, rail in enumerate(study.rails)}
    table = study.load
    off = table.off.copy()
    off[0, place["io_3v3"]] = True
    current = np.where(off, 0.0, table.current_a)
    states = reduce_load(with_load(study, replace(table, off=off, current_a=current)))
    io = [rail.name for rail in own_rails(study)].index("io_3v3")
    first = [s for s in states.of_kind(ENERGY) if states.name[s].startswith(table.label[0])]
    assert not states.off[first, io].any()
    np.testing.assert_allclose(states.current_a[first, io], current[0, place["radio_3v3"]], rtol=SAME)


def test_worst_mix_is_the_highest_current_of_any_moment_of_the_band(study: ResolvedStudy, states: StateTable) -> None:
    raw = frame(study, states)
    names = [rail.name for rail in own_rails(study)]
    highest = raw.groupby("band")[names].max()
    maximum = coincident(study)
    for band in range(states.bands):
        expected = highest.loc[band].to_numpy() if band in highest.index else np.zeros(len(names))
        if band == states.bands - 1:
            expected = np.maximum(expected, maximum)
        np.testing.assert_allclose(states.mix_a[band], expected * study.growth, rtol=SAME)
    mixes = states.of_kind(MIX)
    np.testing.assert_allclose(states.current_a[mixes], np.repeat(states.mix_a[:-1], 2, axis=0), rtol=SAME)
    assert set(states.input_v[mixes]) == {study.supply.low_v, study.supply.high_v}
    hottest = study.supply.hottest_inlet_degc + study.supply.local_rise_k
    assert (states.ambient_degc[mixes] == hottest).all()


def coincident(study: ResolvedStudy) -> np.ndarray:
    """Return the coincident maximum of the rails with a stage, taps added, before growth."""
    found = {rail.name: 0.0 for rail in own_rails(study)}
    for rail in study.rails:
        found[rail.tap_of or rail.name] += rail.max_current_a * study.coincidence
    return np.array(list(found.values()))


@pytest.mark.parametrize("jump", [0.0, 35.0, 100.0])
def test_currents_after_a_jump(study: ResolvedStudy, jump: float) -> None:
    changed = replace(study, control=replace(study.control, jump_percent=jump))
    states = reduce_load(changed)
    rated = coincident(study) * study.growth
    np.testing.assert_allclose(states.rated_a, rated, rtol=SAME)
    for band in range(states.bands):
        for r, before in enumerate(states.mix_a[band]):
            after = min(before + jump / 100.0 * rated[r], max(rated[r], before))
            assert states.after_a[band, r] == pytest.approx(after, rel=SAME)
    jumps = states.of_kind(JUMP)
    np.testing.assert_allclose(states.current_a[jumps], states.after_a, rtol=SAME)
    assert (states.input_v[jumps] == study.supply.low_v).all()


def test_growth_changes_limits_but_no_energy(study: ResolvedStudy) -> None:
    small, grown = reduce_load(replace(study, growth=1.0)), reduce_load(replace(study, growth=1.3))
    energy = small.of_kind(ENERGY)
    for name in ("current_a", "hours", "useful_w", "band"):
        np.testing.assert_array_equal(getattr(small, name)[energy], getattr(grown, name)[energy])
    np.testing.assert_allclose(grown.mix_a, 1.3 * small.mix_a, rtol=SAME)
    np.testing.assert_allclose(grown.rated_a, 1.3 * small.rated_a, rtol=SAME)
    np.testing.assert_array_equal(small.edges_w, grown.edges_w)


def test_rated_and_shown_loads_are_always_there_without_hours(study: ResolvedStudy, states: StateTable) -> None:
    maximum = coincident(study)
    fallback, shown = states.of_kind(FALLBACK), states.of_kind(PRINT)
    assert sorted(states.input_v[fallback]) == [study.supply.low_v, study.supply.high_v]
    np.testing.assert_array_equal(states.band[fallback], states.bands)
    assert states.place_names[-1] == "fall-back"
    for currents in (states.mix_a[-1], states.after_a[-1]):
        np.testing.assert_allclose(currents, maximum * study.growth, rtol=SAME)
    assert (states.band == states.bands).sum() == 3  # lowest and highest input, and after a step
    for s in fallback:
        np.testing.assert_allclose(states.current_a[s], maximum * study.growth, rtol=SAME)
    assert len(shown) == 3
    for s, share in zip(shown, (0.3, 0.5, 1.0), strict=True):
        np.testing.assert_allclose(states.current_a[s], maximum * share, rtol=SAME)
    assert (states.hours[states.kind != ENERGY] == 0.0).all()


def test_transitions_of_a_series_are_counted(study: ResolvedStudy) -> None:
    free = replace(study, control=replace(study.control, transitions_per_day=np.nan))
    states = reduce_load(free)
    band = frame(free, states)["band"]
    pairs = pd.crosstab(band, band.shift(-1)).to_numpy()
    got = states.transitions_per_year
    off_diagonal = ~np.eye(len(pairs), dtype=bool)
    assert pairs[off_diagonal].sum() > 100
    np.testing.assert_array_equal(got[: len(pairs), : len(pairs)][off_diagonal], pairs[off_diagonal])
    assert (np.diag(got) == 0.0).all()


def test_stated_transitions_run_between_the_ends(study: ResolvedStudy) -> None:
    states = reduce_load(replace(study, control=replace(study.control, transitions_per_day=10.0)))
    assert states.transitions_per_year.sum() == pytest.approx(3650.0)
    assert states.transitions_per_year[0, -1] == states.transitions_per_year[-1, 0] == pytest.approx(1825.0)
    assert np.count_nonzero(states.transitions_per_year) == 2


def test_clusters_are_added_until_the_loss_agrees(study: ResolvedStudy) -> None:
    """A loss that bends strongly needs more clusters than one that hardly does; both end within 0.5 %."""
    def loss(power: float):
        return lambda states: float((states.hours * (1.0 + (states.useful_w / 50.0) ** power)).sum())

    counts = []
    for power in (1.0, 4.0):
        states = reduce_load(study, loss(power))
        energy = states.of_kind(ENERGY)
        counts.append(len({name.split(" at ")[0] for name in np.array(states.name)[energy]}))
        raw = frame(study, states)
        exact = (raw["hours"] * (1.0 + (raw["useful"] / 50.0) ** power)).sum()
        reduced = (states.hours[energy] * (1.0 + (states.useful_w[energy] / 50.0) ** power)).sum()
        assert abs(reduced / exact - 1.0) <= 0.005 + 1e-9
        assert states.cluster_error == pytest.approx(abs(reduced / exact - 1.0), abs=1e-9)
    assert counts[0] <= counts[1] <= 24


def test_one_moment_is_one_band() -> None:
    study = plain_study()
    maximum = np.array([rail.max_current_a for rail in study.rails]) * study.coincidence
    table = LoadTable(
        hours=np.array([8760.0]), current_a=maximum[None], off=np.zeros((1, len(maximum)), dtype=bool),
        input_v=np.array([np.nan]), inlet_degc=np.array([30.0]), label=("always",), series=False,
    )  # fmt: skip
    states = reduce_load(with_load(study, table))
    assert states.bands == 1
    assert states.hours.sum() == pytest.approx(8760.0)
