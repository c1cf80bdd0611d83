"""Second derivatives of a cluster's integral: the derivatives of the adaptive rule's own gradient, in closed form.

Everything in :mod:`steelyard.outcome.multilevel.integrals` is followed forward along each parameter: the mode, the
curvature and its factor, the nodes, their shares, and what the gradient is made of. Directions ``a`` are the fixed
effects and the entries of ``L``; they run along the first axis, clusters along the last.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from steelyard.outcome.multilevel.integrals import Integral

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class _Sums:
    """Sums over the rows of each cluster that second derivatives need; ``X`` stands for a column of ``x``.

    Attributes
    ----------
    node_x : (R, p, J)
        ``sum w (y - b') X`` at each node.
    node_xz : (R, p, q, J)
        ``sum w b'' X z`` at each node.
    node_zz : (R, q, q, J)
        ``sum w b'' z z'`` at each node.
    xz : (p, q, J)
        ``sum w b'' X z`` at the mode.
    xzz : (p, q, q, J)
        ``sum w b''' X z z'`` at the mode.
    zzz : (q, q, q, J)
        ``sum w b''' z z z`` at the mode.
    xzzz : (p, q, q, q, J)
        ``sum w b'''' X z z z`` at the mode.
    zzzz : (q, q, q, q, J)
        ``sum w b'''' z z z z`` at the mode.
    """

    node_x: Floats
    node_xz: Floats
    node_zz: Floats
    xz: Floats
    xzz: Floats
    zzz: Floats
    xzzz: Floats
    zzzz: Floats


def _sums(source: Integral, x: Floats) -> tuple[_Sums, Floats, Floats, Floats]:
    """Return the sums, and of the rows ``w b`` derived three and four times, and ``w b''`` averaged over the nodes.

    ``x`` is (p, n) here.
    """
    rows, mode = source.rows, source.mode
    loadings, members, cumulant = rows.loadings, rows.members, rows.cumulant
    q = loadings.size

    count, p = len(members.sizes), len(x)

    def by_x(values: Floats) -> Floats:
        """Sums of values (..., n) times each column of x, (p, ..., J)."""
        return np.stack([members.total(values * column) for column in x])

    def powers(values: Floats, times: int) -> list[Floats]:
        out = [values]
        for _ in range(times):
            out = [loadings.times(value, d) for value in out for d in range(q)]
        return out

    second = rows.weight * mode.variance
    third = rows.weight * cumulant.third(mode.mean, mode.variance)
    fourth = rows.weight * cumulant.fourth(mode.mean, mode.variance)
    curved = source.node_mean
    if cumulant.family == "binomial":
        curved = _spread_of(curved, rows.weight)
    sums = _Sums(
        by_x(rows.weight * rows.y - source.node_mean).swapaxes(0, 1),
        np.stack([by_x(value) for value in powers(curved, 1)]).transpose(2, 1, 0, 3),
        np.moveaxis(loadings.square_totals(curved, members), 2, 0),
        np.stack([by_x(value) for value in powers(second, 1)], axis=1),
        np.stack([by_x(value) for value in powers(third, 2)], axis=1).reshape(p, q, q, count),
        np.stack([members.total(value) for value in powers(third, 3)]).reshape(q, q, q, count),
        np.stack([by_x(value) for value in powers(fourth, 3)], axis=1).reshape(p, q, q, q, count),
        np.stack([members.total(value) for value in powers(fourth, 4)]).reshape(q, q, q, q, count),
    )
    return sums, third, fourth, np.einsum("rn,rn->n", members.spread(source.share), curved)


def _spread_of(mean: Floats, weight: Floats) -> Floats:
    """Return ``w b' (1 - b')`` from ``w b'``, zero where the weight is."""
    out = mean * (-1 / np.where(weight > 0, weight, 1))
    out += 1
    out *= mean
    return np.asarray(out)


