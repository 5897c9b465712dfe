"""What a sampled waveform shows: crossings and transitions, by local cubic interpolation.

ngspice chooses its own time points, dense where the waveform bends. Between two of them a straight line
is wrong by about a quarter of the second difference; a cubic through the two neighbours on either side
(Lagrange form, monotone data) leaves an error of fourth order.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from charflow.plan.trial import Swing

Samples = NDArray[np.float64]


def crossing_times(time: Samples, value: Samples, level: float) -> list[float]:
    """Return the times at which ``value`` passes ``level``, in order and unit of ``time``; shapes (n,)."""
    above = value > level
    return [_cross(time, value, level, int(i)) for i in np.flatnonzero(above[1:] != above[:-1])]


def _cross(time: Samples, value: Samples, level: float, i: int) -> float:
    """Return where the cubic through samples i-1 .. i+2 passes ``level`` between samples i and i+1."""
    first, last = max(i - 1, 0), min(i + 3, len(time))
    t, v = time[first:last] - time[i], value[first:last] - level
    width = float(time[i + 1] - time[i])
    a, b = 0.0, width
    va = float(value[i] - level)
    x = width * va / (va - float(value[i + 1] - level))
    for _ in range(60):  # regula falsi kept inside the interval; a few rounds suffice
        vx = _lagrange(t, v, x)
        if vx == 0 or b - a <= 1e-9 * width:
            break
        if (vx > 0) == (va > 0):
            a = x
        else:
            b = x
        slope = (_lagrange(t, v, x + 1e-4 * width) - vx) / (1e-4 * width)
        step = x - vx / slope if slope else x
        if abs(step - x) < 1e-10 * width:
            x = min(max(step, a), b)
            break
        x = step if a < step < b else (a + b) / 2
    return float(time[i] + x)


def _lagrange(t: Samples, v: Samples, x: float) -> float:
    total = 0.0
    n = len(t)
    for j in range(n):
        term = v[j]
        for k in range(n):
            if k != j:
                term *= (x - t[k]) / (t[j] - t[k])
        total += term
    return float(total)


def swing_of(pin: str, time: Samples, level: Samples, zero: float, fractions: tuple[float, float]) -> Swing:
    """Return what one output did.

    ``time`` [s] and ``level`` (fraction of supply) have shape (n,); ``zero`` [s] is the reference edge on
    that time axis; ``fractions`` are the slew fractions.
    """
    middle = crossing_times(time, level, 0.5)
    lower = crossing_times(time, level, fractions[0])
    upper = crossing_times(time, level, fractions[1])
    rising = bool(level[0] <= 0.5)
    transitions: list[float | None] = []
    edges = [-np.inf, *middle, np.inf]
    for index, at in enumerate(middle):
        near, far = (lower, upper) if rising else (upper, lower)
        begin = [t for t in near if edges[index] < t <= at]
        end = [t for t in far if at <= t < edges[index + 2]]
        transitions.append(end[0] - begin[-1] if begin and end else None)
        rising = not rising
    tail = level if not middle else level[time >= middle[0]]
    return Swing(
        pin=pin,
        first=float(level[0]),
        last=float(level[-1]),
        low=float(tail.min()),
        high=float(tail.max()),
        crossings=tuple(t - zero for t in middle),
        transitions=tuple(transitions),
    )
