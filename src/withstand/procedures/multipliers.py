"""What bootstrap and permutation procedures share: random weights drawn slab by slab, ranks, and batched Wald statistics."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator
from typing import TypeVar

import numpy as np

from withstand.errors import ScenarioError
from withstand.procedures.fit import Flags
from withstand.procedures.sample import Sample
from withstand.study.design import Floats, Ints

SLAB = 50
"""Replicates that share one set of draws. Sharing turns the bootstrap into matrix products. It also ties replicates together,
which Monte Carlo errors take to be independent: with 50, rejection rates of blocks of 500 varied as binomial ones do to within
12 % of the variance (10 and 30 rows, normal and exponential errors), 16 % with 6 clusters."""

DRAWS = 399
"""Default number of draws B*; (B* + 1) times 0.05, 0.025 and 0.01 are whole numbers."""

D = TypeVar("D")

_TIE = 1e-9
"""Statistics that are equal but for rounding count as equal."""


def slabs(sample: Sample, name: str, draw: Callable[[np.random.Generator], D]) -> Iterator[tuple[slice, D]]:
    """Slices of the replicates, each with draws of its own from the procedure's stream; the same at every call."""
    generator = sample.noise.procedure_generator(name)
    for start in range(0, sample.width, SLAB):
        yield slice(start, min(start + SLAB, sample.width)), draw(generator)


def check_draws(draws: int, name: str) -> None:
    """Raise ScenarioError unless the number of draws can carry a test at 5 %."""
    if draws < 19:
        raise ScenarioError(
            f"draws is {draws}",
            where=f"procedures.use: {name}.draws",
            remedy="Give 19 or more, best with (draws + 1) a multiple of 100.",
        )


def allowed_exceedances(draws: int, alpha: float, name: str) -> int:
    """How many of the drawn statistics may reach the observed one while the test still rejects.

    Notes
    -----
    The p-value is (1 + exceedances) / (1 + draws), so that a test at alpha has at most that size (Dwass 1957).

    Raises
    ------
    ScenarioError
        If so few draws can never reject at this level.
    """
    allowed = math.floor(alpha * (draws + 1) + _TIE) - 1
    if allowed < 0:
        raise ScenarioError(
            f"{draws} draws can never reject at {alpha:g}",
            where=f"procedures.use: {name}.draws",
            remedy=f"Give {math.ceil(1.0 / alpha) - 1} or more.",
        )
    return allowed


def exceeded(drawn: Floats, observed: Floats, allowed: int) -> Flags:
    """Whether the test rejects: at most `allowed` of the drawn statistics (r, B*) reach the observed one (r,)."""
    return np.asarray(np.count_nonzero(drawn >= observed[:, None] * (1.0 - _TIE), axis=1) <= allowed)


def kth_largest(drawn: Floats, allowed: int) -> Floats:
    """The value (r,) that a statistic must exceed to be reached by at most `allowed` of the drawn ones (r, B*)."""
    place = drawn.shape[1] - 1 - allowed
    return np.asarray(np.partition(drawn, place, axis=1)[:, place])


def rademacher(generator: np.random.Generator, shape: tuple[int, int]) -> Floats:
    """Signs, each with probability one half."""
    count = shape[0] * shape[1]
    bits = np.unpackbits(np.frombuffer(generator.bytes((count + 7) // 8), dtype=np.uint8), count=count)
    return np.asarray(2.0 * bits - 1.0, dtype=np.float64).reshape(shape)


_WEBB = np.sqrt(np.array([0.5, 1.0, 1.5]))


def webb(generator: np.random.Generator, shape: tuple[int, int]) -> Floats:
    """Six points, plus or minus the roots of 1/2, 1 and 3/2, equally likely (Webb 2014): mean 0, variance 1."""
    table = np.concatenate([-_WEBB, _WEBB])
    return np.asarray(table[generator.integers(0, 6, shape)])


MULTIPLIERS: dict[str, Callable[[np.random.Generator, tuple[int, int]], Floats]] = {"rademacher": rademacher, "webb": webb}


def check_multipliers(law: str, name: str) -> None:
    """Raise ScenarioError unless the law of the weights is known."""
    if law not in MULTIPLIERS:
        raise ScenarioError(
            f"weights is '{law}'", where=f"procedures.use: {name}.weights", remedy='Give "rademacher" or "webb".'
        )


def ratio(squares: Floats, over: Floats) -> Floats:
    """A statistic, infinite where the variance below is 0."""
    with np.errstate(divide="ignore", invalid="ignore"):
        values = squares / over
    return np.asarray(np.where(np.isnan(values), np.inf, values))


def without_residuals(sample: Sample) -> Flags | None:
    """Replicates that the model fits without residuals: there is nothing to draw from. None where there are none."""
    found: Flags = np.asarray(sample.residual_sum <= 0.0)
    return found if found.any() else None


def wald(distance: Floats, covariance: Floats) -> Floats:
    """Quadratic form d' V^-1 d, with no division by k.

    Parameters
    ----------
    distance : ndarray of shape (k, ...)
        Estimates minus the hypothesised values.
    covariance : ndarray of shape (k, k, ...)
        Claimed covariances.

    Returns
    -------
    ndarray of shape (...)
        Infinite where the covariance is singular and the distance is not 0 there.

    Notes
    -----
    Forward substitution in the Cholesky factor, for all replicates at once; k is small.
    """
    k = len(distance)
    if k == 1:
        return ratio(distance[0] ** 2, covariance[0, 0])
    factor = np.zeros_like(covariance)
    total = np.zeros(distance.shape[1:])
    solved: list[Floats] = []
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        for i in range(k):
            for j in range(i):
                inner = covariance[i, j] - np.sum(factor[i, :j] * factor[j, :j], axis=0)
                factor[i, j] = np.where(factor[j, j] > 0.0, inner / factor[j, j], 0.0)
            pivot = covariance[i, i] - np.sum(factor[i, :i] ** 2, axis=0)
            factor[i, i] = np.sqrt(np.maximum(pivot, 0.0))
            rest = distance[i] - sum((factor[i, j] * solved[j] for j in range(i)), np.zeros_like(total))
            solved.append(np.where(rest == 0.0, 0.0, rest / factor[i, i]))
            total += solved[i] ** 2
    return np.where(np.isnan(total), np.inf, total)


def indicator_sums(codes: Ints, rows: Floats, count: int) -> Floats:
    """How draws with replacement load the rows of what is drawn from.

    Parameters
    ----------
    codes : ndarray of shape (B*, n)
        Draws from 0..count-1.
    rows : ndarray of shape (n, q)
        What each place in a draw is multiplied by.
    count : int
        Number of things drawn from.

    Returns
    -------
    ndarray of shape (q, B*, count)
        Sums of rows over the places that hold each drawn thing.
    """
    draws = len(codes)
    flat = (codes + count * np.arange(draws)[:, None]).ravel()
    return np.stack([np.bincount(flat, np.tile(row, draws), minlength=draws * count).reshape(draws, count) for row in rows.T])
