# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Smoothness of a joint path over its knots, and the banded systems it makes.

"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, TypeAlias

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import solveh_banded
from scipy.sparse import coo_array, csr_array, diags_array

from prioritized_tracking.core.rotation import Array

IndexArray: TypeAlias = NDArray[np.int64]


@dataclass(frozen=True, kw_only=True)
class Ends:
    """
    What holds at the two ends of the path.

    Attributes
    ----------
    rest : bool
        The arm stands still before the first knot and after the last: no velocity, no acceleration.
    winding : (n,) rad or None
        The path is closed: the last knot is the first plus this vector (multiples of 2π), and is
        not an unknown. None: the path is open.

    """

    rest: bool
    winding: Array | None


class Smoothness:
    """
    Third derivative of a joint path over its knots, and the banded matrix of its square.

    Parameters
    ----------
    times : (N + 1,) s, increasing; closed paths have N unknown knots, open ones N + 1.
    n : int
        Joints.
    ends : Ends

    """

    def __init__(self, times: Array, n: int, ends: Ends) -> None:
        self.closed = ends.winding is not None
        self.count = len(times) - 1 if self.closed else len(times)
        self.n = n
        index, instants, laps = _stencils(times, self.count, ends)
        coefficients = _third_difference(instants)
        row = np.repeat(np.arange(len(index)), 4)
        shape = (len(index), self.count)
        self._D: Any = csr_array(coo_array((coefficients.ravel(), (row, index.ravel())), shape=shape))
        self._offset = np.zeros((len(index), n))
        if ends.winding is not None:
            self._offset = (coefficients * laps).sum(axis=1)[:, None] * ends.winding
        self._length = (instants[:, 3] - instants[:, 0]) / 3.0
        square = (self._D.T @ diags_array(self._length) @ self._D).tocoo()
        self._position = _fold(self.count) if self.closed else np.arange(self.count)
        self._fill(square)

    def _fill(self, square: Any) -> None:
        """
        Write the square, the same for each joint, into upper banded storage.

        """
        a, b = self._position[square.coords[0]], self._position[square.coords[1]]
        upper = a <= b
        a, b, value = a[upper], b[upper], square.data[upper]
        self.band = int((b - a).max()) * self.n + self.n - 1
        self._banded = np.zeros((self.band + 1, self.count * self.n))
        for i in range(self.n):
            self._banded[self.band - (b - a) * self.n, b * self.n + i] = value

    def cost(self, q: Array) -> float:
        """
        Integral of the squared third derivative, q (count, n) rad.

        """
        return float(self._length @ np.square(self._D @ q + self._offset).sum(axis=1))

    def gradient(self, q: Array) -> Array:
        """
        Half the gradient of ``cost``, (count, n).

        """
        gradient: Array = self._D.T @ (self._length[:, None] * (self._D @ q + self._offset))
        return gradient

    def solve(self, blocks: Array, weight: float, right: Array) -> Array:
        """
        Solve (blocks + weight · square) x = right.

        Parameters
        ----------
        blocks : (count, n, n) symmetric blocks on the diagonal, one per knot.
        weight : float
        right : (count, n)

        Returns
        -------
        (count, n) array

        Raises
        ------
        scipy.linalg.LinAlgError
            When the matrix is not positive definite.

        """
        matrix = weight * self._banded
        column = self._position * self.n
        for i in range(self.n):
            for j in range(i, self.n):
                matrix[self.band + i - j, column + j] += blocks[:, i, j]
        flat = np.zeros((self.count, self.n))
        flat[self._position] = right
        x = solveh_banded(matrix, flat.ravel(), overwrite_ab=True, overwrite_b=True, check_finite=False)
        solution: Array = x.reshape(self.count, self.n)[self._position]
        return solution


def _stencils(times: Array, count: int, ends: Ends) -> tuple[IndexArray, Array, Array]:
    """
    Four consecutive knots for each third difference: index, time and lap of each.

    An end at rest is continued by three copies of its knot; a closed path by its other end.

    """
    first = -3 if ends.rest and ends.winding is None else 0
    last = count - 1 - first if ends.winding is None else count + 2
    extended = np.arange(first, last + 1)
    if ends.winding is not None:
        period = times[-1] - times[0]
        laps = extended // count
        index = extended % count
        instants = times[index] + period * laps
    else:
        index = np.clip(extended, 0, count - 1)
        before, after = times[1] - times[0], times[-1] - times[-2]
        beyond = np.minimum(extended, 0) * before + np.maximum(extended - count + 1, 0) * after
        instants = times[index] + beyond
        laps = np.zeros(len(extended), dtype=np.int64)
    window = np.arange(len(extended) - 3)[:, None] + np.arange(4)
    return index[window], instants[window], laps[window].astype(float)


def _third_difference(instants: Array) -> Array:
    """
    Coefficients of the third derivative of the cubic through four points (6 × divided difference).

    """
    gaps = instants[:, :, None] - instants[:, None, :] + np.eye(4)
    coefficients: Array = 6.0 / gaps.prod(axis=2)
    return coefficients


def _fold(count: int) -> IndexArray:
    """
    Position of each knot of a ring in an order that keeps neighbours close: 0, N−1, 1, N−2, ….

    """
    order = np.empty(count, dtype=np.int64)
    order[0::2] = np.arange((count + 1) // 2)
    order[1::2] = count - 1 - np.arange(count // 2)
    position = np.empty(count, dtype=np.int64)
    position[order] = np.arange(count)
    return position
