"""Voltage deviation of a rail or bus when its load changes suddenly.

The controller is averaged: for a dead time after the load begins to change its current stands still, then it
follows the load at the rate min(slew, w (load - current)), w = 2 pi crossover. The output capacitor is C with
ESR. For this controller the results are exact (piecewise closed form), for step and for ramped loads.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from archopt.physics.arrays import FloatArray, FloatLike
from archopt.physics.bus_network import network_rates

#: Bounds that keep every quotient finite: slews in A/s, capacitance in F, bandwidth in rad/s.
LEAST_SLEW = 1e-3
LARGEST_SLEW = 1e15
LEAST_CAPACITANCE_F = 1e-12
LEAST_BANDWIDTH = 1e-3
#: Voltage (V) across the inductance that is counted at least when the input is too low to raise the current.
LEAST_HEADROOM_V = 1e-3
LEAST_INDUCTANCE_H = 1e-12
LEAST_DEFICIT_A = 1e-12
#: Bounds of a source and the banks behind it: ohm, H and F that keep its modes apart.
LEAST_SOURCE_OHM = 1e-5
LEAST_SOURCE_H = 1e-10
LEAST_BANK_F = 1e-8
CREST_SAMPLES = 120
#: Largest dip of a bus that is reported, as a share of its voltage.
LARGEST_DIP = 0.9


class _Loop(NamedTuple):
    """Controller and capacitor with their bounds applied."""

    slew: FloatArray
    bandwidth: FloatArray
    delay: FloatArray
    capacitance: FloatArray
    esr: FloatArray

    def deviation(self, missing_a: FloatArray, charge_c: FloatArray) -> FloatArray:
        """Deviation (V) when a current (A) is missing and a charge (C) has been taken."""
        return self.esr * missing_a + charge_c / self.capacitance


def _loop(
    slew_a_per_s: FloatLike,
    bandwidth_rad_s: FloatLike,
    delay_s: FloatLike,
    capacitance_f: FloatLike,
    esr_ohm: FloatLike,
) -> _Loop:
    return _Loop(
        np.clip(slew_a_per_s, LEAST_SLEW, LARGEST_SLEW),
        np.maximum(bandwidth_rad_s, LEAST_BANDWIDTH),
        np.maximum(delay_s, 0.0),
        np.maximum(capacitance_f, LEAST_CAPACITANCE_F),
        np.asarray(esr_ohm, dtype=np.float64),
    )


def _recovery(loop: _Loop, missing_a: FloatArray, charge_c: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Largest deviation (V) from here on at a steady load, and the charge (C) taken in the end.

    First the current rises at the slew until what is missing is down to slew/w, then exponentially. On the
    slewed part the deviation peaks where the missing current is ESR C slew, if that lies on it.
    """
    knee_a = np.minimum(missing_a, loop.slew / loop.bandwidth)
    half_per_slew = 0.5 / loop.slew
    square = missing_a * missing_a
    crest_a = np.clip(loop.esr * loop.capacitance * loop.slew, knee_a, missing_a)
    at_crest = loop.deviation(crest_a, charge_c + (square - crest_a * crest_a) * half_per_slew)
    at_knee_c = charge_c + (square - knee_a * knee_a) * half_per_slew
    end_c = at_knee_c + knee_a / loop.bandwidth
    largest = np.maximum(at_crest, np.maximum(loop.deviation(knee_a, at_knee_c), end_c / loop.capacitance))
    return largest, end_c


def step_droop_v(
    step_a: FloatLike,
    slew_a_per_s: FloatLike,
    bandwidth_rad_s: FloatLike,
    delay_s: FloatLike,
    capacitance_f: FloatLike,
    esr_ohm: FloatLike,
) -> FloatArray:
    """Deviation (V) after a load step of infinite slew.

    Parameters
    ----------
    step_a : size of the step (A), not negative
    slew_a_per_s : fastest rise of the converter's current (A/s); may be infinite
    bandwidth_rad_s : 2 pi times the crossover frequency (rad/s)
    delay_s : dead time before the current moves (s)
    capacitance_f, esr_ohm : output capacitor; all broadcast

    Notes
    -----
    The largest of ESR dI + dI td / C at the end of the dead time, the crest of the slewed rise, its end, and
    (q + e0/w)/C at the end. Closed form, exact for the controller described above.
    """
    loop = _loop(slew_a_per_s, bandwidth_rad_s, delay_s, capacitance_f, esr_ohm)
    missing_a = np.maximum(step_a, 0.0)
    return _recovery(loop, missing_a, missing_a * loop.delay)[0]


