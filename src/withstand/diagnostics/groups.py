"""Statistics that ask whether the rows of one group go together."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from withstand import tails
from withstand.diagnostics.base import Diagnostic, Statistic, register
from withstand.procedures.sample import Sample
from withstand.study.design import Design, Floats


@register
@dataclass(frozen=True)
class GroupF(Diagnostic):
    """One-way F of the residuals over the groups."""

    name = "group-f"
    title = "F of the group means of the residuals"
    null = "errors are not shared within groups"
    formula = "mean square of group means over mean square within groups, F(G - 1, n - G)"
    source = "Fisher (1925), applied to residuals; common practice"
    needs = "groups"

    def p_values(self, design: Design, values: Floats) -> Floats:
        """Upper tail of F, as if the residuals were independent."""
        count = design.group_count
        return np.asarray(tails.f_sf(values, count - 1, design.n - count))

    def prepare(self, design: Design) -> Statistic:
        """See Diagnostic."""
        if design.groups is None:
            raise TypeError("the design has no groups")
        codes, count, n = design.groups, design.group_count, design.n
        # Rows of this matrix turn residuals into group sums over root group size, whose squares add up to the between part.
        sums = (codes == np.arange(count)[:, None]) / np.sqrt(np.bincount(codes))[:, None]

        def statistic(sample: Sample) -> Floats:
            e = sample.residuals
            parts = sums @ e
            centre = e.sum(axis=0) ** 2 / n
            groups = np.einsum("gb,gb->b", parts, parts)
            between, within = groups - centre, sample.residual_sum - groups
            return np.asarray((between / (count - 1)) / (within / (n - count)))

        return statistic
