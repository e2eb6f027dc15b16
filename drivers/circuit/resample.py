"""Rate conversion by a whole factor around the circuit: linear phase, delay compensated, edges held.

One low-pass serves both ways: flat to 0.4 of the sample rate, closed from 0.6 of it on, half amplitude at one half.

References
----------
J. F. Kaiser, "Nonrecursive digital filter design using the I0-sinh window function", Proc. IEEE ISCAS, 1974.
"""

from __future__ import annotations

import math
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from drivers.circuit.kernels import load_filters

FloatArray = NDArray[np.float64]

FACTORS = (1, 2, 4, 8)
_ATTENUATION_DB = 90.0
_TRANSITION_RATIO = 0.2  # from 0.4 to 0.6 of the sample rate


@lru_cache(maxsize=8)
def half_length(factor: int) -> int:
    """Return how many fine samples the low-pass reaches to each side."""
    if factor == 1:
        return 0
    order = (_ATTENUATION_DB - 7.95) / (2.285 * 2.0 * math.pi * _TRANSITION_RATIO / factor)
    return factor * math.ceil(order / 2.0 / factor)


@lru_cache(maxsize=8)
def low_pass(factor: int) -> FloatArray:
    """Return the taps, shape (2 half_length + 1,), of unit gain at 0 Hz."""
    reach = half_length(factor)
    n = np.arange(-reach, reach + 1)
    beta = 0.1102 * (_ATTENUATION_DB - 8.7)
    taps = np.sinc(n / factor) * np.kaiser(n.size, beta)
    taps /= taps.sum()
    return taps


def interpolate(samples: FloatArray, factor: int) -> FloatArray:
    """Raise the rate of shape (frames, channels) to (frames * factor, channels); fine sample k factor is frame k.

    Before the first and after the last frame their values are held. Channels that do not change cost nothing.
    """
    frames, channels = samples.shape
    if factor == 1:
        return np.ascontiguousarray(samples)
    out = np.empty((frames * factor, channels))
    reach = half_length(factor) // factor
    for channel in range(channels):
        column = samples[:, channel]
        if np.all(column == column[0]):
            out[:, channel] = column[0]
            continue
        padded = np.concatenate([np.full(reach, column[0]), column, np.full(reach, column[-1])])
        load_filters().interpolate(padded, _phases(factor), out[:, channel])
    return out


@lru_cache(maxsize=8)
def _phases(factor: int) -> FloatArray:
    """Return shape (factor, taps of a phase): row p makes the fine sample p after a frame; each row sums to 1."""
    taps = low_pass(factor)
    reach = half_length(factor)
    across = reach // factor
    phases = np.zeros((factor, 2 * across + 1))
    for phase in range(factor):
        for t in range(2 * across + 1):
            # frame t - across lies (t - across) * factor - phase fine samples after the wanted one
            at = reach + phase - (t - across) * factor
            if 0 <= at < taps.size:
                phases[phase, t] = taps[at]
    phases /= phases.sum(axis=1, keepdims=True)
    return phases


def decimate(fine: FloatArray, factor: int) -> FloatArray:
    """Lower the rate: shape (samples, channels) to (frames, channels), `samples` = frames * factor + 2 half_length.

    The first `half_length` samples lie before frame 0 and the last ones after the end.
    """
    if factor == 1:
        return fine
    frames = (fine.shape[0] - 2 * half_length(factor)) // factor
    out = np.empty((fine.shape[1], frames))
    load_filters().decimate(np.ascontiguousarray(fine.T), low_pass(factor), factor, out)
    return np.ascontiguousarray(out.T)