def _ramp(
    loop: _Loop, step_a: FloatArray, load_slew: FloatArray
) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    """Missing current, its peak (A), charge (C) and largest deviation (V) when ramp and dead time are over.

    While the load ramps at Sl the missing current e obeys de/dt = Sl - min(S, w e): a stretch at the slew
    while e > S/w, an exponential towards Sl/w while e < S/w. With Sl <= S it can only pass from the first to
    the second, with Sl > S only from the second to the first; slewed, exponential, slewed covers both.
    On a slewed stretch that falls the deviation has its crest where e = ESR C (S - Sl); elsewhere it is
    largest at the end of a stretch.
    """
    slew, w = loop.slew, loop.bandwidth
    knee_a, settled_a = slew / w, load_slew / w
    missing = np.minimum(load_slew * loop.delay, step_a)
    peak = missing
    charge = missing * loop.delay - missing * missing / (2.0 * load_slew)
    largest = loop.deviation(missing, charge)
    left_s = np.maximum(step_a / load_slew - loop.delay, 0.0)
    slow = load_slew <= slew

    fall = np.maximum(slew - load_slew, LEAST_SLEW)
    first_s = np.where(slow, np.clip((missing - knee_a) / fall, 0.0, left_s), 0.0)
    after = missing - fall * first_s
    crest = np.clip(loop.esr * loop.capacitance * fall, np.minimum(after, missing), missing)
    at_crest = loop.deviation(crest, charge + (missing * missing - crest * crest) / (2.0 * fall))
    largest = np.maximum(largest, np.where(first_s > 0.0, at_crest, 0.0))
    charge = charge + 0.5 * (missing + after) * first_s
    missing = after
    largest = np.maximum(largest, loop.deviation(missing, charge))

    left_s = left_s - first_s
    gap = np.maximum(load_slew - slew, LEAST_SLEW) / w
    reach_s = np.log1p(np.maximum(knee_a - missing, 0.0) / gap) / w
    second_s = np.where(slow, left_s, np.minimum(reach_s, left_s))
    gone = -np.expm1(-w * second_s)
    charge = charge + settled_a * second_s + (missing - settled_a) * gone / w
    missing = missing + (settled_a - missing) * gone
    largest = np.maximum(largest, loop.deviation(missing, charge))

    third_s = left_s - second_s
    grown = missing + np.maximum(load_slew - slew, 0.0) * third_s
    charge = charge + 0.5 * (missing + grown) * third_s
    largest = np.maximum(largest, loop.deviation(grown, charge))
    return grown, np.maximum(peak, grown), charge, largest


def _waiting(
    loop: _Loop,
    step_a: FloatArray,
    load_slew: FloatArray,
    peak_a: FloatArray,
    end_c: FloatArray,
    deficit_a: FloatArray,
    wakeup_s: FloatArray,
) -> FloatArray:
    """Upper bound of the deviation (V) when the current has to wait at the limit of the phases, else 0.

    The current cannot be at the limit before a step of the whole size would have brought it there, nor
    before the load is; if the added phases are awake by then nothing changes. From there on the rest of the
    wait takes the deficit. The charge taken before is at most that of the whole rise less that of its last
    part, of the size of the deficit; all of it where the current follows so closely that less is missing.
    """
    knee_a = np.minimum(step_a, loop.slew / loop.bandwidth)
    slewed_s = np.maximum(step_a - np.maximum(knee_a, deficit_a), 0.0) / loop.slew
    settling_s = np.log(np.maximum(knee_a / np.maximum(deficit_a, LEAST_DEFICIT_A), 1.0)) / loop.bandwidth
    early_s = np.maximum(loop.delay + slewed_s + settling_s, (step_a - deficit_a) / load_slew)
    early_s = np.where(deficit_a < step_a, early_s, 0.0)
    last_part, last_c = _recovery(loop, deficit_a, np.zeros_like(deficit_a))
    before_c = np.where(deficit_a < peak_a, np.maximum(end_c - last_c, 0.0), end_c)
    waited_c = before_c + deficit_a * (wakeup_s - early_s)
    waits = (deficit_a > 0.0) & (wakeup_s > early_s)
    return np.where(waits, last_part + waited_c / loop.capacitance, 0.0)


