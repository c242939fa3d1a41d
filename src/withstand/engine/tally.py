"""What is kept of a block: sums of products of per-replicate features, with each other and with the baseline's.

Every measure is a smooth function of feature means, so the matrix of products gives its value, its Monte Carlo error and the
error of its shift from the baseline by the delta method. Tallies only add.
"""

from __future__ import annotations

from dataclasses import dataclass
from enum import IntEnum

import numpy as np

from withstand.errors import NumericalError
from withstand.procedures.fit import Fit, Flags
from withstand.study.design import Floats


class Feature(IntEnum):
    """Rows of the feature matrix of one block, procedure and focal quantity; lengths in error SDs."""

    ONE = 0
    OK = 1
    """1 where the procedure gave an answer; all others are 0 where it did not."""
    ERROR = 2
    """Estimate minus truth; for a new response, prediction minus response."""
    SQUARE = 3
    VARIANCE = 4
    WIDTH = 5
    COVERED = 6
    BELOW = 7
    ABOVE = 8
    REJECTED = 9
    POWERED = 10


FEATURES = len(Feature)

_UPPER = np.triu_indices(2 * FEATURES)


@dataclass(frozen=True, eq=False)
class Tally:
    """Additive sums over independent units: replicates or, where every block has its own design, blocks.

    Parameters
    ----------
    replicates : int
        Replicates in the sums.
    units : int
        Independent units in the sums.
    products : ndarray of shape (2 FEATURES, 2 FEATURES)
        Sums over units of products of their features: those of the world first, then those of the baseline. The features of
        a block are the means over its replicates.
    """

    replicates: int
    units: int
    products: Floats

    def __add__(self, other: Tally) -> Tally:
        """Merge with the tally of other units of the same kind."""
        return Tally(self.replicates + other.replicates, self.units + other.units, self.products + other.products)

    @classmethod
    def of_block(cls, pair: Floats, fresh: bool, *, baseline: bool = False) -> Tally:
        """The tally of one block.

        Parameters
        ----------
        pair : ndarray of shape (2 FEATURES, B)
            Features of the world above those of the baseline.
        fresh : bool
            Whether the block has a design of its own.
        baseline : bool
            Whether the world is the baseline itself, so that the halves of `pair` are equal.

        Raises
        ------
        NumericalError
            If a feature is not finite: a procedure passed a failure off as an answer.
        """
        width = pair.shape[1]
        if fresh:
            means = pair.mean(axis=1)
            products, units = np.outer(means, means), 1
        elif baseline:
            own = pair[:FEATURES]
            products, units = np.tile(own @ own.T, (2, 2)), width
        else:
            products, units = pair @ pair.T, width
        if not np.isfinite(products).all():
            raise NumericalError("a procedure returned values that are not finite without flagging them as failures")
        return cls(width, units, products)

    def pack(self) -> Floats:
        """One flat array, for storage."""
        return np.concatenate([np.array([self.replicates, self.units], dtype=float), self.products[_UPPER]])

    @classmethod
    def unpack(cls, flat: Floats) -> Tally:
        """The inverse of `pack`."""
        products = np.zeros((2 * FEATURES, 2 * FEATURES))
        products[_UPPER] = flat[2:]
        products.T[_UPPER] = flat[2:]
        return cls(int(flat[0]), int(flat[1]), products)


@dataclass(frozen=True, eq=False)
class Questions:
    """What is asked of the fits of one focal quantity in one block, in the units of the fit.

    Parameters
    ----------
    truth : ndarray of shape (k,) or (1, B)
        True value; random for new responses.
    null : ndarray of shape (k,) or None
        A value that is true, tested for size; None where no test is defined.
    alternative : ndarray of shape (k,) or None
        A value that is off by the stated effect, tested for power.
    unit : float
        Error SD in the units of the fit.
    """

    truth: Floats
    null: Floats | None
    alternative: Floats | None
    unit: float = 1.0


def record(out: Floats, fit: Fit, questions: Questions, *, sized: Fit | None = None, powered: Fit | None = None) -> None:
    """Write the features of one fit.

    Parameters
    ----------
    out : ndarray of shape (FEATURES, B)
        Where to write.
    fit : Fit
        The procedure's answer in the world whose truth is asked about.
    questions : Questions
        What is asked.
    sized, powered : Fit, optional
        Answers in the null world and in the effect world, for procedures that need them drawn separately.
    """
    out[Feature.ONE] = 1.0
    out[Feature.OK] = 1.0
    scalar = len(fit.estimate) == 1
    missed = fit.misses(questions.truth)
    if scalar:
        error = out[Feature.ERROR]
        np.subtract(fit.estimate[0], questions.truth[0], out=error)
        if questions.unit != 1.0:
            error /= questions.unit
        np.multiply(error, error, out=out[Feature.SQUARE])
        _length(out[Feature.VARIANCE], fit.variance, questions.unit**2)
        _length(out[Feature.WIDTH], fit.width, questions.unit)
    else:
        out[Feature.ERROR : Feature.WIDTH + 1] = 0.0
    if missed is not None:
        below, above = missed
        out[Feature.BELOW] = below
        out[Feature.ABOVE] = above
        np.subtract(1.0, out[Feature.BELOW], out=out[Feature.COVERED])
        out[Feature.COVERED] -= out[Feature.ABOVE]
    elif scalar:
        out[Feature.COVERED : Feature.ABOVE + 1] = 0.0
    else:
        out[Feature.BELOW : Feature.ABOVE + 1] = 0.0
        out[Feature.COVERED] = ~fit.rejects(questions.truth)
    if sized is None and fit.dual and questions.null is questions.truth:
        np.subtract(1.0, out[Feature.COVERED], out=out[Feature.REJECTED])
    else:
        _test(out[Feature.REJECTED], sized or fit, questions.null)
    _test(out[Feature.POWERED], powered or fit, questions.alternative)
    failed = _any_failed(fit, sized, powered)
    if failed is not None and failed.any():
        out[Feature.OK :, failed] = 0.0


def record_failure(out: Floats) -> None:
    """Write a block in which the procedure had no answer at all."""
    out[:] = 0.0
    out[Feature.ONE] = 1.0


def _length(row: Floats, values: Floats | None, unit: float) -> None:
    if values is None:
        row[:] = 0.0
    elif unit == 1.0:
        row[:] = values
    else:
        np.divide(values, unit, out=row)


def _test(row: Floats, fit: Fit, value: Floats | None) -> None:
    row[:] = 0.0 if value is None else fit.rejects(value)


def _any_failed(*fits: Fit | None) -> Flags | None:
    flags = [fit.failed for fit in fits if fit is not None and fit.failed is not None]
    return np.logical_or.reduce(flags) if flags else None
