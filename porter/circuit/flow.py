"""Exact flow of a linear mode, and every crossing along it.

In a mode's coordinates each component moves as ``z(t) = z0 + (drive - rate * z0) * reach(rate, t)``
with ``reach = (1 - exp(-rate t)) / rate`` (``t`` where the rate is zero).  A voltage is then a
constant plus ``m`` such terms, and has at most ``m`` zeros; `first_fall` isolates them by the
derivative chain (Rolle's theorem) before polishing, so that none can be missed.
"""

import numpy as np
from numpy.typing import NDArray

from porter.circuit.values import Floats

_LONG = 1e12  # s; stands for "for ever" where a charge only drifts


def reach(rate: Floats, t: Floats) -> Floats:
    """Return ``(1 - exp(-rate t)) / rate``, elementwise, ``t`` where the rate is zero; t may be inf."""
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        decayed = -np.expm1(-rate * t) / rate
    return np.where(rate > 0, decayed, t)


def first_fall(f0: Floats, d: Floats, rate: Floats, until: Floats) -> Floats:
    """Return when ``f0 + sum_i d_i reach(rate_i, t)`` first falls through zero.

    Args:
        f0: shape (R,), at least zero (tiny negatives count as zero).
        d: shape (R, m).
        rate: shape (R, m), at least zero.
        until: shape (R,), may be inf.

    Returns:
        Shape (R,): the time in (0, until], inf where there is none.
    """
    f0 = np.maximum(f0, 0.0)
    if d.shape[1] == 0:
        return np.full(len(f0), np.inf)
    if d.shape[1] == 1:
        t = _one_term(f0, d[:, 0], rate[:, 0])
        return np.where(t <= until, t, np.inf)
    t = np.full(len(f0), np.inf)
    with np.errstate(divide="ignore", invalid="ignore"):
        most_fall = np.where(d < 0, d * np.minimum(1.0 / rate, until[:, None]), 0.0)
    rows = np.flatnonzero(np.isfinite(f0) & (f0 + most_fall.sum(axis=1) < 0))
    if not len(rows):
        return t
    return _by_terms(t, rows, f0, d, rate, until)


def _by_terms(
    t: Floats, rows: NDArray[np.int64], f0: Floats, d: Floats, rate: Floats, until: Floats
) -> Floats:
    """Fill in the rows that may fall: in closed form where a single term counts at all."""
    f0, d, rate, until = f0[rows], d[rows], rate[rows], until[rows]
    with np.errstate(divide="ignore", invalid="ignore"):  # a term of nothing for ever is nothing
        size = np.where(d != 0, np.abs(d) * np.minimum(1.0 / rate, until[:, None]), 0.0)
    counts = size > 1e-17 * (np.abs(f0) + size.max(axis=1))[:, None]
    single = counts.sum(axis=1) == 1
    only = counts[single].argmax(axis=1)[:, None]
    one = _one_term(
        f0[single],
        np.take_along_axis(d[single], only, 1)[:, 0],
        np.take_along_axis(rate[single], only, 1)[:, 0],
    )
    t[rows[single]] = np.where(one <= until[single], one, np.inf)
    many = ~single
    if many.any():
        t[rows[many]] = _many_terms(f0[many], d[many], rate[many], until[many])
    return t


def turning_points(d: Floats, rate: Floats, until: Floats) -> Floats:
    """Return where ``sum_i d_i reach(rate_i, t)`` turns, shape (R, m - 1); unused places hold an end.

    Args:
        d, rate: shape (R, m); until: shape (R,), may be inf.
    """
    order = np.argsort(rate, axis=1)
    d, rate = np.take_along_axis(d, order, 1), np.take_along_axis(rate, order, 1)
    return _exponential_zeros(d, rate, _end(rate, until))


def _end(rate: Floats, until: Floats) -> Floats:
    """Return when the last of rising rates is over, or *until* if that is sooner."""
    slowest = np.where(rate > 0, rate, np.inf).min(axis=1)
    with np.errstate(divide="ignore"):
        settled = np.where(rate[:, 0] == 0, _LONG, 745.0 / slowest)  # exp(-745) is the last number above 0
    return np.minimum(until, settled)


def _one_term(f0: Floats, d: Floats, rate: Floats) -> Floats:
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        need = -f0 / d  # what reach() must become
        left = 1.0 - rate * need
        t = np.where(rate > 0, -np.log1p(-np.minimum(rate * need, 1.0)) / rate, need)
    return np.where((d < 0) & (left > 0), t, np.inf)


def _many_terms(f0: Floats, d: Floats, rate: Floats, until: Floats) -> Floats:
    order = np.argsort(rate, axis=1)
    d, rate = np.take_along_axis(d, order, 1), np.take_along_axis(rate, order, 1)
    end = _end(rate, until)
    turns = _exponential_zeros(d, rate, end)
    stops = np.concatenate([np.zeros((len(f0), 1)), turns, end[:, None]], 1)

    def value(t: Floats, rows: NDArray[np.int64]) -> Floats:
        terms: Floats = d[rows] * reach(rate[rows], t[:, None])
        return np.asarray(f0[rows] + terms.sum(axis=1))

    return _first_sign_change(value, stops, len(f0))