def rail_droop_v(
    step_a: FloatLike,
    slew_a_per_s: FloatLike,
    bandwidth_rad_s: FloatLike,
    delay_s: FloatLike,
    capacitance_f: FloatLike,
    esr_ohm: FloatLike,
    load_slew_a_per_s: FloatLike,
    deficit_a: FloatLike = 0.0,
    wakeup_s: FloatLike = 0.0,
) -> FloatArray:
    """Deviation (V) of a rail when its load rises by a step at a given slew.

    Parameters
    ----------
    step_a, slew_a_per_s, bandwidth_rad_s, delay_s, capacitance_f, esr_ohm : as for :func:`step_droop_v`
    load_slew_a_per_s : rate at which the load rises (A/s); may be infinite
    deficit_a : load after the step beyond what the running phases can carry (A); 0 where they can
    wakeup_s : delay from the step until added phases carry current (s); all broadcast

    Notes
    -----
    Exact without a deficit. With one, the current waits at the limit of the running phases until the wake-up
    is over; what follows is a step of the size of the deficit, on top of the charge taken before and during
    the wait. That is exact after a step and an upper bound after a ramp.
    """
    loop = _loop(slew_a_per_s, bandwidth_rad_s, delay_s, capacitance_f, esr_ohm)
    step = np.maximum(step_a, 0.0)
    load_slew = np.clip(load_slew_a_per_s, LEAST_SLEW, LARGEST_SLEW)
    missing, peak, charge, on_ramp = _ramp(loop, step, load_slew)
    after_ramp, end_c = _recovery(loop, missing, charge)
    largest = np.maximum(on_ramp, after_ramp)
    deficit = np.maximum(deficit_a, 0.0)
    if not np.any(deficit):
        return largest
    waited = _waiting(loop, step, load_slew, peak, end_c, deficit, np.asarray(wakeup_s, dtype=np.float64))
    return np.maximum(largest, waited)


def buck_slew_a_per_s(
    phases: FloatLike, max_duty: FloatLike, input_v: FloatLike, output_v: FloatLike, inductance_h: FloatLike
) -> FloatArray:
    """Fastest rise (A/s) of the summed current of running phases: phases (Dmax Vin - Vo) / L.

    Never below that of 1 mV across the inductance: a stage without headroom droops a lot but finitely.

    Parameters
    ----------
    phases : running phases
    max_duty : largest duty (1)
    input_v, output_v : stage input at its dip and output voltage (V)
    inductance_h : inductance of one phase (H); all broadcast
    """
    headroom_v = np.maximum(np.asarray(max_duty) * input_v - output_v, LEAST_HEADROOM_V)
    slew: FloatArray = phases * headroom_v / np.maximum(inductance_h, LEAST_INDUCTANCE_H)
    return slew


