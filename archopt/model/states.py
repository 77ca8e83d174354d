"""Operating states: bands of load power, clusters of moments, and the zero-hour states limits are checked in."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from archopt.inputs.resolved import LoadTable, Rail, ResolvedStudy
from archopt.model.clusters import cluster, split_groups
from archopt.model.dwell import moves_a_year, split_held
from archopt.model.energy_states import EnergyStates, Moments, every_moment, means
from archopt.model.parameters import BoolArray, FloatArray, IntArray
from archopt.physics.ampacity import RISE_EXPONENT

ENERGY, MIX, JUMP, FALLBACK, PRINT, HELD = 0, 1, 2, 3, 4, 5
KIND_NAMES = ("energy", "worst mix", "after jump", "rated at nominal", "shown load", "held above its band")
MAX_BANDS = 8
MAX_CLUSTERS = 24
CLUSTER_TOLERANCE = 0.005
SHOWN_SHARES = (0.3, 0.5, 1.0)
FALLBACK_NAME = "fall-back"


@dataclass(frozen=True)
class StateTable:
    """S states of R rails in B bands.

    hours (S,), input_v (S,), ambient_degc (S,) local air, current_a (S, R), off (S, R), band (S,), kind (S,),
    tap_w (S,) loss in taps, useful_w (S,) rail voltage times current with taps, edges_w (B + 1,) load power,
    mix_a (B + 1, R) and after_a (B + 1, R) worst mix and currents after a jump (both grown), rated_a (R,) grown,
    mix_off (B + 1, R), transitions_per_year (B, B), cluster_error : share of the plain design's annual loss.

    The place behind the last band is the fall-back: the rated load with every bus at its nominal voltage and all
    phases and converters running. Limits are checked there as in a band; no hours are spent there. States held by the
    supervisor's dwell have the band of the bus, above that of their load.
    """

    name: tuple[str, ...]
    kind: IntArray
    hours: FloatArray
    input_v: FloatArray
    ambient_degc: FloatArray
    current_a: FloatArray
    off: BoolArray
    band: IntArray
    tap_w: FloatArray
    useful_w: FloatArray
    edges_w: FloatArray
    mix_a: FloatArray
    after_a: FloatArray
    mix_off: BoolArray
    rated_a: FloatArray
    transitions_per_year: FloatArray
    cluster_error: float

    def of_kind(self, kind: int) -> IntArray:
        """Return the indices of the states of one kind, in order."""
        return np.flatnonzero(self.kind == kind)

    @property
    def with_hours(self) -> IntArray:
        """Return the states that stand for hours of the year."""
        return np.flatnonzero((self.kind == ENERGY) | (self.kind == HELD))

    @cached_property
    def warming(self) -> FloatArray:
        """How the rise of copper goes with the current of each rail, (S, R): amperes to the power of IPC-2221."""
        return np.asarray(np.where(self.off, 0.0, self.current_a) ** (1.0 / RISE_EXPONENT))

    @cached_property
    def labels(self) -> NDArray[np.object_]:
        """The names, (S,), to be picked by index."""
        return np.array([*self.name, None], dtype=object)[:-1]

    @property
    def setting_side(self) -> FloatArray:
        """Where in its setting accuracy a regulated bus stands, (S,): 0 as set, -1 lowest, 1 highest.

        Limits are checked at the lowest bus with the lowest input and after a jump, at the highest with the
        highest input; hours are counted as set.
        """
        side = np.zeros(len(self.hours))
        side[self.of_kind(JUMP)] = -1.0
        for kind in (MIX, FALLBACK):
            places = self.of_kind(kind)
            side[places[0::2]], side[places[1::2]] = -1.0, 1.0
        return side

    @property
    def bands(self) -> int:
        """Number of bands."""
        return len(self.edges_w) - 1

    @property
    def places(self) -> int:
        """Number of places limits are checked at: the bands, then the fall-back."""
        return self.bands + 1

    @property
    def place_names(self) -> tuple[str, ...]:
        """Names of the places limits are checked at."""
        return (*(f"band {k + 1}" for k in range(self.bands)), FALLBACK_NAME)

    @cached_property
    def mix_low(self) -> IntArray:
        """States of the worst mix at the lowest input, a place each, (B + 1,)."""
        return np.concatenate([self.of_kind(MIX)[0::2], self.of_kind(FALLBACK)[:1]])

    @cached_property
    def mix_high(self) -> IntArray:
        """States of the worst mix at the highest input, a place each, (B + 1,)."""
        return np.concatenate([self.of_kind(MIX)[1::2], self.of_kind(FALLBACK)[1:]])


def own_rails(study: ResolvedStudy) -> tuple[Rail, ...]:
    """Return the rails with a stage of their own (taps are carried by the rail they tap)."""
    return tuple(rail for rail in study.rails if not rail.tap_of)


def fold_taps(study: ResolvedStudy, current_a: FloatArray, off: BoolArray) -> tuple[FloatArray, FloatArray]:
    """Return currents of the rails with stages, taps added to what they tap, and the loss in taps, W.

    ``current_a`` and ``off`` are (M, all rails); results (M, R) and (M,).
    """
    rails = own_rails(study)
    place = {rail.name: k for k, rail in enumerate(rails)}
    all_place = {rail.name: k for k, rail in enumerate(study.rails)}
    amps = np.where(off, 0.0, current_a)
    out = np.zeros((len(amps), len(rails)))
    tap_w = np.zeros(len(amps))
    for rail in study.rails:
        column = amps[:, all_place[rail.name]]
        if rail.tap_of:
            out[:, place[rail.tap_of]] += column
            tap_w += column**2 * rail.tap_mohm * 1e-3
        else:
            out[:, place[rail.name]] += column
    return out, tap_w


def fold_off(study: ResolvedStudy, off: BoolArray) -> BoolArray:
    """Return which stages are off: a rail is off when it and all its taps are."""
    rails = own_rails(study)
    out = np.ones((len(off), len(rails)), dtype=bool)
    place = {rail.name: k for k, rail in enumerate(rails)}
    for column, rail in enumerate(study.rails):
        out[:, place[rail.tap_of or rail.name]] &= off[:, column]
    return out


def moments_of(study: ResolvedStudy, load: LoadTable) -> Moments:
    """Return the load table folded onto rails with stages."""
    current, tap_w = fold_taps(study, load.current_a, load.off)
    voltage = np.array([rail.voltage_v for rail in study.rails])
    return Moments(
        hours=load.hours,
        current_a=current,
        off=fold_off(study, load.off),
        input_v=load.input_v,
        inlet_degc=load.inlet_degc,
        tap_w=tap_w,
        useful_w=np.where(load.off, 0.0, load.current_a) @ voltage,
        label=load.label,
    )


def coincident_maximum(study: ResolvedStudy) -> tuple[FloatArray, float, float]:
    """Return (R,) currents, tap loss and useful power at the coincident maximum, before growth."""
    amps = np.array([[rail.max_current_a * study.coincidence for rail in study.rails]])
    current, tap_w = fold_taps(study, amps, np.zeros_like(amps, dtype=bool))
    useful = float(amps[0] @ np.array([rail.voltage_v for rail in study.rails]))
    return current[0], float(tap_w[0]), useful


def band_edges(power_w: FloatArray) -> FloatArray:
    """Return the edges of at most eight equal steps of load power that hold at least one moment each.

    Steps without a moment join the next higher one, whose voltage is legal for them.
    """
    low, high = float(power_w.min()), float(power_w.max())
    if high - low <= 1e-9 * max(high, 1e-12):
        return np.array([low, high])
    edges = np.linspace(low, high, MAX_BANDS + 1)
    step = np.clip(np.searchsorted(edges, power_w, side="left") - 1, 0, MAX_BANDS - 1)
    filled = np.unique(step)
    return np.concatenate([[low], edges[filled + 1]])


def band_of(power_w: FloatArray, edges_w: FloatArray) -> IntArray:
    """Return the band each load power lies in; an edge belongs to the band below it."""
    return np.clip(np.searchsorted(edges_w, power_w, side="left") - 1, 0, len(edges_w) - 2).astype(np.int64)


def worst_mix(moments: Moments, band: IntArray, bands: int) -> tuple[FloatArray, BoolArray]:
    """Return (B, R) the highest current each rail has in any moment of a band, and rails off throughout it."""
    mix = np.array([np.where(moments.off, 0.0, moments.current_a)[band == k].max(axis=0) for k in range(bands)])
    off = np.array([moments.off[band == k].all(axis=0) for k in range(bands)])
    return mix, off


def with_maximum(study: ResolvedStudy, moments: Moments) -> Moments:
    """Return the moments with the coincident maximum added for no hours: it is always present."""
    current, tap_w, useful = coincident_maximum(study)
    return Moments(
        hours=np.append(moments.hours, 0.0),
        current_a=np.vstack([moments.current_a, current]),
        off=np.vstack([moments.off, np.zeros((1, len(current)), dtype=bool)]),
        input_v=np.append(moments.input_v, np.nan),
        inlet_degc=np.append(moments.inlet_degc, study.supply.hottest_inlet_degc),
        tap_w=np.append(moments.tap_w, tap_w),
        useful_w=np.append(moments.useful_w, useful),
        label=(*moments.label, "coincident maximum"),
    )


def reduce_load(study: ResolvedStudy, annual_loss: Callable[[EnergyStates], float] | None = None) -> StateTable:
    """Reduce the study's load to representative states and add the zero-hour ones.

    ``annual_loss`` returns the loss of a plain design over given states, kWh; clusters are added until it is
    within 0.5 % of the whole series. Without it the largest number of clusters is taken.
    """
    moments = with_maximum(study, moments_of(study, study.load))
    edges = band_edges(moments.useful_w)
    band = band_of(moments.useful_w, edges)
    feature = moments.current_a * np.array([rail.voltage_v for rail in own_rails(study)])
    with_hours = np.flatnonzero(moments.hours > 0)
    groups = [with_hours[g] for g in split_groups(band[with_hours], moments.off[with_hours])]
    error = 0.0
    if len(with_hours) <= MAX_CLUSTERS:
        clusters = [np.array([k]) for k in with_hours]
    elif annual_loss is None:
        clusters = cluster(groups, moments.hours, feature, MAX_CLUSTERS)
    else:
        exact = annual_loss(every_moment(study, moments, band, with_hours))
        for count in (8, 12, 16, 20, MAX_CLUSTERS):
            clusters = cluster(groups, moments.hours, feature, count)
            error = abs(annual_loss(means(study, moments, band, clusters)) - exact) / max(exact, 1e-12)
            if error <= CLUSTER_TOLERANCE:
                break
    energy = means(study, moments, band, clusters)
    return assemble(study, moments, band, edges, energy, error)


def jump_currents(study: ResolvedStudy, mix_a: FloatArray, rated_a: FloatArray) -> FloatArray:
    """Return (B, R) currents after the largest unannounced jump from each band."""
    jumped = mix_a + study.control.jump_percent / 100.0 * rated_a
    return np.minimum(jumped, np.maximum(rated_a, mix_a))


def listed_after(
    study: ResolvedStudy, moments: Moments, band: IntArray, mix_a: FloatArray, rated_a: FloatArray
) -> FloatArray:
    """Return (B, R) the highest currents after any unannounced listed jump that begins in each band.

    A band that none begins in is never left at once. Rails that were off wake up in the state jumped to.
    """
    place = {label: k for k, label in enumerate(moments.label)}
    after = mix_a.copy()
    amps = np.where(moments.off, 0.0, moments.current_a) * study.growth
    for jump in study.control.jumps:
        if not jump.announced:
            start = int(band[place[jump.before]])
            after[start] = np.maximum(after[start], amps[place[jump.after]])
    return np.minimum(after, np.maximum(rated_a, mix_a))


def assemble(
    study: ResolvedStudy,
    moments: Moments,
    band: IntArray,
    edges: FloatArray,
    energy: EnergyStates,
    error: float,
) -> StateTable:
    """Return the energy states followed by the zero-hour states."""
    bands = len(edges) - 1
    moves, held_h = moves_a_year(study, study.load, band, bands)
    energy, held = split_held(energy, held_h)
    spent = energy if held is None else energy.joined(held)
    kind = np.full(len(spent.name), ENERGY)
    kind[len(energy.name) :] = HELD
    energy = spent
    supply = study.supply
    grown = study.growth
    mix, mix_off = worst_mix(moments, band, bands)
    mix = mix * grown
    maximum, maximum_tap_w, _ = coincident_maximum(study)
    rated = maximum * grown
    after = listed_after(study, moments, band, mix, rated) if study.control.jumps else jump_currents(study, mix, rated)
    voltage = np.array([rail.voltage_v for rail in own_rails(study)])
    inlet_hot = supply.hottest_inlet_degc
    mean_inlet = supply.inlet_degc
    nothing_off = np.zeros(len(rated), dtype=bool)
    extra: list[tuple[str, int, float, float, FloatArray, BoolArray, int]] = []
    for k in range(bands):
        for label, volts in (("low", supply.low_v), ("high", supply.high_v)):
            name = f"band {k + 1} worst mix, {label} input"
            extra.append((name, MIX, volts, inlet_hot, mix[k], mix_off[k], k))
    for k in range(bands):
        name = f"band {k + 1} after jump, low input"
        extra.append((name, JUMP, supply.low_v, inlet_hot, after[k], mix_off[k] & (after[k] <= 0), k))
    extra.append(("fall-back after step, low input", JUMP, supply.low_v, inlet_hot, rated, nothing_off, bands))
    for label, volts in (("low", supply.low_v), ("high", supply.high_v)):
        name = f"fall-back: rated load at nominal bus, {label} input"
        extra.append((name, FALLBACK, volts, inlet_hot, rated, nothing_off, bands))
    shown_band = band_of(np.array([share * float(maximum @ voltage) for share in SHOWN_SHARES]), edges)
    for share, where in zip(SHOWN_SHARES, shown_band, strict=True):
        name = f"{share:.0%} load".replace("%", " %")
        extra.append((name, PRINT, supply.nominal_v, mean_inlet, maximum * share, nothing_off, int(where)))
    count = len(extra)
    extra_tap = np.zeros(count)
    extra_tap[-5:] = maximum_tap_w * np.array([grown, grown, *SHOWN_SHARES]) ** 2
    extra_current = np.array([row[4] for row in extra])
    return StateTable(
        name=(*energy.name, *(row[0] for row in extra)),
        kind=np.concatenate([kind, np.array([row[1] for row in extra])]),
        hours=np.concatenate([energy.hours, np.zeros(count)]),
        input_v=np.concatenate([energy.input_v, np.array([row[2] for row in extra])]),
        ambient_degc=np.concatenate([energy.inlet_degc, np.array([row[3] for row in extra])]) + supply.local_rise_k,
        current_a=np.vstack([energy.current_a, extra_current]),
        off=np.vstack([energy.off, np.array([row[5] for row in extra])]),
        band=np.concatenate([energy.band, np.array([row[6] for row in extra], dtype=np.int64)]),
        tap_w=np.concatenate([energy.tap_w, extra_tap]),
        useful_w=np.concatenate([energy.useful_w, extra_current @ voltage]),
        edges_w=edges,
        mix_a=np.vstack([mix, rated]),
        after_a=np.vstack([after, rated]),
        mix_off=np.vstack([mix_off, nothing_off]),
        rated_a=rated,
        transitions_per_year=moves,
        cluster_error=error,
    )
