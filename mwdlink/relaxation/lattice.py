"""Interpolation from values on an even lattice: the one trick behind the fast forward map.

A kernel whose shape is the same for every chain is one curve of ln(t/tau). On times that are even
in ln t a chain only shifts that curve, so a column of the survival matrix is a short fixed sum of
shifted windows of one table.
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np

POINTS = 8
SUM_POINTS = 10


def stencil(position: np.ndarray, points: int = POINTS) -> tuple[np.ndarray, np.ndarray]:
    """Which lattice points, and how much of each, give the value at a position (Lagrange).

    Parameters
    ----------
    position : ndarray of shape (n,)
        In units of the lattice step.
    points : int
        How many lattice points to use, even.

    Returns
    -------
    first : ndarray of shape (n,), int
        Index of the first lattice point used.
    weight : ndarray of shape (n, points)
        Rows sum to 1.
    """
    x = np.asarray(position, dtype=float)
    whole = np.floor(x)
    # powers of the fraction times a fixed matrix: the polynomials of all points at once
    powers = np.vander(x - whole, points, increasing=True)
    return whole.astype(np.intp) - (points // 2 - 1), powers @ _polynomials(points)


@lru_cache(maxsize=8)
def _polynomials(points: int) -> np.ndarray:
    """Coefficients of the Lagrange polynomials over nodes 1 - points/2 ... points/2."""
    nodes = np.arange(points) - (points // 2 - 1.0)
    columns = []
    for k in range(points):
        others = np.delete(nodes, k)
        columns.append(np.poly(others)[::-1] / np.prod(nodes[k] - others))
    return np.array(columns).T


def even_step(x: np.ndarray) -> float | None:
    """Step of an evenly spaced ascending list, or None."""
    if x.size < 2:
        return None
    step = (x[-1] - x[0]) / (x.size - 1)
    even = x[0] + step * np.arange(x.size)
    return float(step) if step > 0 and np.max(np.abs(x - even)) < 1e-9 * step * x.size else None


def shifted_columns(table: np.ndarray, start: np.ndarray, stride: int, count: int) -> np.ndarray:
    """Values of a table at start_j + stride k, for every column j and row k.

    Parameters
    ----------
    table : ndarray of shape (m,) or (n, m)
        One curve on a lattice, or one a column.
    start : ndarray of shape (n,)
        Position of row 0 in the table, at least POINTS/2 steps inside it at both ends.
    stride : int
        Lattice steps a row.
    count : int
        Rows.

    Returns
    -------
    ndarray of shape (count, n)
    """
    first, weight = stencil(start)
    length = (count - 1) * stride + POINTS
    if table.ndim == 1:
        window = np.lib.stride_tricks.sliding_window_view(table, length)[first]
    else:
        window = np.array([row[i : i + length] for row, i in zip(table, first, strict=True)])
    out = np.zeros((start.size, count))
    for k in range(POINTS):
        out += weight[:, k : k + 1] * window[:, k : k + (count - 1) * stride + 1 : stride]
    return out.T


def window_sums(
    table: np.ndarray, start: np.ndarray, amount: np.ndarray, stride: int, count: int
) -> np.ndarray:
    """Sum over j of amount_j times the table at start_j + stride k, for every row k.

    The columns of `shifted_columns` times amounts, without the columns: amounts move to lattice
    points and one correlation does the rest. Accurate to 1e-12 of the table's largest value, not
    of each value.

    Parameters
    ----------
    table : ndarray of shape (m,)
    start, amount : ndarray of shape (n,)
        Positions of row 0, at least SUM_POINTS/2 steps inside the table at both ends.
    stride, count : int

    Returns
    -------
    ndarray of shape (count,)
    """
    low = int(np.floor(start.min())) - SUM_POINTS // 2
    size = int(np.ceil(start.max())) + SUM_POINTS // 2 + 1 - low
    shares = spread(start - low, amount, size, SUM_POINTS)
    reach = low + size + (count - 1) * stride
    return np.correlate(table[low:reach], shares, "valid")[::stride]


def spread(position: np.ndarray, amount: np.ndarray, size: int, points: int = POINTS) -> np.ndarray:
    """Amounts at any positions moved to lattice points, the transpose of interpolation.

    Sums of smooth functions over the positions are kept to the accuracy of the interpolation.

    Parameters
    ----------
    position, amount : ndarray of shape (n,)
        Positions in units of the lattice step, at least points/2 steps inside both ends.
    size : int
        Lattice points, from 0 on.

    Returns
    -------
    ndarray of shape (size,)
    """
    first, weight = stencil(position, points)
    index = first[:, None] + np.arange(points)
    return np.bincount(index.ravel(), (weight * amount[:, None]).ravel(), size)