def release_v(
    step_a: FloatLike,
    phases: FloatLike,
    output_v: FloatLike,
    inductance_h: FloatLike,
    bandwidth_rad_s: FloatLike,
    delay_s: FloatLike,
    capacitance_f: FloatLike,
    esr_ohm: FloatLike,
    load_slew_a_per_s: FloatLike,
) -> FloatArray:
    """Overshoot (V) of a rail when its load falls by a step: the current can fall at phases Vo / L at most.

    The same deviation as :func:`rail_droop_v` with the sign turned; it does not depend on the bus.

    Parameters
    ----------
    step_a : size of the release (A), not negative
    phases : running phases
    output_v : rail voltage (V)
    inductance_h : inductance of one phase (H)
    bandwidth_rad_s, delay_s, capacitance_f, esr_ohm, load_slew_a_per_s : as for :func:`rail_droop_v`
    """
    slew = phases * np.asarray(output_v) / np.maximum(inductance_h, LEAST_INDUCTANCE_H)
    return rail_droop_v(step_a, slew, bandwidth_rad_s, delay_s, capacitance_f, esr_ohm, load_slew_a_per_s)


def source_peak_ohm(
    source_ohm: FloatLike, source_h: FloatLike, bulk_f: FloatLike, bulk_esr_ohm: FloatLike, input_f: FloatLike,
    damper_f: FloatLike = 0.0, damper_ohm: FloatLike = 0.0,
) -> FloatArray:  # fmt: skip
    """Largest deviation (V) for each ampere of a step drawn from a bus behind a voltage, R and L.

    Parameters
    ----------
    source_ohm, source_h : series resistance (ohm) and inductance (H) of the source
    bulk_f, bulk_esr_ohm : bulk bank (F, ohm)
    input_f : capacitance without resistance beside it (F)
    damper_f, damper_ohm : a damping bank beside them, 0 F where there is none; all broadcast

    Notes
    -----
    The modes of the circuit, three or with a damping bank four, read at times a tenth apart from the start to the
    second half period: the crest is missed by less than 0.3 %. It ends at R.
    """
    ohm, henry, bulk, esr, beside, damper, lossy = np.broadcast_arrays(
        np.maximum(source_ohm, LEAST_SOURCE_OHM), np.maximum(source_h, LEAST_SOURCE_H),
        np.maximum(bulk_f, LEAST_BANK_F), np.maximum(bulk_esr_ohm, LEAST_SOURCE_OHM),
        np.maximum(input_f, LEAST_BANK_F), np.asarray(damper_f), np.maximum(damper_ohm, LEAST_SOURCE_OHM),
    )  # fmt: skip
    found = damper > 0.0
    if not found.any():
        return _undamped_crest_ohm(ohm, henry, bulk, esr, beside)
    out = np.empty(ohm.shape)
    out[~found] = _undamped_crest_ohm(*(values[~found] for values in (ohm, henry, bulk, esr, beside)))
    ohm, henry, bulk, esr, beside, damper, lossy = (
        values[found] for values in (ohm, henry, bulk, esr, beside, damper, lossy)
    )
    rates = network_rates(ohm, henry, bulk, esr, beside, np.maximum(damper, LEAST_BANK_F), lossy)
    settled = np.stack([np.ones_like(ohm), ohm, ohm, ohm], axis=-1)
    slowest_s = 2.0 * np.pi * np.sqrt(henry * (bulk + beside + damper))
    joined = 1.0 / (1.0 / esr + 1.0 / lossy)
    out[found] = _crest_ohm(rates, settled, ohm, slowest_s, np.minimum(0.1 * joined * beside, 0.01 * slowest_s))
    return out


def _undamped_crest_ohm(
    ohm: FloatArray, henry: FloatArray, bulk: FloatArray, esr: FloatArray, beside: FloatArray
) -> FloatArray:
    """Largest deviation (V) for each ampere of a step without a damping bank, any shape."""
    rates = np.zeros((*ohm.shape, 3, 3))  # of source current, bulk voltage, bus voltage
    rates[..., 0, 0], rates[..., 0, 2] = -ohm / henry, 1.0 / henry
    rates[..., 1, 1], rates[..., 1, 2] = -1.0 / (esr * bulk), 1.0 / (esr * bulk)
    rates[..., 2, 0] = -1.0 / beside
    rates[..., 2, 1], rates[..., 2, 2] = 1.0 / (esr * beside), -1.0 / (esr * beside)
    settled = np.stack([np.ones_like(ohm), ohm, ohm], axis=-1)
    slowest_s = 2.0 * np.pi * np.sqrt(henry * (bulk + beside))
    return _crest_ohm(rates, settled, ohm, slowest_s, np.minimum(0.1 * esr * beside, 0.01 * slowest_s))


