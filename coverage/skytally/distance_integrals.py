"""The integrals behind the distance distribution, in units of its σ.

With t = r/σ and m = μ/σ everything is an integral of t^k φ(t−m), φ the unit
normal density. Its closed form cancels near t = 0, in narrow intervals and for
m far below zero; there Gauss–Legendre quadrature of the same integral takes
over. Arrays have shape (n,) and are not checked.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import ndtr

__all__ = [
    "FAR",
    "LEAST_RATIO",
    "Floats",
    "Scaled",
    "broadcast",
    "central_moments",
    "integral",
    "position_of_ratio",
    "relative",
    "unit_density",
    "whole_integral",
]

Floats = NDArray[np.float64]
Scaled = tuple[Floats, Floats]
"""Value and exponent e; the number meant is value · exp(e)."""

FAR = 45.0
"""Farther than this beyond both 0 and m the density underflows."""

_ROOT_TWO_PI = float(np.sqrt(2.0 * np.pi))
# What lies exp(-48) below the greatest value cannot show in double precision.
_DECAY = 48.0
# Share of its largest term that a closed form must keep to be used.
_KEPT = 1e-3
# Well above the numbers that double precision keeps with fewer digits.
_FINE = 1e-280
_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(44)
_BLOCK = 4096


@dataclass(frozen=True)
class _ClosedForm:
    """∫ t^k φ(t−m) dt = factor(m) Φ(t−m) − edge(t, m) φ(t−m), by parts."""

    factor: Callable[[Floats], Floats]
    edge: Callable[[Floats, Floats], Floats]


_CLOSED = {
    2: _ClosedForm(lambda m: m * m + 1.0, lambda t, m: t + m),
    3: _ClosedForm(lambda m: m * (m * m + 3.0), lambda t, m: t * t + m * t + m * m + 2.0),
    4: _ClosedForm(
        lambda m: m * m * (m * m + 6.0) + 3.0,
        lambda t, m: t * (t * t + m * t + m * m + 3.0) + m * (m * m + 5.0),
    ),
}


def broadcast(*values: ArrayLike) -> list[Floats]:
    """Broadcast values to float64 arrays of one shape."""
    return list(np.broadcast_arrays(*(np.asarray(v, dtype=np.float64) for v in values)))


def _phi(y: Floats) -> Floats:
    return np.asarray(np.exp(-0.5 * y * y) / _ROOT_TWO_PI)


def integral(power: int, low: Floats, high: Floats, m: Floats) -> Scaled:
    """∫ t^power φ(t−m) dt from low to high, 0 ≤ low ≤ high ≤ ∞, all of shape (n,)."""
    edge = np.maximum(m, 0.0) + FAR
    low, high = np.minimum(low, edge), np.minimum(high, edge)
    form = _CLOSED[power]
    a, b = low - m, high - m
    # Differences of the smaller tails lose least.
    sign = np.where(a + b > 0, -1.0, 1.0)
    tail_a, tail_b = ndtr(sign * a), ndtr(sign * b)
    factor = form.factor(m)
    edge_a, edge_b = form.edge(low, m) * _phi(a), form.edge(high, m) * _phi(b)
    value = factor * sign * (tail_b - tail_a) - edge_b + edge_a
    largest = np.abs(factor) * (tail_a + tail_b) + np.abs(edge_a) + np.abs(edge_b)
    exponent = np.zeros(m.shape)
    rest = np.flatnonzero(~(value > np.maximum(_KEPT * largest, _FINE)))
    for block in np.array_split(rest, range(_BLOCK, rest.size, _BLOCK)):
        value[block], exponent[block] = _quadrature(power, low[block], high[block], m[block])
    return value, exponent


def _quadrature(power: int, low: Floats, high: Floats, m: Floats) -> Scaled:
    """Evaluate `integral` by quadrature over the part where the integrand shows."""
    nearest = np.clip(m, low, high)
    gap = np.abs(nearest - m)
    seen = 2.0 * _DECAY / (np.sqrt(gap * gap + 2.0 * _DECAY) + gap)
    low, high = np.maximum(low, nearest - seen), np.minimum(high, nearest + seen)
    half = 0.5 * (high - low)
    t = low[:, None] + half[:, None] * (1.0 + _NODES)
    # exp(−(t−m)²/2) relative to its value at `nearest`, without the difference of squares.
    fall = (t - nearest[:, None]) * (t + (nearest - 2.0 * m)[:, None])
    value = (t**power * np.exp(-0.5 * fall)) @ _WEIGHTS * half / _ROOT_TWO_PI
    return value, -0.5 * gap * gap


def whole_integral(m: Floats) -> Scaled:
    """∫ t² φ(t−m) dt from 0 to ∞, what the density must be divided by."""
    return integral(2, np.zeros(m.shape), np.full(m.shape, np.inf), m)


def relative(part: Scaled, total: Scaled) -> Floats:
    """Quotient of two scaled integrals."""
    return np.asarray(part[0] / total[0] * np.exp(part[1] - total[1]))


def unit_density(t: Floats, m: Floats, total: Scaled) -> Floats:
    """Probability per unit of t ≥ 0, given `whole_integral`."""
    t = np.minimum(t, np.maximum(m, 0.0) + FAR)
    fall = np.exp(-0.5 * (t - m) ** 2 - total[1])
    return np.asarray(t * t * fall / (_ROOT_TWO_PI * total[0]))


def central_moments(m: Floats) -> tuple[Floats, Floats, Floats]:
    """Mean, standard deviation and third central moment of t, shape (n,) each."""
    mean, sd, third = np.empty((3, *m.shape))
    # Integrating t² y^k φ(y), y = t − m, by parts leaves sums of positive terms.
    above = m > -2.0
    n = m[above]
    zeroth, edge = ndtr(n), _phi(n)
    first = n * zeroth + edge
    second = n * first + zeroth
    one, two = 2.0 * first / second, 1.0 + 2.0 * zeroth / second
    three = (6.0 * first + 2.0 * edge) / second
    mean[above] = n + one
    sd[above] = np.sqrt(two - one**2)
    third[above] = three - 3.0 * one * two + 2.0 * one**3
    # Below, t itself is small, and its own powers serve.
    n = m[~above]
    raw = [_quadrature(power, np.zeros(n.shape), n + np.inf, n)[0] for power in (2, 3, 4, 5)]
    one, two, three = (value / raw[0] for value in raw[1:])
    mean[~above] = one
    sd[~above] = np.sqrt(two - one**2)
    third[~above] = three - 3.0 * one * two + 2.0 * one**3
    return mean, sd, third


# mean/sd rises with m from √3; between two entries Newton's method has its bracket.
_M_TABLE = np.concatenate((-np.geomspace(1000.0, 2.2, 60), np.arange(-2.0, 20.5, 0.25)))


def _ratio_table() -> Floats:
    mean, sd, _ = central_moments(_M_TABLE)
    return mean / sd


_RATIO_TABLE = _ratio_table()

LEAST_RATIO = float(_RATIO_TABLE[0])
"""Mean over standard deviation at m = −1000, the least that is told from √3."""


def position_of_ratio(ratio: Floats) -> Floats:
    """Find m where mean/sd is as given; above `LEAST_RATIO`."""
    row = np.searchsorted(_RATIO_TABLE, ratio, side="right")
    low = _M_TABLE[row - 1]
    # The ratio exceeds m itself, so m never exceeds the ratio.
    high = np.where(row < _M_TABLE.size, _M_TABLE[np.minimum(row, _M_TABLE.size - 1)], ratio)
    m = 0.5 * (low + high)
    open_ = np.arange(m.size)
    for _ in range(60):
        if open_.size == 0:
            break
        here = m[open_]
        mean, sd, third = central_moments(here)
        # In m this is an exponential family: the mean's slope is the variance,
        # the variance's slope the third central moment.
        excess = mean / sd - ratio[open_]
        guess = here - excess / (sd - 0.5 * mean * third / sd**3)
        low[open_] = np.where(excess < 0, here, low[open_])
        high[open_] = np.where(excess < 0, high[open_], here)
        inside = (guess > low[open_]) & (guess < high[open_])
        m[open_] = np.where(inside, guess, 0.5 * (low[open_] + high[open_]))
        open_ = open_[np.abs(m[open_] - here) > 1e-13 * np.maximum(np.abs(here), 1.0)]
    return m
