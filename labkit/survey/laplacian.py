"""The second smallest eigenvalue of a weighted graph's Laplacian, on arrays."""

import math
from collections.abc import Callable

import numpy as np

from labkit.compiled import kept
from labkit.survey.elimination import eliminate

DENSE = 1_000  # vertices up to which the matrix is written out
# Elimination stops when the graph left has so many times the entries, or after so many steps: then the graph
# has no small separators, and conjugate gradients solve it faster.
FILL = 1.5
WORK = 400_000_000
SOLVES = 300
STEPS = 5_000
BASIS, KEPT = 40, 16  # vectors of the Krylov space, and how many a restart keeps
BASIS_NUMBERS = 100_000_000  # numbers that it may hold
EXACT = 1e-13
SETTLED = 1e-9


def second_smallest(indptr: np.ndarray, neighbour: np.ndarray, weight: np.ndarray) -> float:
    """Return the second smallest eigenvalue of the Laplacian of a connected graph.

    Parameters
    ----------
    indptr, neighbour, weight : numpy.ndarray
        The graph by rows, symmetric, without loops: int64 of shape (vertices + 1,), then int64 and float64
        of shape (entries,), every weight above 0 and none so small that products of two vanish. At least
        two vertices.

    Returns
    -------
    float
        Right to a relative 1e-8, NaN where that could not be had.

    Notes
    -----
    It is 1 over the largest eigenvalue of the Laplacian's pseudo-inverse, which elimination without
    subtraction gives to nearly full relative accuracy (`labkit.survey.elimination`), even when the weights
    differ by twenty orders of magnitude. Small graphs: the pseudo-inverse is written out. Others: Lanczos'
    method on it, restarted with its best vectors (K. Wu and H. Simon, "Thick-restart Lanczos method for large
    symmetric eigenvalue problems", SIAM J. Matrix Anal. Appl. 22, 2000), until the residual proves an
    eigenvalue within a relative 1e-9. Road-like graphs are eliminated to the end. Where elimination would
    fill up, as on random graphs, conjugate gradients solve for the vertices left; then the eigenvector is
    corrected with residuals from the graph itself, and the value is taken when the correction does not
    matter any more.

    NaN comes from spectra so dense that 300 solutions do not settle the eigenvalue (a ring of 100,000
    vertices around a hub), or from hard-to-solve graphs: no small separators, yet nearly falling apart.
    """
    if len(indptr) - 1 <= DENSE:
        return _from_dense(indptr, neighbour, weight)
    return _from_lanczos(indptr, neighbour, weight)


def _from_dense(indptr: np.ndarray, neighbour: np.ndarray, weight: np.ndarray) -> float:
    size = len(indptr) - 1
    joined, pivot = np.zeros((size, size)), np.empty(size)
    joined[np.repeat(np.arange(size), np.diff(indptr)), neighbour] = weight
    kept(eliminate_dense)(joined, pivot)
    # The last vertex is grounded. The inverse of a unit triangle with nothing positive beside its diagonal
    # is found without a subtraction, too.
    factor = np.linalg.inv(np.eye(size - 1) - np.triu(joined[:-1, :-1], 1))
    inverse = np.zeros((size, size))
    inverse[:-1, :-1] = (factor / pivot[:-1]) @ factor.T
    inverse -= inverse.mean(axis=0)
    inverse -= inverse.mean(axis=1, keepdims=True)
    return 1.0 / float(np.linalg.eigvalsh((inverse + inverse.T) / 2.0)[-1])


def eliminate_dense(joined, pivot):
    """Eliminate all vertices but the last; row i then holds, right of the diagonal, shares of pivot i."""
    count = len(pivot)
    for vertex in range(count - 1):
        total = 0.0
        for other in range(vertex + 1, count):
            total += joined[vertex, other]
        pivot[vertex] = total
        for other in range(vertex + 1, count):
            share = joined[vertex, other] / total
            if share > 0.0:
                for partner in range(vertex + 1, count):
                    joined[other, partner] += share * joined[vertex, partner]
        for other in range(vertex + 1, count):
            joined[vertex, other] /= total


def _from_lanczos(indptr: np.ndarray, neighbour: np.ndarray, weight: np.ndarray) -> float:
    size = len(indptr) - 1
    elimination = eliminate(indptr, neighbour, weight, int(FILL * len(weight)), WORK)

    def solved(vector: np.ndarray) -> np.ndarray | None:
        """Apply the pseudo-inverse; None when it takes too long."""
        x = vector - vector.mean()
        steps = elimination.solve(x, EXACT, STEPS)
        return x - x.mean() if steps < STEPS else None

    value, vector = _largest(solved, size)
    if elimination.taken == size - 1 or math.isnan(value):
        return 1.0 / value
    order = elimination.order
    rows = np.repeat(np.arange(size), np.diff(indptr))
    x = np.empty(size)
    x[order] = vector
    for _ in range(5):
        flow = weight * (x[rows] - x[neighbour])
        image = np.bincount(rows, flow, minlength=size)
        square = float(x @ x)
        value = _energy(x, rows, neighbour, weight) / square
        correction = solved((image - value * x)[order])
        if correction is None:
            break
        step = np.empty(size)
        step[order] = correction
        if _energy(step, rows, neighbour, weight) <= SETTLED * value * square:
            return value
        x -= step
    return math.nan


def _energy(x: np.ndarray, rows: np.ndarray, neighbour: np.ndarray, weight: np.ndarray) -> float:
    """Return x · Laplacian · x, as a sum of squares."""
    difference = x[rows] - x[neighbour]
    return float(weight @ (difference * difference)) / 2.0


def _largest(apply: Callable[[np.ndarray], np.ndarray | None], size: int) -> tuple[float, np.ndarray]:
    """Return the largest eigenvalue of a symmetric operator on vectors of sum 0, and its vector.

    NaN when `SOLVES` applications do not settle it, or `apply` gives None.
    """
    width = max(12, min(BASIS, BASIS_NUMBERS // size))
    keep = min(KEPT, width // 2)
    basis, projected = np.empty((width + 1, size)), np.zeros((width, width))
    # Any start does that favours no eigenvector; the same numbers in every run.
    start = np.random.Generator(np.random.SFC64(1)).random(size) - 0.5
    start -= start.mean()
    basis[0] = start / np.linalg.norm(start)
    last = 0
    for _ in range(SOLVES):
        image = apply(basis[last])
        if image is None:
            break
        known = basis[: last + 1]
        along = known @ image
        image -= along @ known
        again = known @ image
        image -= again @ known
        projected[last, : last + 1] = projected[: last + 1, last] = along + again
        length = float(np.linalg.norm(image))
        values, vectors = np.linalg.eigh(projected[: last + 1, : last + 1])
        if length * abs(vectors[-1, -1]) <= SETTLED * values[-1]:
            return float(values[-1]), vectors[:, -1] @ known
        image /= length
        if last + 1 == width:
            basis[:keep] = vectors[:, -keep:].T @ known
            projected[:] = 0.0
            projected[range(keep), range(keep)] = values[-keep:]
            last = keep - 1
        last += 1
        image -= image.mean()
        basis[last] = image / np.linalg.norm(image)
    return math.nan, basis[0]