def _crest_ohm(
    rates: FloatArray, settled: FloatArray, ohm: FloatArray, slowest_s: FloatArray, fastest_s: FloatArray
) -> FloatArray:
    """Largest deviation (V) of the bus, the last state, for each ampere of a step, from rest to the settled state."""
    pole, mode = np.linalg.eig(rates)
    share = np.linalg.solve(mode, -settled[..., None].astype(complex))[..., 0] * mode[..., -1, :]
    at_s = fastest_s[..., None] * (slowest_s / fastest_s)[..., None] ** np.linspace(0.0, 1.0, CREST_SAMPLES)
    deviation = ohm[..., None] + np.einsum("...k,...kt->...t", share, np.exp(pole[..., None] * at_s[..., None, :])).real
    peak: FloatArray = np.maximum(ohm, deviation.max(axis=-1))
    return peak


def bus_dip_v(
    step_w: FloatLike,
    bus_v: FloatLike,
    bandwidth_rad_s: FloatLike,
    delay_s: FloatLike,
    capacitance_f: FloatLike,
    esr_ohm: FloatLike,
    standing_w: FloatLike = 0.0,
    source_peak: FloatLike = 0.0,
) -> FloatArray:
    """Dip (V) of a bus at a step of constant power behind it, its converter following without a slew limit.

    Where the step is too large to be carried at any voltage (the bus collapses) the dip goes on growing with
    the step, to at most 0.9 of the bus voltage, so that the violation has a size.

    Parameters
    ----------
    step_w : rise of power drawn from the bus (W), not negative
    bus_v : bus voltage before the step (V), above 0
    bandwidth_rad_s, delay_s : of the bus converter, as for :func:`step_droop_v`
    capacitance_f, esr_ohm : of everything that holds the bus up
    standing_w : constant power drawn before the step (W); it too draws more current as the bus dips, which
        may double the dip of a small step
    source_peak : for a source that is a voltage behind an impedance (fixed ratio, with infinite bandwidth
        and no dead time), :func:`source_peak_ohm`; all broadcast

    Notes
    -----
    An unlimited slew makes the deviation of a current step proportional to it, dip = Z dI with
    Z = max(ESR + td/C, (td + 1/w)/C). At the dipped voltage dI = (P0 + dP)/(V - dip) - P0/V; the smaller root
    of dip^2 - dip (V - Z P0/V) + Z dP = 0 is where iterating the two would end. Closed form; an upper bound,
    as the current grows during the dip.
    """
    capacitance = np.maximum(capacitance_f, LEAST_CAPACITANCE_F)
    delay = np.maximum(delay_s, 0.0)
    followed_s = delay + 1.0 / np.maximum(bandwidth_rad_s, LEAST_BANDWIDTH)
    impedance_ohm = np.maximum(np.maximum(esr_ohm + delay / capacitance, followed_s / capacitance), source_peak)
    voltage = np.maximum(bus_v, LEAST_HEADROOM_V)
    per_watt = impedance_ohm / (voltage * voltage)
    left = np.maximum(1.0 - per_watt * np.maximum(standing_w, 0.0), 0.0)
    missing = 4.0 * per_watt * np.maximum(step_w, 0.0) - left * left
    share = 0.5 * (left - np.sqrt(np.maximum(-missing, 0.0))) + 2.0 * np.maximum(missing, 0.0)
    dip: FloatArray = voltage * np.minimum(share, LARGEST_DIP)
    return dip


def transition_energy_j(capacitance_f: FloatLike, from_v: FloatLike, to_v: FloatLike) -> FloatArray:
    """Energy (J) stored or given up when a bus capacitance (F) moves between two voltages (V).

    C |V2^2 - V1^2| / 2. Arguments broadcast.
    """
    energy: FloatArray = 0.5 * np.asarray(capacitance_f) * np.abs(np.square(to_v) - np.square(from_v))
    return energy
