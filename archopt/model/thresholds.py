"""Where a supervisor that sees only the board's input power takes one band for the next."""

from __future__ import annotations

import numpy as np

from archopt.model.parameters import FloatArray
from archopt.model.states import ENERGY, PRINT, StateTable

APART = 1e-6  # a threshold stays this share below what must lie above it


def raise_thresholds_w(states: StateTable, input_w: FloatArray) -> FloatArray:
    """Return the board input power above which each band but the last is left for the next, (B - 1,) W.

    It is the input power at the load that ends the band, before growth and at mean ambient: on the line from the
    highest input power of the band's own states to the lowest of the next band's, at the edge between them. It is
    never above any input power of a higher band, so that every state with hours is told its own band unless a
    lighter one draws more at another input voltage; the bus is then raised early, never late.

    Parameters
    ----------
    input_w : (S,) board input power in every state
    """
    loads, top, bottom = band_powers_w(states, input_w)
    reach = np.minimum.accumulate(bottom[::-1])[::-1]  # the least of this band and all above
    edge = states.edges_w[1:-1]
    share = np.clip((edge - loads[:-1, 1]) / np.maximum(loads[1:, 0] - loads[:-1, 1], 1e-12), 0.0, 1.0)
    at_edge = top[:-1] + share * (bottom[1:] - top[:-1])
    out = np.minimum(at_edge, reach[1:] * (1.0 - APART))
    for k in range(len(out) - 2, -1, -1):
        out[k] = min(out[k], out[k + 1] * (1.0 - APART))
    return np.asarray(out)


def band_powers_w(states: StateTable, input_w: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return highest and lowest input power of the states with hours in each band, (B,) W, and their loads (B, 2).

    Loads: that of the lowest input power, then that of the highest. A band without hours takes the shown loads
    that lie in it; where there are none, what lies on the line through all of them at its edges.
    """
    energy, shown = states.of_kind(ENERGY), states.of_kind(PRINT)
    every = np.concatenate([energy, shown])
    every = every[np.argsort(states.useful_w[every], kind="stable")]
    loads = np.empty((states.bands, 2))
    top, bottom = np.empty(states.bands), np.empty(states.bands)
    for band in range(states.bands):
        here = energy[states.band[energy] == band]
        if not len(here):
            here = shown[states.band[shown] == band]
        if len(here):
            most, least = here[input_w[here].argmax()], here[input_w[here].argmin()]
            loads[band] = states.useful_w[least], states.useful_w[most]
            top[band], bottom[band] = input_w[most], input_w[least]
        else:
            loads[band] = states.edges_w[band : band + 2]
            bottom[band], top[band] = np.interp(loads[band], states.useful_w[every], input_w[every])
    return loads, top, bottom