@dataclass(frozen=True)
class _Along:
    """The integral and its parts, and how they move along each of m directions.

    Attributes
    ----------
    source : Integral
    sums : _Sums
    turns : (m, q, q)
        Changes of ``L``; zero along fixed effects, which come first.
    """

    source: Integral
    sums: _Sums
    turns: Floats

    @property
    def fixed(self) -> int:
        """How many directions are fixed effects, p."""
        return len(self.sums.xz)

    def padded(self, values: Floats) -> Floats:
        """Return values (p, ..., J) along the fixed effects with zeros along ``L``, (m, ..., J)."""
        out = np.zeros((len(self.turns), *values.shape[1:]))
        out[: self.fixed] = values
        return out


@dataclass(frozen=True)
class _ModeMoves:
    """How the mode moves: ``v`` (m, q, J), its effects, and the sums ``S``, ``Z`` and ``Z3`` at the mode."""

    v: Floats
    effects: Floats
    score: Floats
    spread: Floats
    third: Floats
    root: Floats


def _mode_moves(along: _Along) -> _ModeMoves:
    """Follow ``L'S = v`` and the root of the inverse curvature, ``dA = -A Phi(A' dH A)'``."""
    factor, turns, sums = along.source.factor, along.turns, along.sums
    mode, root = along.source.mode, along.source.mode.root
    turned = along.padded(sums.xz) + np.einsum("dej,aef,fj->adj", mode.spread, turns, mode.v)
    push = np.einsum("ade,dj->aej", turns, mode.score) - np.einsum("de,adj->aej", factor, turned)
    v = np.einsum("dej,fej,afj->adj", root, root, push)
    effects = np.einsum("ade,ej->adj", turns, mode.v) + np.einsum("de,aej->adj", factor, v)
    score = -(along.padded(sums.xz) + np.einsum("dej,aej->adj", mode.spread, effects))
    spread = along.padded(sums.xzz) + np.einsum("defj,afj->adej", sums.zzz, effects)
    third = along.padded(sums.xzzz) + np.einsum("defgj,agj->adefj", sums.zzzz, effects)
    curvature = np.einsum("ade,dfj,fg->aegj", turns, mode.spread, factor)
    curvature = curvature + curvature.swapaxes(1, 2) + np.einsum("de,adfj,fg->aegj", factor, spread, factor)
    inner = np.einsum("dej,adfj,fgj->aegj", root, curvature, root)
    return _ModeMoves(
        v, effects, score, spread, third, -np.einsum("dej,afej->adfj", root, _half_lower(inner, 1))
    )


@dataclass(frozen=True)
class _NodeMoves:
    """How nodes and their effects (m, q, R, J), their scores, and their shares (m, R, J) move."""

    nodes: Floats
    effects: Floats
    score: Floats
    share: Floats


def _node_moves(along: _Along, moves: _ModeMoves) -> _NodeMoves:
    source, sums, turns = along.source, along.sums, along.turns
    nodes = moves.v[:, :, np.newaxis, :] + np.einsum("adej,er->adrj", moves.root, source.rule.nodes)
    effects = np.einsum("ade,erj->adrj", turns, source.nodes)
    effects = effects + np.einsum("de,aerj->adrj", source.factor, nodes)
    score = -np.einsum("rdej,aerj->adrj", sums.node_zz, effects)
    score[: along.fixed] -= sums.node_xz.transpose(1, 2, 0, 3)
    log = np.einsum("drj,adrj->arj", source.node_score, effects)
    log = log - np.einsum("drj,adrj->arj", source.nodes, nodes)
    log[: along.fixed] += sums.node_x.transpose(1, 0, 2)
    share = source.share * (log - np.einsum("rj,arj->aj", source.share, log)[:, np.newaxis])
    return _NodeMoves(nodes, effects, score, share)


@dataclass(frozen=True)
class _Carried:
    """What the gradient carries back, and how it moves: to the curvature, to the mode's equation, to third sums.

    Attributes
    ----------
    curved, d_curved : (q, q, J) and (m, q, q, J)
    bent, d_bent : the same as seen by effects, ``L curved L'``
    bend, d_bend : (q, J) and (m, q, J)
    carried, d_carried : (q, J) and (m, q, J)
    effect, d_effect : ``L carried``
    """

    curved: Floats
    d_curved: Floats
    bent: Floats
    d_bent: Floats
    bend: Floats
    d_bend: Floats
    carried: Floats
    d_carried: Floats
    effect: Floats
    d_effect: Floats


