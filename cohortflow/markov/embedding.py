r"""From a period to a shorter one: logarithms of P, whether a generator stands behind it, and roots.

P is embeddable when P = exp(G) for a generator G. Then P^(1/n) = exp(G / n) is the matrix of the n-th
part of the period. Necessary: det P > 0, det P <= prod p_ii, p_ij > 0 wherever j can be reached from i,
negative eigenvalues only in equal pairs, every eigenvalue but 1 inside the unit circle and in
Runnenberg's region. For distinct eigenvalues all real logarithms can be listed: log lambda + 2 pi i k for
each complex pair, |imaginary part| <= -log det P, so the question is decided; otherwise it may stay open.

Source: Kingman (1962), Z. Wahrscheinlichkeitstheorie 1 (2 x 2, det); Culver (1966), Proc. AMS 17 (real
logarithms); Runnenberg (1962), Indag. Math. 24; Cuthbert (1973), J. London Math. Soc. 6 (uniqueness when
every p_ii > 1/2); Israel, Rosenthal & Wei (2001), Mathematical Finance 11(2) (search over the branches).
"""

from __future__ import annotations

import itertools
import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.linalg import expm, logm

from cohortflow.errors import NotIdentified
from cohortflow.markov.arguments import Array, check_steps, check_stochastic, read_only
from cohortflow.markov.repair import repair
from cohortflow.markov.structure import reachability

TINY = 1e-10
_APART = 1e-7
_SINGULAR = 1e-14
_MOST_BRANCHES = 20_000


@dataclass(frozen=True)
class Condition:
    """One test: its name, whether P passes, and the figures. `decides`: failing it rules a generator out."""

    name: str
    holds: bool
    detail: str


@dataclass(frozen=True, eq=False)
class Embedding:
    """Whether P = exp(G) for a generator G.

    code        "embeddable", "not_embeddable" or "undecided"
    unique      whether G is the only generator; None when not known
    generator   (K, K) G, or None; the principal logarithm where that is a generator
    conditions  necessary conditions, with figures
    reason      the decision in words
    """

    code: str
    unique: bool | None
    generator: Array | None
    conditions: tuple[Condition, ...]
    reason: str


@dataclass(frozen=True, eq=False)
class Root:
    """A matrix for the n-th part of a period.

    matrix     (K, K) stochastic
    how        "generator": exp(G / n); "principal_root": stochastic, no generator; "repaired": see distance
    generator  (K, K) G of the whole period, or None
    unique     whether no other generator exists; None when not known
    distance   of the repaired generator from the logarithm (root of the sum of squares); 0 unless repaired
    residual   largest |matrix^n - P|
    """

    matrix: Array
    how: str
    generator: Array | None
    unique: bool | None
    distance: float
    residual: float


def principal_logarithm(P: ArrayLike) -> Array:
    """Real logarithm of P, shape (K, K), with eigenvalues of imaginary part in (-pi, pi); rows sum to 0.

    Raises NotIdentified when P is singular or has a negative eigenvalue: then there is none.

    >>> principal_logarithm([[0.8, 0.2], [0.3, 0.7]]).round(6)
    array([[-0.277259,  0.277259],
           [ 0.415888, -0.415888]])
    """
    return _logarithm(check_stochastic(P))


def embedding(P: ArrayLike) -> Embedding:
    """Whether a generator stands behind P, and whether it is the only one. Raises CallError for a bad matrix.

    >>> found = embedding([[0.8, 0.2], [0.3, 0.7]])
    >>> found.code, found.unique
    ('embeddable', True)
    """
    matrix = check_stochastic(P)
    conditions = _conditions(matrix)
    failed = [condition for condition in conditions if not condition.holds]
    if failed:
        reason = f"no generator: {failed[0].name} fails ({failed[0].detail})"
        return Embedding("not_embeddable", None, None, conditions, reason)
    try:
        log = _logarithm(matrix)
    except NotIdentified as error:
        return Embedding("undecided", None, None, conditions, str(error))
    return _decide(matrix, log, conditions)