def _first_sign_change(value, stops: Floats, count: int) -> Floats:  # type: ignore[no-untyped-def]
    found = np.full(count, np.inf)
    rows = np.arange(count)
    before = value(stops[:, 0], rows)
    for k in range(stops.shape[1] - 1):
        after = value(stops[:, k + 1], rows)
        hit = np.flatnonzero((before >= 0) & (after < 0) & np.isinf(found))
        if len(hit):
            found[hit] = _bisect(lambda t, hit=hit: value(t, hit), stops[hit, k], stops[hit, k + 1])
        before = after
    return found


def _bisect(f, a: Floats, b: Floats) -> Floats:  # type: ignore[no-untyped-def]
    """Return where the falling sign change of `f` in [a, b] is.

    The logarithm of the time is halved until both ends are of one size, so that a nanosecond and
    a second are told apart in a few rounds; then T. R. Chandrupatla's method (Advances in
    Engineering Software 28, 1997) finishes: inverse quadratic steps, halving where they'd not pay.
    """
    for _ in range(64):
        wide = b > 4 * a
        if not wide.any():
            break
        floor = np.maximum(a, b * 1e-18)
        mid = np.where(wide, np.sqrt(floor) * np.sqrt(b), a)
        down = f(mid) < 0
        a, b = np.where(wide & ~down, mid, a), np.where(wide & down, mid, b)
        if np.all(b < 1e-30):
            break
    return _polish(f, a, b)


def _polish(f, a: Floats, b: Floats) -> Floats:  # type: ignore[no-untyped-def]
    x1, x2, f1, f2 = b, a, f(b), f(a)
    x3, f3 = x2, f2
    t = np.full(len(a), 0.5)
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        for _ in range(80):
            x = x1 + t * (x2 - x1)
            fx = f(x)
            same = (fx < 0) == (f1 < 0)
            x3, f3 = np.where(same, x1, x2), np.where(same, f1, f2)
            x2, f2 = np.where(same, x2, x1), np.where(same, f2, f1)
            x1, f1 = x, fx
            best = np.where(np.abs(f1) < np.abs(f2), x1, x2)
            small = 2.3e-16 * np.abs(best) / np.abs(x2 - x1)
            if np.all((small > 0.5) | (f1 == 0) | (x2 == x1)):
                return best
            xi, phi = (x1 - x2) / (x3 - x2), (f1 - f2) / (f3 - f2)
            bend = (phi * phi < xi) & ((1 - phi) ** 2 < 1 - xi)
            step = f1 / (f2 - f1) * f3 / (f2 - f3) + (x3 - x1) / (x2 - x1) * f1 / (f3 - f1) * f2 / (f3 - f2)
            t = np.clip(
                np.where(bend & np.isfinite(step), step, 0.5),
                np.minimum(small, 0.5),
                1 - np.minimum(small, 0.5),
            )
            t = np.where(np.isfinite(t), t, 0.5)
    return np.where(np.abs(f1) < np.abs(f2), x1, x2)


def _exponential_zeros(a: Floats, rate: Floats, end: Floats) -> Floats:
    """Return the zeros in (0, end) of ``sum_i a_i exp(-rate_i t)``, rates rising, shape (R, m-1).

    Unused places hold ``end``.  Divided by its slowest term, the sum's derivative has one term
    fewer; between that one's zeros the quotient is monotone.
    """
    count, m = a.shape
    if m == 1:
        return np.zeros((count, 0))
    faster = rate[:, 1:] - rate[:, :1]
    inner = _exponential_zeros(a[:, 1:] * faster, rate[:, 1:], end)
    stops = np.concatenate([np.zeros((count, 1)), inner, end[:, None]], 1)

    def value(t: Floats, rows: NDArray[np.int64]) -> Floats:
        return np.asarray(a[rows, 0] + (a[rows, 1:] * np.exp(-faster[rows] * t[:, None])).sum(axis=1))

    zeros = np.tile(end[:, None], (1, m - 1))
    rows = np.arange(count)
    before = value(stops[:, 0], rows)
    for k in range(stops.shape[1] - 1):
        after = value(stops[:, k + 1], rows)
        for sign in (1.0, -1.0):
            hit = np.flatnonzero((sign * before > 0) & (sign * after < 0))
            if len(hit):
                zeros[hit, k] = _bisect(
                    lambda t, hit=hit, sign=sign: sign * value(t, hit), stops[hit, k], stops[hit, k + 1]
                )
        before = np.where(after != 0, after, before)
    return np.sort(zeros, axis=1)