def _carried(along: _Along, moves: _ModeMoves, node: _NodeMoves) -> _Carried:
    source, turns = along.source, along.turns
    rows, rule, share, factor, root = (
        source.rows,
        source.rule,
        source.share,
        source.factor,
        source.mode.root,
    )
    curved, carried, row_bend = source.backward
    slope = np.einsum("de,drj->erj", factor, source.node_score) - source.nodes
    d_slope = np.einsum("ade,drj->aerj", turns, source.node_score) - node.nodes
    d_slope = d_slope + np.einsum("de,adrj->aerj", factor, node.score)
    pull = np.einsum("rj,drj->dj", share, slope)
    d_pull = np.einsum("arj,drj->adj", node.share, slope) + np.einsum("rj,adrj->adj", share, d_slope)
    turn = np.einsum("rj,drj,er->dej", share, slope, rule.nodes)
    d_turn = np.einsum("arj,drj,er->adej", node.share, slope, rule.nodes)
    d_turn = d_turn + np.einsum("rj,adrj,er->adej", share, d_slope, rule.nodes)
    half = _half_lower(-np.einsum("dej,dfj->efj", turn, root), 0)
    d_half = -np.einsum("adej,dfj->aefj", d_turn, root) - np.einsum("dej,adfj->aefj", turn, moves.root)
    d_curved = np.einsum("adej,efj,gfj->adgj", moves.root, half, root)
    d_curved = d_curved + np.einsum("dej,aefj,gfj->adgj", root, _half_lower(d_half, 1), root)
    d_curved = d_curved + np.einsum("dej,efj,agfj->adgj", root, half, moves.root)
    d_curved = d_curved - np.einsum("adej,fej->adfj", moves.root, root)
    d_curved = 0.5 * (d_curved + d_curved.swapaxes(1, 2))
    bent = np.einsum("de,efj,gf->dgj", factor, curved, factor)
    d_bent = np.einsum("ade,efj,gf->adgj", turns, curved, factor)
    d_bent = d_bent + d_bent.swapaxes(1, 2) + np.einsum("de,aefj,gf->adgj", factor, d_curved, factor)
    bend = rows.loadings.totals(row_bend, rows.members)
    d_bend = np.einsum("adefj,efj->adj", moves.third, bent)
    d_bend = d_bend + np.einsum("defj,aefj->adj", along.sums.zzz, d_bent)
    cause = pull + np.einsum("de,dj->ej", factor, bend)
    d_cause = d_pull + np.einsum("ade,dj->aej", turns, bend) + np.einsum("de,adj->aej", factor, d_bend)
    d_carried = np.einsum("adej,ej->adj", moves.root, np.einsum("dej,dj->ej", root, cause))
    d_carried = d_carried + np.einsum("dej,afej,fj->adj", root, moves.root, cause)
    d_carried = d_carried + np.einsum("dej,fej,afj->adj", root, root, d_cause)
    effect = np.einsum("de,ej->dj", factor, carried)
    d_effect = np.einsum("ade,ej->adj", turns, carried) + np.einsum("de,aej->adj", factor, d_carried)
    return _Carried(curved, d_curved, bent, d_bent, bend, d_bend, carried, d_carried, effect, d_effect)


def _of_fixed(along: _Along, moves: _ModeMoves, node: _NodeMoves, back: _Carried) -> Floats:
    """Return the moves of the gradient in the fixed effects, (m, p, J), but for products of two columns of x."""
    sums, share = along.sums, along.source.share
    out = np.einsum("arj,rbj->abj", node.share, sums.node_x)
    out = out - np.einsum("rj,rbdj,adrj->abj", share, sums.node_xz, node.effects)
    out = out + np.einsum("bdefj,efj,adj->abj", sums.xzzz, back.bent, moves.effects)
    out = out + np.einsum("bdej,adej->abj", sums.xzz, back.d_bent)
    out = out - np.einsum("bdej,ej,adj->abj", sums.xzz, back.effect, moves.effects)
    return np.asarray(out - np.einsum("bdj,adj->abj", sums.xz, back.d_effect))


