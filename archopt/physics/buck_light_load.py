"""What a buck stage does at light load: pulses of diode emulation, folded in frequency, and the loop behind them.

With emulation the low side stops when the inductor current reaches zero, at and below half the ripple. The
on-time stays that of continuous conduction, so every pulse brings the same charge and pulses come as often as
the load wants them, in proportion to it; from the lowest frequency on they come no less often and grow smaller.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from archopt.physics.arrays import BoolArray, FloatArray, FloatLike

TINY = 1e-30


class Pulses(NamedTuple):
    """Pulses of the inductor current; shares are 1 where the current never stops.

    load_share is the load over the one at which the valley touches zero, at most 1; frequency_share the pulses
    a second over the stage's frequency; swing_share the height of a pulse over the ripple of continuous
    conduction; conducting_share the part of the time with current.
    """

    stopped: BoolArray
    load_share: FloatArray
    frequency_share: FloatArray
    swing_share: FloatArray

    @property
    def conducting_share(self) -> FloatArray:
        """Part of the time with current: a pulse lasts as long as it is high."""
        return self.frequency_share * self.swing_share


def pulses(
    emulation: FloatLike, fold_floor_hz: FloatLike, frequency_hz: FloatLike, current_a: FloatLike, ripple_a: FloatLike
) -> Pulses:
    """Pulses of a stage at a load, continuous through the load at which the valley touches zero.

    Parameters
    ----------
    emulation : 1 where the low side stops at zero current, 0 in forced conduction
    fold_floor_hz : lowest frequency pulses fold to (Hz); frequency_hz or more where they do not fold
    frequency_hz : the stage's frequency (Hz)
    current_a : load of one phase (A), not negative
    ripple_a : ripple in continuous conduction (A), peak to peak; all broadcast

    Notes
    -----
    A pulse of height p on the slopes of continuous conduction lasts p / (ripple f) and brings half p of it in
    charge, so the load is p^2 f_pulse / (2 ripple f). With x the load over half the ripple: f_pulse / f is the
    larger of x and the floor, and p = ripple sqrt(x f / f_pulse). Closed form.
    """
    boundary_a = np.maximum(0.5 * np.asarray(ripple_a, dtype=np.float64), TINY)
    load_share = np.clip(np.asarray(current_a) / boundary_a, 0.0, 1.0)
    load_share = np.where(np.asarray(emulation) > 0.5, load_share, 1.0)
    frequency_share = np.maximum(load_share, np.clip(np.asarray(fold_floor_hz) / frequency_hz, 0.0, 1.0))
    swing_share = np.sqrt(load_share / np.maximum(frequency_share, TINY))
    return Pulses(load_share < 1.0, load_share, frequency_share, swing_share)


def crossover_share(folded_share: FloatLike, load_share: FloatLike) -> FloatArray:
    """Loop bandwidth left at light load, as a share of that in continuous conduction.

    Falls in a straight line from 1 where the valley touches zero to ``folded_share`` without load: a loop sees
    the load only as often as there are pulses (common practice; the line is our own simplification).

    Parameters
    ----------
    folded_share : share left without load (0 to 1)
    load_share : load over the one at which the valley touches zero (0 to 1); both broadcast
    """
    folded = np.asarray(folded_share, dtype=np.float64)
    share: FloatArray = folded + (1.0 - folded) * np.clip(load_share, 0.0, 1.0)
    return share
