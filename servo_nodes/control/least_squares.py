# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Small least squares, once or ten thousand times: x = A^+ b for stacks A of at most six columns.

The normal matrix G = A^T A is at most 6 x 6, so that it is cheaper to work on than the stack. Its
condition is the square of the stack's, hence the rule: where condition(A) could exceed
`CONDITION_LIMIT` the singular values of A itself are used. One stack goes through an eigenvalue
decomposition of G, many through an elimination that runs along the batch,

    G = L D L^T,   x = L^-T D^-1 L^-1 A^T b,   trace G^-1 = sum_k |row k of L^-1|^2 / D_k,

and since 1 / smallest(G) <= trace G^-1 the rows that may need care are found for sure.

Damping (from memory, after Nakamura & Hanafusa 1986 and Maciejewski & Klein 1988): with s the
smallest singular value and s < `below`, every 1/sigma becomes sigma / (sigma^2 + mu^2) where mu^2
= damping^2 (1 - (s / below)^2), so that it sets in without a step.
"""

from __future__ import annotations

import typing
from dataclasses import dataclass

import numpy as np
from scipy.linalg import lapack

from servo_nodes.values import Floats

CONDITION_LIMIT = 3e3
RANK_TOLERANCE = 1e-9
_LIMIT_SQUARED = CONDITION_LIMIT ** 2
_BLOCK = 1024


@dataclass(frozen=True)
class Damping:
    """Largest damping factor, and the smallest singular value below which it sets in."""

    largest: float = 0.0
    below: float = 0.0

    def squared(self, smallest: Floats) -> Floats:
        """Return mu^2 (...) for smallest singular values (...)."""
        if not self.below > 0.0:
            return np.zeros_like(smallest)
        share = np.minimum(smallest / self.below, 1.0)
        return self.largest ** 2 * (1.0 - share * share)


NO_DAMPING = Damping()


@dataclass(frozen=True, eq=False)
class Fit:
    """One least-squares fit and what its stack is worth.

    Attributes
    ----------
    x : (K,), the fit
    values : (K,), singular values of the stack, ascending; zeros where the stack lacks rank
    vectors : (K, K), the right singular vectors as columns, in the order of `values`
    """

    x: Floats
    values: Floats
    vectors: Floats

    @property
    def scatter(self) -> Floats:
        """Return the standard deviation (K,) of x when the right side scatters by 1."""
        if not self.values[0] > 0.0:
            return np.full(len(self.x), np.inf)
        return typing.cast(Floats, np.sqrt((self.vectors * self.vectors) @ self.values ** -2.0))


def fit(stack: Floats, right: Floats, damping: Damping = NO_DAMPING) -> Fit:
    """Return the minimum-norm least-squares fit of one stack (M, K) to `right` (M,)."""
    found = fit_normal(stack.T @ stack, right @ stack, damping)
    return fit_by_singular_values(stack, right, damping) if found is None else found


def fit_normal(gram: Floats, moved: Floats, damping: Damping = NO_DAMPING) -> Fit | None:
    """Return the fit from A^T A (K, K) and A^T b (K,); None where only A itself will do."""
    squares, vectors, info = lapack.dsyevd(gram)
    smallest = float(squares[0])
    if info or not smallest * _LIMIT_SQUARED > squares[-1]:
        return None
    values = np.sqrt(squares)
    if smallest < damping.below * damping.below:
        squares = squares + damping.squared(values[0])
    # `dot` costs half of what `@` does on matrices this small.
    return Fit(vectors.dot(moved.dot(vectors) / squares), values, vectors)


def fit_by_singular_values(stack: Floats, right: Floats,
                           damping: Damping = NO_DAMPING) -> Fit:
    """Return the minimum-norm fit of one stack (M, K) through its singular values."""
    columns = stack.shape[-1]
    if not (np.isfinite(stack).all() and np.isfinite(right).all()):
        return Fit(np.full(columns, np.nan), np.zeros(columns), np.eye(columns))
    u, values, vt = np.linalg.svd(stack, full_matrices=len(stack) < columns)
    found = np.zeros(columns)
    found[:len(values)] = np.where(values > RANK_TOLERANCE * values[0], values, 0.0)
    projected = np.zeros(columns)
    projected[:len(values)] = (right @ u)[:len(values)]
    x = _inverted(found, damping.squared(found[-1:])) * projected @ vt
    return Fit(x, found[::-1], vt[::-1].T)


def _inverted(values: Floats, mu_squared: Floats) -> Floats:
    below = values * values + mu_squared
    return np.where(values > 0, values / np.where(below > 0, below, 1.0), 0.0)


def fits(stacks: Floats, rights: Floats, damping: Damping = NO_DAMPING) -> Floats:
    """Return the minimum-norm fits (..., K) of stacks (..., M, K) to `rights` (..., M)."""
    if stacks.ndim == 2 and rights.ndim == 1:
        return fit(stacks, rights, damping).x
    lead = np.broadcast_shapes(stacks.shape[:-2], rights.shape[:-1])
    rows, columns = stacks.shape[-2:]
    flat = np.broadcast_to(stacks, (*lead, rows, columns)).reshape(-1, rows, columns)
    right = np.broadcast_to(rights, (*lead, rows)).reshape(-1, rows)
    found = np.empty((len(flat), columns))
    for start in range(0, len(flat), _BLOCK):
        block = slice(start, start + _BLOCK)
        found[block] = _fits_block(flat[block], right[block], damping)
    return found.reshape(*lead, columns)


def _fits_block(stacks: Floats, rights: Floats, damping: Damping) -> Floats:
    """Fit one block that stays in the cache, by elimination along the batch (last axis)."""
    turned = np.swapaxes(stacks, -1, -2)
    gram = np.ascontiguousarray(np.moveaxis(turned @ stacks, 0, -1))
    moved = np.ascontiguousarray((turned @ rights[..., None])[..., 0].T)
    trace = np.einsum('kkb->b', gram)
    with np.errstate(all='ignore'):
        pivots, lower = _eliminated(gram)
        inverse_trace = (np.einsum('kjb,kjb->kb', lower, lower) / pivots).sum(0)
        x = np.einsum('kjb,kb->jb', lower, np.einsum('kjb,jb->kb', lower, moved) / pivots)
        well = (pivots > 0).all(0) & (trace * inverse_trace < _LIMIT_SQUARED)
        if damping.below > 0.0:
            well &= inverse_trace * damping.below ** 2 < 1.0
    found: Floats = np.ascontiguousarray(x.T)
    if not well.all():
        found[~well] = _fits_by_singular_values(stacks[~well], rights[~well], damping)
    return found


def _eliminated(gram: Floats) -> tuple[Floats, Floats]:
    """Return D (K, B) and L^-1 (K, K, B) of G = L D L^T (K, K, B), which is overwritten."""
    columns, batch = gram.shape[1:]
    lower = np.zeros_like(gram)
    pivots = np.empty((columns, batch))
    for k in range(columns):
        pivots[k] = gram[k, k]
        lower[k, k] = 1.0
        if k + 1 < columns:
            factors = gram[k + 1:, k] / pivots[k]
            gram[k + 1:, k + 1:] -= factors[:, None] * gram[k, k + 1:]
            lower[k + 1:, :k + 1] -= factors[:, None] * lower[k, :k + 1]
    return pivots, lower


def _fits_by_singular_values(stacks: Floats, rights: Floats, damping: Damping) -> Floats:
    fitted = np.full((len(stacks), stacks.shape[-1]), np.nan)
    finite = np.isfinite(stacks).all((-1, -2)) & np.isfinite(rights).all(-1)
    u, values, vt = np.linalg.svd(stacks[finite], full_matrices=False)
    values = np.where(values > RANK_TOLERANCE * values[:, :1], values, 0.0)
    smallest = values[:, -1:] if values.shape[-1] == stacks.shape[-1] else 0.0 * values[:, :1]
    projected = np.einsum('bmk,bm->bk', u, rights[finite])
    scaled = _inverted(values, damping.squared(smallest)) * projected
    fitted[finite] = np.einsum('bkj,bk->bj', vt, scaled)
    return fitted


def singular_values(stacks: Floats) -> Floats:
    """Return the singular values (..., K) of stacks (..., M, K), descending, padded with zeros."""
    values = np.linalg.svd(stacks, compute_uv=False)
    missing = stacks.shape[-1] - values.shape[-1]
    if missing > 0:
        pad = [(0, 0)] * (values.ndim - 1) + [(0, missing)]
        values = np.pad(values, pad)
    return typing.cast(Floats, values)
