"""Brute force for the whole job, in plain numpy, from the formulas: shares no code with the package."""

from __future__ import annotations

import numpy as np


def expit(t):
    return 1 / (1 + np.exp(-t))


def logit_fit(x, a, s):
    """Weighted logit by Newton's method on the raw columns."""
    g = np.zeros(x.shape[1])
    for _ in range(100):
        e = expit(x @ g)
        step = np.linalg.solve(x.T @ (x * (s * e * (1 - e))[:, None]), x.T @ (s * (a - e)))
        g = g + step
        if np.abs(step).max() < 1e-13:
            break
    return g


def balancing_weight(estimand, e, a):
    return {
        "ATE": a / e + (1 - a) / (1 - e),
        "ATT": a + (1 - a) * e / (1 - e),
        "ATC": a * (1 - e) / e + (1 - a),
        "ATO": a * (1 - e) + (1 - a) * e,
    }[estimand]


def stacked_influence(x, a, s, z, estimand):
    """Differences of the Hajek means of the columns of z, and their influence: sum(s u) is the error.

    The stacked estimating equations are the propensity's score and the two groups' means; their
    Jacobian is taken by central differences, so no derivative is worked out by hand.
    """
    g = logit_fit(x, a, s)
    q = z.shape[1]

    def equations(theta):
        g, m1, m0 = theta[: x.shape[1]], theta[x.shape[1] : x.shape[1] + q], theta[x.shape[1] + q :]
        e = expit(x @ g)
        c = balancing_weight(estimand, e, a)
        return np.column_stack(
            [x * (a - e)[:, None], (a * c)[:, None] * (z - m1), ((1 - a) * c)[:, None] * (z - m0)]
        )

    c = balancing_weight(estimand, expit(x @ g), a)
    m1 = (s * c * a) @ z / (s * c * a).sum()
    m0 = (s * c * (1 - a)) @ z / (s * c * (1 - a)).sum()
    theta = np.concatenate([g, m1, m0])
    jacobian = np.empty((len(theta), len(theta)))
    for j in range(len(theta)):
        h = 1e-6 * max(1, abs(theta[j]))
        up, down = theta.copy(), theta.copy()
        up[j] += h
        down[j] -= h
        jacobian[:, j] = (s @ equations(up) - s @ equations(down)) / (2 * h)
    u = -np.linalg.solve(jacobian, equations(theta).T).T
    p = x.shape[1]
    return m1 - m0, u[:, p : p + q] - u[:, p + q :], m1, m0


def stratified_variance(z, stratum, psu, lone="refuse"):
    """One-stage variance of the sum of z (n, k); the treatments of a lone PSU are spelled out one by one."""
    k = z.shape[1]
    totals = {}
    for i in range(len(z)):
        totals.setdefault((stratum[i], psu[i]), np.zeros(k))
        totals[(stratum[i], psu[i])] = totals[(stratum[i], psu[i])] + z[i]
    grand = np.mean(list(totals.values()), axis=0)
    groups = {}
    for (h, _), total in sorted(totals.items()):
        groups.setdefault(h, []).append(total)
    if lone == "collapse":
        names = sorted(groups)
        joined, waiting = [], []
        for h in names:
            waiting = waiting + groups[h]
            if len(waiting) > 1:
                joined.append(waiting)
                waiting = []
        if waiting:
            joined[-1] = joined[-1] + waiting
        groups = dict(enumerate(joined))
    v = np.zeros((k, k))
    for members in groups.values():
        n = len(members)
        if n == 1:
            if lone == "recentre":
                v += np.outer(members[0] - grand, members[0] - grand)
            elif lone != "self-representing":
                raise AssertionError("lone PSU")
            continue
        middle = np.mean(members, axis=0)
        for t in members:
            v += n / (n - 1) * np.outer(t - middle, t - middle)
    return v


def staged_variance(z, ids, populations):
    """Variance of the sum of z over nested stages of sampling.

    ``ids`` (n, stages + 1): stratum, first-stage unit, second-stage unit, ...; ``populations`` (n, stages):
    for each row, how many units of each stage its parent has in the population (NaN: not given).
    """
    k = z.shape[1]

    def recurse(rows, depth, share):
        """Variance within the unit that ``rows`` make up at level ``depth``, times ``share``."""
        if depth >= ids.shape[1] or (np.isnan(populations[rows[0], depth - 1]) and depth > 1):
            return np.zeros((k, k))
        units = sorted(set(ids[rows, depth]))
        members = [rows[ids[rows, depth] == unit] for unit in units]
        n, count = len(members), populations[rows[0], depth - 1]
        f = 0.0 if np.isnan(count) else n / count
        totals = np.array([z[m].sum(axis=0) for m in members])
        v = np.zeros((k, k))
        if n > 1:
            for t in totals - totals.mean(axis=0):
                v += (1 - f) * n / (n - 1) * np.outer(t, t)
        v = share * v
        for m in members:
            v = v + recurse(m, depth + 1, share * f)
        return v

    total = np.zeros((k, k))
    for h in sorted(set(ids[:, 0])):
        total += recurse(np.flatnonzero(ids[:, 0] == h), 1, 1.0)
    return total
