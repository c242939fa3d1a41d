"""What a procedure gives back for one block and one focal quantity.

Shapes: k rows of the focal quantity, B replicates. Everything is on the scale of the sample's response.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from withstand.study.design import Floats

Flags = NDArray[np.bool_]


@dataclass(frozen=True, eq=False)
class Fit(ABC):
    """Estimates with what is needed to judge their interval and test.

    Parameters
    ----------
    estimate : ndarray of shape (k, B)
        Point estimates.
    failed : ndarray of bool, shape (B,), or None
        Replicates in which the procedure gave no answer; None when it cannot fail. Values there are ignored.
    """

    estimate: Floats
    failed: Flags | None

    @property
    @abstractmethod
    def variance(self) -> Floats | None:
        """Claimed variance of the estimate (B,); None for joint quantities or where the procedure claims none."""

    @property
    @abstractmethod
    def width(self) -> Floats | None:
        """Width of the interval (B,); None where there is no interval."""

    @abstractmethod
    def misses(self, truth: Floats) -> tuple[Flags, Flags] | None:
        """Whether the whole interval lies below, and above, the truth, each (B,).

        `truth` is (k,), or (1, B) for new responses. None where there is no interval (tests only, joint regions).
        """

    @property
    def dual(self) -> bool:
        """Whether the test rejects exactly where the interval misses, so that one answers for both."""
        return False

    @abstractmethod
    def rejects(self, value: Floats) -> Flags:
        """Whether the test of 'the focal quantity is `value` (k,)' rejects, (B,).

        For a joint quantity the confidence region covers `value` where this is false.
        """

    def ratio(self, value: Floats) -> Floats | None:
        """Test statistic of 'the focal quantity is `value` (k,)' over its critical value, (B,): the test rejects above 1.

        None where the critical value depends on the value asked about, as with bootstraps that impose the null hypothesis.
        """
        return None


@dataclass(frozen=True, eq=False)
class WaldFit(Fit):
    """Estimate, covariance and a critical value: t-type intervals, F-type joint tests.

    Parameters
    ----------
    covariance : ndarray of shape (k, k, B)
        Claimed covariance of the estimates.
    critical : float or ndarray of shape (B,)
        k = 1: multiplies the standard error. k > 1: bounds the quadratic form divided by k.
    """

    covariance: Floats
    critical: float | Floats

    @property
    def variance(self) -> Floats | None:
        """See Fit."""
        return self.covariance[0, 0] if len(self.estimate) == 1 else None

    @property
    def dual(self) -> bool:
        """See Fit."""
        return len(self.estimate) == 1

    @cached_property
    def half(self) -> Floats:
        """Half width of the interval, (B,)."""
        return np.asarray(np.sqrt(self.covariance[0, 0]) * self.critical)

    @property
    def width(self) -> Floats | None:
        """See Fit."""
        return 2.0 * self.half if len(self.estimate) == 1 else None

    def misses(self, truth: Floats) -> tuple[Flags, Flags] | None:
        """See Fit."""
        if len(self.estimate) > 1:
            return None
        error = self.estimate[0] - truth[0]
        half = self.half
        return error < -half, error > half

    def rejects(self, value: Floats) -> Flags:
        """See Fit."""
        distance = self.estimate - value.reshape(len(self.estimate), -1)
        if len(self.estimate) == 1:
            return np.asarray(np.abs(distance[0]) > self.half)
        return np.asarray(wald_statistic(distance, self.covariance) > self.critical)

    def ratio(self, value: Floats) -> Floats | None:
        """See Fit."""
        distance = self.estimate - value.reshape(len(self.estimate), -1)
        if len(self.estimate) == 1:
            return _over(np.abs(distance[0]), self.half)
        return np.asarray(wald_statistic(distance, self.covariance) / self.critical)


@dataclass(frozen=True, eq=False)
class IntervalFit(Fit):
    """An interval given by its ends, with a test that need not be dual to it.

    Parameters
    ----------
    low, high : ndarray of shape (B,), or None
        Ends of the interval; None for procedures that only test.
    claimed : ndarray of shape (B,), or None
        Claimed variance of the estimate.
    test : callable, optional
        Maps a value (k,) to rejections (B,). Without it the interval decides.
    scaled : ndarray of shape (B,), optional
        Test statistics over their critical value, where the test asks about one value and no other.
    """

    low: Floats | None = None
    high: Floats | None = None
    claimed: Floats | None = None
    test: Callable[[Floats], Flags] | None = None
    scaled: Floats | None = None

    @property
    def variance(self) -> Floats | None:
        """See Fit."""
        return self.claimed

    @property
    def dual(self) -> bool:
        """See Fit."""
        return self.test is None

    @property
    def width(self) -> Floats | None:
        """See Fit."""
        return None if self.low is None or self.high is None else self.high - self.low

    def misses(self, truth: Floats) -> tuple[Flags, Flags] | None:
        """See Fit."""
        if self.low is None or self.high is None:
            return None
        return self.high < truth[0], self.low > truth[0]

    def rejects(self, value: Floats) -> Flags:
        """See Fit."""
        if self.test is not None:
            return self.test(value)
        missed = self.misses(value.reshape(1, -1))
        if missed is None:
            raise TypeError("a fit needs an interval or a test")
        return np.asarray(missed[0] | missed[1])

    def ratio(self, value: Floats) -> Floats | None:
        """See Fit; the distance from the estimate over that of the end on the same side."""
        if self.test is not None or self.low is None or self.high is None:
            return self.scaled
        distance = value[0] - self.estimate[0]
        return _over(np.abs(distance), np.where(distance > 0.0, self.high - self.estimate[0], self.estimate[0] - self.low))


def _over(distance: Floats, half: Floats) -> Floats:
    """Distances in half widths; infinite beyond an interval without width."""
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.asarray(np.where(distance > 0.0, distance / np.maximum(half, 0.0), 0.0))


def wald_statistic(distance: Floats, covariance: Floats) -> Floats:
    """D' V^-1 d / k for every replicate.

    Parameters
    ----------
    distance : ndarray of shape (k, B)
        Estimates minus the hypothesised values.
    covariance : ndarray of shape (k, k, B)
        Claimed covariances; singular ones give inf.

    Returns
    -------
    ndarray of shape (B,)
        The F-type statistic.
    """
    k = len(distance)
    matrices = np.moveaxis(covariance, 2, 0)
    vectors = distance.T[:, :, None]
    sound = np.linalg.det(matrices) > 0.0
    statistic = np.full(distance.shape[1], np.inf)
    if sound.any():
        solved = np.linalg.solve(matrices[sound], vectors[sound])
        statistic[sound] = np.einsum("bij,bij->b", vectors[sound], solved) / k
    return statistic
