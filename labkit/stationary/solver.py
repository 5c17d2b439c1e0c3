"""Solving Laplacian systems: heights whose flows carry what each server has too much."""

from collections.abc import Callable
from typing import Any

import numpy as np
import scipy.linalg
import scipy.sparse
import scipy.sparse.csgraph
import scipy.sparse.linalg

# Servers up to which the matrix is written out, and up to which it is factorised whatever its shape.
DENSE, SMALL = 1_200, 4_000
# A fleet that a search by breadth cuts into layers no wider than this has a factor that is sparse, too.
WIDEST = 2_000
TOLERANCE = 1e-6
STEPS = 3_000


class Solver:
    """Solves Laplacian · x = y for conductances on the pairs of a connected network.

    Three ways, by what the network is like: a dense factor for few servers; a sparse factor for road-like
    networks, whose small separators keep it sparse; else conjugate gradients, which converge fast just where
    separators are large.

    Parameters
    ----------
    first, second : int64 arrays, shape (pairs,)
    conductance : float64 array, shape (pairs,), above 0
    size : int
        Number of servers.
    """

    def __init__(self, first: np.ndarray, second: np.ndarray, conductance: np.ndarray, size: int) -> None:
        diagonal = np.bincount(first, conductance, minlength=size)
        diagonal += np.bincount(second, conductance, minlength=size)
        half = scipy.sparse.coo_array((conductance, (first, second)), shape=(size, size)).tocsr()
        joined = half + half.T
        self.matrix: Any = (scipy.sparse.diags_array(diagonal) - joined).tocsr()
        self.diagonal = diagonal
        self._solve = self._way(joined)

    def __call__(self, divergence: np.ndarray) -> np.ndarray:
        """Return heights of sum 0 for each row of `divergence`, shape (..., servers), each of sum 0."""
        rows = np.atleast_2d(divergence)
        rows = rows - rows.mean(axis=1, keepdims=True)
        height = self._solve(rows.T).T
        height = height - height.mean(axis=1, keepdims=True)
        return height.reshape(divergence.shape)

    def _way(self, joined: Any) -> Callable[[np.ndarray], np.ndarray]:
        size = self.diagonal.size
        if size <= DENSE:
            factor = scipy.linalg.cho_factor(self.matrix.toarray()[1:, 1:])
            return lambda right: grounded(scipy.linalg.cho_solve(factor, right[1:]))
        if size <= SMALL or widest_layer(joined) <= WIDEST:
            sparse = scipy.sparse.linalg.splu(
                self.matrix[1:, 1:].tocsc(),
                permc_spec="MMD_AT_PLUS_A",
                diag_pivot_thresh=0.0,
                options={"SymmetricMode": True},
            )
            return lambda right: grounded(sparse.solve(np.ascontiguousarray(right[1:])))
        return lambda right: self.descend(right, STEPS, TOLERANCE)

    def descend(self, right: np.ndarray, steps: int, tolerance: float) -> np.ndarray:
        """Solve for the columns of `right` by conjugate gradients, preconditioned by the diagonal.

        Parameters
        ----------
        right : float64 array, shape (servers, columns)
        steps : int
            Most steps; a few give what is local.
        tolerance : float
            Stop when every residual is so much shorter than its right side.

        Returns
        -------
        float64 array, shape (servers, columns)
        """
        scale = self.diagonal[:, None]
        x, residual = np.zeros_like(right), right.copy()
        direction = residual / scale
        product = np.einsum("ij,ij->j", residual, direction)
        goal = tolerance**2 * np.einsum("ij,ij->j", right, right)
        for _ in range(steps):
            image = self.matrix @ direction
            curvature = np.einsum("ij,ij->j", direction, image)
            length = np.divide(product, curvature, out=np.zeros_like(product), where=curvature > 0)
            x += length * direction
            residual -= length * image
            if np.all(np.einsum("ij,ij->j", residual, residual) <= goal):
                break
            turned = residual / scale
            new = np.einsum("ij,ij->j", residual, turned)
            direction = (
                turned + np.divide(new, product, out=np.zeros_like(new), where=product > 0) * direction
            )
            product = new
        return x

    def resistances(self, first: np.ndarray, second: np.ndarray) -> np.ndarray:
        """Return the effective resistance between the servers of each pair; for few servers."""
        inverse = np.zeros((self.diagonal.size,) * 2)
        inverse[1:, 1:] = scipy.linalg.inv(self.matrix.toarray()[1:, 1:])
        own = np.diag(inverse)
        return own[first] + own[second] - 2.0 * inverse[first, second]


def grounded(height: np.ndarray) -> np.ndarray:
    """Return heights with the first server's, 0, put back in front."""
    return np.concatenate([np.zeros((1, height.shape[1])), height])


def widest_layer(joined: Any) -> int:
    """Return how many servers are at one distance from an outermost server, at most."""
    far = int(scipy.sparse.csgraph.breadth_first_order(joined, 0, return_predecessors=False)[-1])
    distance = scipy.sparse.csgraph.dijkstra(joined, unweighted=True, indices=far)
    return int(np.bincount(distance.astype(np.int64)).max())
