"""Customers: do they all move by the same rates, or do some leave readily and others hardly at all?

Under one chain the scores s_cij = N_cij - p_ij N_ci of a customer's successive moves are uncorrelated; if
customers differ they agree. The sum over pairs of moves from the same state, weighted by 1/p, is

    x_c = sum_i [ sum_j N_cij (N_cij - 1) / p_ij - N_ci (N_ci - 1) ],     E x_c = 0 under one chain,
    Z = ( sum_c x_c + sum_i (q_i - 1) sum_c N_ci^2 / n_i ) / sqrt( sum_c x_c^2 ),

q_i = cells with counts in row i; the second term puts back what estimating p takes away. One-sided: customers
who differ make Z large. It stays calm when months differ for everybody, which tells the two causes apart.
A C(alpha) test of this form, cf. Neyman & Scott (1966) Bull. ISI 41, 477; White (1982) Econometrica 50, 1.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtr

from cohortflow.assessment.finding import Finding
from cohortflow.assessment.paths import Paths
from cohortflow.tally import FINEST_BITS, Tally

Ints = NDArray[np.int64]


def customers(tally: Tally, paths: Paths | None) -> Finding:
    """Check "customers" (code "rates_differ"), from the moves of single customers."""
    blank = Finding("customers", "rates_differ", "mixture")
    found = _by_customer(tally, paths)
    if found is None:
        return replace(blank, reason="customer_rows")
    z = heterogeneity_z(*found, len(tally.states))
    if np.isnan(z):
        return replace(blank, reason="too_few_moves")
    return replace(blank, statistic=z, p_value=float(ndtr(-z)))


def heterogeneity_z(customer: Ints, origin: Ints, target: Ints, n: Ints, size: int) -> float:
    """Z from moves of customers (entries may repeat); NaN when nobody moved twice from one state.

    Four customers, two moves each, p = 1/2: x_c = 2 x 1 / .5 - 2 x 1 = 2, so Z = (8 + 16/8) / sqrt(16).

    >>> who, start = np.array([0, 0, 1, 1, 2, 2, 3, 3]), np.zeros(8, dtype=int)
    >>> round(heterogeneity_z(who, start, np.array([0, 0, 0, 0, 1, 1, 1, 1]), np.ones(8, dtype=int), 2), 4)
    2.5
    """
    width = int(customer.max(initial=0)) + 1
    cell, where = np.unique(customer * size * size + origin * size + target, return_inverse=True)
    N = np.bincount(where.reshape(-1), n)
    who, move = cell // (size * size), cell % (size * size)
    left, place = np.unique(who * size + move // size, return_inverse=True)
    visits = np.bincount(place.reshape(-1), N)
    total = np.bincount(move, N, minlength=size * size).reshape(size, size)
    at_risk = total.sum(axis=1)
    p = (total / np.where(at_risk > 0, at_risk, 1.0)[:, None]).ravel()
    x = np.bincount(who, N * (N - 1) / p[move], minlength=width)
    x -= np.bincount(left // size, visits * (visits - 1), minlength=width)
    squares = np.bincount(left % size, visits**2, minlength=size)
    used = at_risk > 0
    lost = (((total > 0).sum(axis=1) - 1)[used] * squares[used] / at_risk[used]).sum()
    spread = np.sqrt((x**2).sum())
    return float((x.sum() + lost) / spread) if spread > 0 else float("nan")


def _by_customer(tally: Tally, paths: Paths | None) -> tuple[Ints, Ints, Ints, Ints] | None:
    """(customer, from, to, n): from single-customer buckets when there are, else from the sampled paths."""
    moves = tally.one_step
    if tally.meta.bucket_bits == FINEST_BITS and moves["bucket"].nunique() > 1:
        customer = np.unique(moves["bucket"], return_inverse=True)[1].reshape(-1)
        origin, target, n = (moves[c].to_numpy(np.int64) for c in ("state", "next_state", "n"))
        return customer, origin, target, n
    return None if paths is None or not len(paths.state) else paths.moves
