"""One searcher for all families: roots and minima of functions of time, all candidates at once.

A function handed in takes `(tt_s, which)`: times, and the index of the candidate each time belongs to (so that a
function may look up what differs between candidates); it returns one value a time. Candidates that have converged
are no longer evaluated. Roots are polished far below what the ephemeris deserves (1e-5 s), so that the resolution
of a result is that of its time stamps.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

FunctionOfTime = Callable[[np.ndarray, np.ndarray], np.ndarray]

_MOST_STEPS = 80


def roots_between(
    function: FunctionOfTime,
    low_tt_s: np.ndarray,
    high_tt_s: np.ndarray,
    tolerance_s: float = 1e-5,
) -> np.ndarray:
    """Return the root inside each bracket (n,), NaN where the function has the same sign at both ends.

    Method: inverse quadratic interpolation guarded by bisection (Chandrupatla 1997, Adv. Eng. Software 28, 145),
    batched over all brackets. Tangent pairs of roots inside one bracket are not found: hand in a chord
    (see `contacts`), whose minimum splits them.
    """
    a = np.array(high_tt_s, dtype=float, ndmin=1)
    b = np.array(low_tt_s, dtype=float, ndmin=1)
    which = np.arange(len(a))
    f_a = np.asarray(function(a, which), dtype=float)
    f_b = np.asarray(function(b, which), dtype=float)
    root = np.where(f_a == 0.0, a, np.where(f_b == 0.0, b, np.nan))
    live = np.flatnonzero(np.isnan(root) & (np.sign(f_a) * np.sign(f_b) < 0))
    a, b, f_a, f_b = a[live], b[live], f_a[live], f_b[live]
    c, f_c = a.copy(), f_a.copy()
    fraction = np.full(len(live), 0.5)
    for _ in range(_MOST_STEPS):
        if not len(live):
            break
        t = a + fraction * (b - a)
        f_t = np.asarray(function(t, live), dtype=float)
        same = np.sign(f_t) == np.sign(f_a)
        c, f_c = np.where(same, a, b), np.where(same, f_a, f_b)
        b, f_b = np.where(same, b, a), np.where(same, f_b, f_a)
        a, f_a = t, f_t
        best = np.where(np.abs(f_a) < np.abs(f_b), a, b)
        width = np.abs(b - a)
        small = tolerance_s + 4.0 * np.spacing(np.abs(best))
        done = (f_a == 0.0) | (width <= 2.0 * small)
        root[live[done]] = best[done]
        go = ~done
        live, a, b, c, f_a, f_b, f_c = (v[go] for v in (live, a, b, c, f_a, f_b, f_c))
        fraction = _next_fraction(a, b, c, f_a, f_b, f_c, small[go])
    return root


def _next_fraction(a, b, c, f_a, f_b, f_c, small):  # type: ignore[no-untyped-def]
    with np.errstate(divide="ignore", invalid="ignore"):
        xi = (a - b) / (c - b)
        phi = (f_a - f_b) / (f_c - f_b)
        inverse = f_a / (f_b - f_a) * f_c / (f_b - f_c) + (c - a) / (b - a) * f_a / (f_c - f_a) * f_b / (
            f_c - f_b
        )
        usable = (phi**2 < xi) & ((1.0 - phi) ** 2 < 1.0 - xi) & np.isfinite(inverse)
        least = np.minimum(0.5, small / np.abs(b - a))
    return np.clip(np.where(usable, inverse, 0.5), least, 1.0 - least)


def minima_near(
    function: FunctionOfTime,
    guess_tt_s: np.ndarray,
    step_s: float,
    reach_s: float,
    tolerance_s: float = 1e-3,
    finest_s: float = 4.0,
) -> np.ndarray:
    """Return the time of the minimum nearest to each guess (n,).

    The function must be close to a parabola over `step_s` (a squared separation is). Each round fits a parabola
    through three points and shrinks the step to a tenth, never below `finest_s`, where rounding would take over (4 s
    for separations). Guesses that run away further than `reach_s` come back as NaN.
    """
    guess = np.array(guess_tt_s, dtype=float, ndmin=1)
    t = guess.copy()
    which = np.arange(len(t))
    live = which
    step = np.full(len(t), float(step_s))
    for _ in range(_MOST_STEPS):
        if not len(live):
            break
        h = step[live]
        at = t[live]
        three = np.concatenate([at - h, at, at + h])
        before, here, after = np.asarray(function(three, np.tile(live, 3))).reshape(3, -1)
        slope, bend = after - before, after - 2.0 * here + before
        with np.errstate(divide="ignore", invalid="ignore"):
            move = np.where(bend > 0, -0.5 * slope / bend, -np.sign(slope)) * h
        limit = 4.0 * h
        move = np.clip(np.nan_to_num(move), -limit, limit)
        t[live] = at + move
        finest = h <= finest_s
        step[live] = np.where(np.abs(move) < h, np.maximum(0.1 * h, finest_s), h)
        astray = np.abs(t[live] - guess[live]) > reach_s
        t[live[astray]] = np.nan
        done = astray | (finest & (np.abs(move) < max(tolerance_s, 1e-12 * step_s)))
        live = live[~done]
    return t


def changes_of_sign(tt_s: np.ndarray, values: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return the brackets (low, high), in TT seconds, between which samples along the last axis change sign."""
    at = np.flatnonzero(np.signbit(values[:-1]) != np.signbit(values[1:]))
    return tt_s[at], tt_s[at + 1]


def samples(start_tt_s: float, end_tt_s: float, step_s: float) -> np.ndarray:
    """Return times from start to end inclusive, at most `step_s` apart."""
    count = max(2, int(np.ceil((end_tt_s - start_tt_s) / step_s)) + 1)
    return np.linspace(start_tt_s, end_tt_s, count)