def root(P: ArrayLike, n: int, *, repair_by: str | None = None) -> Root:
    """The matrix of the n-th part of P's period: by its generator, or the principal root where stochastic.

    repair_by: "diagonal", "weighted" or "quasi_optimal" to accept the nearest generator instead; the
    result then states its distance. Without it a matrix that has no such root raises NotIdentified.

    >>> root([[0.8, 0.2], [0.3, 0.7]], 2).matrix.round(6)
    array([[0.882843, 0.117157],
           [0.175736, 0.824264]])
    >>> root([[0.1, 0.9], [0.9, 0.1]], 2)
    Traceback (most recent call last):
    cohortflow.errors.NotIdentified: P has no root that is a chain for 1/2 of the period: ...
    """
    matrix, parts = check_stochastic(P), check_steps(n, name="n", least=1)
    found = embedding(matrix)
    if found.generator is not None:
        return _root(matrix, found.generator, parts, "generator", found.unique, 0.0)
    log = _log_or_refuse(matrix, parts, found.reason)
    if repair_by is not None:
        mended = repair(log, by=repair_by)
        return _root(matrix, mended.generator, parts, "repaired", None, mended.distance)
    candidate = _cleaned(expm(log / parts), matrix)
    if candidate.min() < -TINY:
        raise NotIdentified(
            f"{_no_root(parts)} {found.reason}; the principal root has an entry of {candidate.min():.3g}. "
            "Count the moves again at the shorter period, or accept a repaired generator (repair_by), at a "
            f"distance of {repair(log).distance:.3g} from the logarithm"
        )
    stochastic = _rows_to_one(candidate)
    return Root(
        read_only(stochastic), "principal_root", None, None, 0.0, _residual(stochastic, parts, matrix)
    )


def _log_or_refuse(matrix: Array, parts: int, reason: str) -> Array:
    try:
        return _logarithm(matrix)
    except NotIdentified as error:
        raise NotIdentified(
            f"{_no_root(parts)} {error}. {reason}. Count the moves again at the shorter period"
        ) from error


def _no_root(parts: int) -> str:
    return f"P has no root that is a chain for 1/{parts} of the period:"


def _root(
    matrix: Array, generator: Array, parts: int, how: str, unique: bool | None, distance: float
) -> Root:
    found = _rows_to_one(_cleaned(expm(generator / parts), generator))
    return Root(
        read_only(found), how, read_only(generator), unique, distance, _residual(found, parts, matrix)
    )


def _residual(found: Array, parts: int, matrix: Array) -> float:
    return float(np.abs(np.linalg.matrix_power(found, parts) - matrix).max())


def _rows_to_one(matrix: Array) -> Array:
    positive = np.clip(matrix, 0.0, None)
    return positive / positive.sum(axis=1, keepdims=True)


def _cleaned(values: Array, moves: Array) -> Array:
    """Exactly 0 where the column cannot be reached, whatever rounding left there."""
    return np.where(reachability(moves), values, 0.0)


def _conditions(matrix: Array) -> tuple[Condition, ...]:
    sign, size = np.linalg.slogdet(matrix)
    stays = np.diag(matrix)
    product = float(np.log(stays).sum()) if stays.min() > 0 else -math.inf
    missing = np.argwhere(reachability(matrix) & (matrix == 0)).tolist()
    eigenvalues = np.linalg.eigvals(matrix).astype(complex)
    others = eigenvalues[np.abs(eigenvalues - 1) > TINY]
    return (
        Condition("det P > 0", bool(sign > 0), f"det P = {sign * math.exp(size):.6g}"),
        Condition(
            "det P <= prod p_ii",
            bool(size <= product + TINY),
            f"det P = {sign * math.exp(size):.6g}, prod p_ii = {math.exp(product):.6g}",
        ),
        Condition(
            "reached in one period if ever",
            not missing,
            f"zero, though reached in several periods: {missing[:5]}",
        ),
        Condition(
            "negative eigenvalues in pairs",
            _paired(eigenvalues),
            f"real negative eigenvalues: {np.sort(_negative(eigenvalues)).round(6).tolist()}",
        ),
        Condition(
            "no other eigenvalue of modulus 1",
            bool((np.abs(others) < 1 - TINY).all()),
            f"largest other modulus {np.abs(others).max(initial=0):.6g}",
        ),
        Condition(
            "eigenvalues in Runnenberg's region",
            _in_region(others, len(matrix)),
            f"arguments of the eigenvalues' logarithms for {len(matrix)} states",
        ),
    )