def _of_factor(along: _Along, moves: _ModeMoves, node: _NodeMoves, back: _Carried) -> Floats:
    """Return the moves of the gradient in ``L``, (m, q, q, J)."""
    source, turns = along.source, along.turns
    share, nodes, score, mode, factor = (
        source.share,
        source.nodes,
        source.node_score,
        source.mode,
        source.factor,
    )
    out = np.einsum("arj,drj,erj->adej", node.share, score, nodes)
    out = out + np.einsum("rj,adrj,erj->adej", share, node.score, nodes)
    out = out + np.einsum("rj,drj,aerj->adej", share, score, node.nodes)
    out = out + 2 * np.einsum("adej,ef,fgj->adgj", moves.spread, factor, back.curved)
    out = out + 2 * np.einsum("dej,aef,fgj->adgj", mode.spread, turns, back.curved)
    out = out + 2 * np.einsum("dej,ef,afgj->adgj", mode.spread, factor, back.d_curved)
    out = out + np.einsum("adj,ej->adej", back.d_bend, mode.v) + np.einsum("dj,aej->adej", back.bend, moves.v)
    out = out + np.einsum("adj,ej->adej", moves.score, back.carried)
    out = out + np.einsum("dj,aej->adej", mode.score, back.d_carried)
    moved = np.einsum("dej,ej->dj", mode.spread, back.effect)
    d_moved = np.einsum("adej,ej->adj", moves.spread, back.effect)
    d_moved = d_moved + np.einsum("dej,aej->adj", mode.spread, back.d_effect)
    return np.asarray(
        out - np.einsum("adj,ej->adej", d_moved, mode.v) - np.einsum("dj,aej->adej", moved, moves.v)
    )


def second_derivatives(source: Integral, x: Floats) -> Floats:
    """Return the second derivatives of each cluster's value in fixed effects and entries of ``L``, (J, P, P).

    Parameters
    ----------
    source : Integral
        With adaptive nodes.
    x : (n, p)
        The fixed part's columns; the parameters are their coefficients, then ``L``'s lower triangle row by row.
    """
    rows, p, q = source.rows, x.shape[1], source.rows.loadings.size
    lower = np.tril_indices(q)
    m = p + len(lower[0])
    turns = np.zeros((m, q, q))
    turns[np.arange(p, m), lower[0], lower[1]] = 1
    columns = np.ascontiguousarray(x.T)
    sums, third, fourth, average = _sums(source, columns)
    along = _Along(source, sums, turns)
    moves = _mode_moves(along)
    node = _node_moves(along, moves)
    back = _carried(along, moves, node)
    out = np.zeros((len(rows.members.sizes), m, m))
    fixed = _of_fixed(along, moves, node, back)
    of_rows = fourth * rows.loadings.form(back.bent, rows.members) - average
    of_rows = of_rows - third * rows.loadings.predictor(back.effect, rows.members)
    fixed[:p] += _row_products(source, columns, of_rows)
    out[:, :, :p] = fixed.transpose(2, 0, 1)
    out[:, :, p:] = _of_factor(along, moves, node, back)[:, lower[0], lower[1]].transpose(2, 0, 1)
    return 0.5 * (out + out.swapaxes(1, 2))


def _half_lower(matrix: Floats, axis: int) -> Floats:
    """Return the lower triangle in axes ``axis`` and ``axis + 1``, its diagonal halved."""
    size = matrix.shape[axis]
    mask = np.tril(np.ones((size, size)), -1) + 0.5 * np.eye(size)
    return matrix * mask.reshape((1,) * axis + (size, size, 1))


def _row_products(source: Integral, x: Floats, values: Floats) -> Floats:
    """Return ``sum values x x'`` by cluster, (p, p, J); ``x`` is (p, n)."""
    p, members = len(x), source.rows.members
    out = np.empty((p, p, len(members.sizes)))
    for a in range(p):
        weighted = x[a] * values
        for b in range(a + 1):
            out[a, b] = out[b, a] = members.total(weighted * x[b])
    return out
