"""Lines to bands, and how a band excites its neighbours in the ear; frame after frame.

Arrays are ``(frames, bands)`` or ``(frames, lines)`` of powers. A frame knows nothing of the
others except through `smear`, whose state goes in and comes out.
"""

import math
from typing import NamedTuple

import numpy as np

from tonesim.kernel.jit import kernel

ADDITION_EXPONENT = 0.4  # powers spread from several bands add up raised to this
LEAST_POWER = 1e-12  # -120 dB; a logarithm needs something
NEGLIGIBLE = 40.0  # p |g| where a roex filter lets 41 exp(-40) through, -157 dB


@kernel
def group_lines(power, first, start, weight, out):
    """Sum weighted lines: band i takes lines from first[i] with weight[start[i]:start[i + 1]]."""
    for n in range(power.shape[0]):
        for i in range(first.shape[0]):
            total = 0.0
            for k in range(start[i], start[i + 1]):
                total += weight[k] * power[n, first[i] + k - start[i]]
            out[n, i] = total


@kernel
def spread_bands(power, constant_slope, level_slope, lower_slope, step, out):
    """Spread each band over its neighbours, keeping its power, and add with exponent 0.4.

    Slopes are in decibels per unit of the band scale, `step` is the distance of two bands:
    `lower_slope` below a band, ``constant_slope[l] + level_slope L`` above it, L its level in
    decibels, never rising. Powers must be above 0.
    """
    bands = power.shape[1]
    down = 10.0 ** (-0.1 * step * lower_slope)
    raised_down = down**ADDITION_EXPONENT
    raised = np.empty(bands)
    for n in range(power.shape[0]):
        for i in range(bands):
            out[n, i] = 0.0
        below = 0.0  # sum of down^k over the bands below this one
        for i in range(bands):
            slope = min(constant_slope[i] + level_slope * 10.0 * math.log10(power[n, i]), 0.0)
            up = 10.0 ** (0.1 * step * slope)
            total, share = 1.0 + below, 1.0
            for _ in range(i + 1, bands):
                share *= up
                total += share
            below = down * (1.0 + below)
            raised[i] = (power[n, i] / total) ** ADDITION_EXPONENT
            raised_up, share = up**ADDITION_EXPONENT, raised[i]
            for j in range(i + 1, bands):
                share *= raised_up
                out[n, j] += share
        below = 0.0
        for i in range(bands - 1, -1, -1):
            below = raised[i] + raised_down * below
            out[n, i] = (out[n, i] + below) ** (1.0 / ADDITION_EXPONENT)


@kernel
def smear(power, decay, state, out):
    """Smear over time: state = decay state + (1 - decay) power, out = max(state, power)."""
    for n in range(power.shape[0]):
        for i in range(decay.shape[0]):
            state[i] = decay[i] * state[i] + (1.0 - decay[i]) * power[n, i]
            out[n, i] = max(state[i], power[n, i])


class RoexShape(NamedTuple):
    """How the lower skirt of a roex filter depends on level: p = p51 q(level).

    q = 1 - slope (level - normal_level_db), kept between `least` and `most`.
    """

    slope: float  # per decibel
    normal_level_db: float
    least: float
    most: float
    neighbours: int  # bands to either side that count for the level at a component
    bands_per_erb: float


@kernel
def excite(first, second, shape, distance, upper, out_first, out_second):
    """Pass two patterns through the same roex filters, shaped by the level of their sum.

    A filter weighs a component by (1 + x) exp(-x) with x = p |g|, g its distance from the centre
    over the centre. Components j above a centre i meet the fixed weights ``upper[i, j]``; below
    it x is ``distance[j, i] q``, q that of the level in one equivalent rectangular bandwidth
    around j.
    """
    bands = first.shape[1]
    for n in range(first.shape[0]):
        for i in range(bands):
            one, two = 0.0, 0.0
            for j in range(i, bands):
                one += upper[i, j] * first[n, j]
                two += upper[i, j] * second[n, j]
            out_first[n, i] = one
            out_second[n, i] = two
        for j in range(bands):
            low, high = max(0, j - shape.neighbours), min(bands, j + shape.neighbours + 1)
            total = 0.0
            for k in range(low, high):
                total += first[n, k] + second[n, k]
            total *= shape.bands_per_erb / (high - low)
            level = 10.0 * math.log10(max(total, LEAST_POWER))
            q = 1.0 - shape.slope * (level - shape.normal_level_db)
            q = min(max(q, shape.least), shape.most)
            for i in range(j + 1, bands):
                x = distance[j, i] * q
                if x > NEGLIGIBLE:
                    break  # distance grows with i
                weight = (1.0 + x) * math.exp(-x)
                out_first[n, i] += weight * first[n, j]
                out_second[n, i] += weight * second[n, j]