def _negative(eigenvalues: NDArray[np.complex128]) -> Array:
    return eigenvalues[(eigenvalues.real < -TINY) & (np.abs(eigenvalues.imag) < TINY)].real


def _paired(eigenvalues: NDArray[np.complex128]) -> bool:
    # an equal pair comes out of the solver as two close values, or as a complex pair that is not listed here
    values = np.sort(_negative(eigenvalues))
    return len(values) % 2 == 0 and bool((values[1::2] - values[::2] <= _APART).all())


def _in_region(others: NDArray[np.complex128], size: int) -> bool:
    angle = np.abs(np.angle(np.log(others[np.abs(others) > 0])))
    return bool((angle >= (0.5 + 1 / size) * math.pi - _APART).all())


def _logarithm(matrix: Array) -> Array:
    eigenvalues = np.linalg.eigvals(matrix).astype(complex)
    if np.abs(eigenvalues).min() < _SINGULAR:
        raise NotIdentified("P is singular (an eigenvalue is 0), so it has no logarithm")
    if _negative(eigenvalues).size:
        raise NotIdentified(
            f"P has the negative eigenvalue {_negative(eigenvalues).min():.6g}, so its principal logarithm "
            "is not real"
        )
    log = _cleaned(np.real(logm(matrix)), matrix)
    return log - np.diag(log.sum(axis=1))


def _decide(matrix: Array, log: Array, conditions: tuple[Condition, ...]) -> Embedding:
    majority = bool((np.diag(matrix) > 0.5).all())
    others = [] if majority else _other_generators(matrix)
    found = [g for g in (_as_generator(log), *(others or [])) if g is not None]
    if found:
        unique = len(found) == 1 if others is not None else (False if len(found) > 1 else None)
        reason = "the principal logarithm is a generator"
        if _as_generator(log) is None:
            reason = "the principal logarithm is not a generator, but another branch is"
        return Embedding("embeddable", unique, read_only(found[0]), conditions, reason)
    worst = log[~np.eye(len(log), dtype=bool)].min()
    fault = f"the principal logarithm has a negative rate of {worst:.3g}"
    if others is None:
        reason = f"{fault}, and equal eigenvalues or too many branches leave other logarithms open"
        return Embedding("undecided", None, None, conditions, reason)
    why = (
        "every p_ii > 1/2 leaves no other candidate" if majority else "no other real logarithm is a generator"
    )
    return Embedding("not_embeddable", None, None, conditions, f"no generator: {fault}, and {why}")


def _other_generators(matrix: Array) -> list[Array] | None:
    """Generators among the logarithms off the principal branch; None where they cannot all be listed."""
    values, vectors = np.linalg.eig(matrix.astype(complex))
    gaps = np.abs(values[:, None] - values[None, :]) + np.eye(len(values))
    if gaps.min() < _APART:
        return None
    upper = np.flatnonzero(values.imag > TINY).tolist()
    # a rate matrix has |imaginary part of an eigenvalue| <= -trace = -log det P
    bound = -float(np.linalg.slogdet(matrix)[1])
    turns = range(-int(bound / (2 * math.pi)) - 1, int(bound / (2 * math.pi)) + 2)
    if len(turns) ** len(upper) > _MOST_BRANCHES:
        return None
    inverse = np.linalg.inv(vectors)
    found = []
    for choice in itertools.product(turns, repeat=len(upper)):
        logs = np.log(values)
        for place, turn in zip(upper, choice, strict=True):
            logs[place] += 2j * math.pi * turn
            logs[int(np.argmin(np.abs(values - values[place].conj())))] -= 2j * math.pi * turn
        if any(choice) and np.abs(logs.imag).max() <= bound:
            branch = _as_generator(_cleaned(np.real(vectors @ np.diag(logs) @ inverse), matrix))
            found += [] if branch is None else [branch]
    return found


def _as_generator(log: Array) -> Array | None:
    """The logarithm as a generator, rounding removed; None if a rate is truly negative."""
    rates = np.where(np.eye(len(log), dtype=bool), 0.0, log)
    if rates.min() < -TINY:
        return None
    rates = np.clip(rates, 0.0, None)
    return rates - np.diag(rates.sum(axis=1))
