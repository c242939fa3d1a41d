"""Orders of cells and levels of which every beginning is as balanced as can be."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from withstand.study.design import Floats, Ints


def crossing(sizes: Sequence[int]) -> Ints:
    """Cells of a factorial crossing in an order of which every beginning is balanced in every factor.

    Parameters
    ----------
    sizes : sequence of int
        Levels of each factor.

    Returns
    -------
    ndarray of shape (cells, factors)
        Level indices. Each next cell is the first, in reading order, whose levels have been used least so far.
    """
    cells = np.indices(tuple(sizes)).reshape(len(sizes), -1).T
    used = [np.zeros(size) for size in sizes]
    left = np.ones(len(cells), dtype=bool)
    order = np.empty(len(cells), dtype=np.int64)
    for place in range(len(cells)):
        burden = sum(used[j][cells[:, j]] * sizes[j] for j in range(len(sizes)))
        chosen = int(np.argmin(np.where(left, burden, np.inf)))
        order[place] = chosen
        left[chosen] = False
        for j in range(len(sizes)):
            used[j][cells[chosen, j]] += 1.0
    return np.asarray(cells[order], dtype=np.int64)


def spread_evenly(probabilities: Floats, n: int) -> Ints:
    """Codes (n,) with counts as near to the shares as can be at every length: the level most behind its share comes next."""
    counts = np.zeros(len(probabilities))
    codes = np.empty(n, dtype=np.int64)
    for i in range(n):
        codes[i] = int(np.argmax(probabilities * (i + 1) - counts))
        counts[codes[i]] += 1.0
    return codes
