"""What no choice of vetoes can exceed: the instance's own upper bound.

For any set S of vetoes and any choice T whose dead time is at most B, f(T) <= f(S) +
sum over T of the gain that each veto still adds to S, since gains only shrink (Leskovec
et al. 2007, Proc. KDD 420, from memory). Filling B with fractions of vetoes, best rate
first, bounds the sum. Costs must not be overstated for that: vetoes that share time
pay for it once. So an atom of time is split evenly among the vetoes that own it, and
the split costs of T never sum to more than the dead time of its union (derived here).
The smallest bound over the S that the greedy path passes is kept.
"""

from __future__ import annotations

import numpy as np

from dq.vetoes.cover import Cover

#: Sets along the path that are tried; more gain little (own choice).
_SETS = 64

#: Split costs are floats; the budget grows by this much so that rounding of sums of
#: up to a million terms cannot turn the bound into none.
_SLACK = 1e-9


def gain_bounds(
    cover: Cover, path: list[int], budgets: np.ndarray, fits: np.ndarray
) -> np.ndarray:
    """Bound the worth that any choice removes within each of some budgets.

    Parameters
    ----------
    cover : Cover
        Before the choice; is left so.
    path : list of int
        Candidates in greedy order.
    budgets : ndarray of int64
        Dead time, nanoseconds.
    fits : ndarray of bool
        Candidates that fit the last of the budgets at all.

    Returns
    -------
    ndarray of float
        In the units of the cover's weights.
    """
    start = cover.state()
    best = np.full(len(budgets), float(start[1].sum()))
    among = np.ones(cover.count, dtype=bool)
    kept = set(np.unique(np.linspace(0, len(path), _SETS).astype(int)).tolist())
    for step in range(len(path) + 1):
        if step:
            cover.take(path[step - 1])
            among[path[step - 1]] = False
        if step in kept:
            done = float(start[1].sum() - cover.left.sum())
            costs, gains = cover.shared_costs(among, start[0]), cover.gains()
            best = np.minimum(best, done + _filled(gains, costs, among, budgets))
            some = among & fits
            costs = cover.shared_costs(some, start[0])
            last = done + _filled(gains, costs, some, budgets[-1:])
            best[-1] = min(best[-1], float(last[0]))
    cover.restore(start)
    return best


def _filled(gains, costs, among, budgets: np.ndarray) -> np.ndarray:
    """Fill budgets with fractions of candidates, best rate first."""
    gains, costs = gains[among], np.maximum(costs[among], 0.0)
    some = gains > 0
    gains, costs = gains[some], costs[some]
    rates = gains / np.maximum(costs, 1e-300)
    order = np.argsort(-rates, kind="stable")
    cost = np.append(0.0, np.cumsum(costs[order]))
    gain = np.append(0.0, np.cumsum(gains[order], dtype=float))
    # where costs are equal the last gain counts: free candidates are all taken
    free = np.searchsorted(cost, cost[0], side="right") - 1
    return np.maximum(
        np.interp(budgets * (1.0 + _SLACK), cost[free:], gain[free:]), gain[free]
    )
