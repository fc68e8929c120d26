"""Yardsticks for the tests of cohortflow.markov: random chains, and derivatives by complex step."""

from collections.abc import Callable

import numpy as np
from hypothesis import strategies as st

# methods.md, section H: states N R L D C, the last an exit; the test chain of the accuracy study
LIFECYCLE = np.array(
    [
        [0.00, 0.50, 0.05, 0.30, 0.15],
        [0.00, 0.72, 0.10, 0.14, 0.04],
        [0.00, 0.10, 0.85, 0.04, 0.01],
        [0.00, 0.15, 0.01, 0.64, 0.20],
        [0.00, 0.00, 0.00, 0.00, 1.00],
    ]
)


def positive(size: int, seed: int = 1) -> np.ndarray:
    """A chain in which every move has a chance."""
    return np.random.default_rng(seed).dirichlet(np.ones(size), size)


@st.composite
def chains(draw, least: int = 2, most: int = 6) -> np.ndarray:
    """Any stochastic matrix, zeros and all: reducible, periodic and absorbing ones come up often."""
    size = draw(st.integers(least, most))
    weights = draw(
        st.lists(st.lists(st.integers(0, 4), min_size=size, max_size=size), min_size=size, max_size=size)
    )
    counts = np.array(weights, dtype=float)
    counts[counts.sum(axis=1) == 0, 0] = 1.0
    return counts / counts.sum(axis=1, keepdims=True)


@st.composite
def losing(draw, least: int = 2, most: int = 5) -> np.ndarray:
    """Moves inside a chain with one exit that every state has a chance of taking."""
    matrix = draw(chains(least, most))
    kept = draw(st.lists(st.integers(20, 95), min_size=len(matrix), max_size=len(matrix)))
    return matrix * np.array(kept)[:, None] / 100


def closed_off(Q: np.ndarray) -> np.ndarray:
    """The chain (m+1 states) that Q describes, its missing mass moved to one exit at the end."""
    size = len(Q)
    P = np.zeros((size + 1, size + 1))
    P[:size, :size] = Q
    P[:size, size] = 1 - Q.sum(axis=1)
    P[size, size] = 1.0
    return P


def complex_step(function: Callable[[np.ndarray], np.ndarray], matrix: np.ndarray) -> np.ndarray:
    """d function_t / d matrix_ij, shape (T, K, K), to working precision: Im f(P + i h E_ij) / h, h = 1e-40.

    Squire & Trapp (1998), SIAM Review 40(1). `function` must be written without conj, abs or comparison.
    """
    size, h = len(matrix), 1e-40
    out = []
    for i in range(size):
        for j in range(size):
            moved = matrix.astype(complex)
            moved[i, j] += 1j * h
            out.append(np.atleast_1d(function(moved)).imag / h)
    return np.array(out).T.reshape(-1, size, size)


def along_rows(gradient: np.ndarray) -> np.ndarray:
    """Gradients (T, K, K) seen only along directions that keep row sums: their row means taken off."""
    return gradient - gradient.mean(axis=2, keepdims=True)
