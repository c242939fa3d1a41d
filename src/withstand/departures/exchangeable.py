"""Equal correlation within groups, as shared effects: no n x n matrix is formed."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from withstand.departures.base import Noise, NoiseStream
from withstand.departures.law import Law
from withstand.study.design import Floats, Ints

_PIECE = 1 << 14
"""Elements handled at a time, to stay in the second-level cache."""


@dataclass(frozen=True, eq=False)
class Exchangeable:
    """u_i = sqrt(icc) v_group(i) + sqrt(1 - icc) e_i.

    Parameters
    ----------
    icc : float
        Correlation of two rows of one group, in [0, 1).
    codes : ndarray of shape (n,)
        Groups 0..G-1.
    """

    icc: float
    codes: Ints

    def apply(self, scores: Floats, law: Law | None, noise: Noise, out: Floats) -> Floats:
        """See Dependence; the law is that of the group effects v and of the row effects e."""
        effects = noise.normal(NoiseStream.GROUPS, int(self.codes.max()) + 1)
        effects = np.sqrt(self.icc) * (effects if law is None else law(effects))
        if law is None:
            np.multiply(scores, np.sqrt(1.0 - self.icc), out=out)
        else:
            law(scores, out)
            out *= np.sqrt(1.0 - self.icc)
        rows = max(1, _PIECE // out.shape[1])
        for start in range(0, self.codes.size, rows):
            out[start : start + rows] += effects[self.codes[start : start + rows]]
        return out

    def correlate(self, M: Floats) -> Floats:
        """See Dependence."""
        sums = np.stack([np.bincount(self.codes, weights=column) for column in M.T], axis=1)
        return np.asarray((1.0 - self.icc) * M + self.icc * sums[self.codes])
