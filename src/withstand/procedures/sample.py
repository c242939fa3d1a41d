"""One block of replicates in one world, with everything procedures share computed once, when first asked for."""

from __future__ import annotations

from collections.abc import Callable, Hashable
from functools import cached_property
from typing import Any, Protocol, TypeVar, cast

import numpy as np

from withstand.study.design import Design, Floats

V = TypeVar("V")


class Noise(Protocol):
    """What procedures may ask of the block's noise: randomness of their own (bootstrap weights), shared by all worlds."""

    width: int

    def procedure_generator(self, name: str) -> np.random.Generator:
        """A generator at the start of the stream of the named procedure in this block."""


class Sample:
    """Responses of B replicates on one design.

    Equivariant procedures look at the errors alone: adding X beta to the response adds beta to their estimates. Others ask
    for `response`.

    Parameters
    ----------
    design : Design
        The rows.
    errors : ndarray of shape (n, B)
        Errors in error SDs. Not written to.
    noise : Noise
        Where procedures get randomness of their own.
    coefficients : ndarray of shape (p,), optional
        Coefficients of this world, in response units; needed for `response`.
    error_sd : float
        Error SD, in response units.
    buffers : dict, optional
        Work arrays that live as long as the kernel, keyed by use; avoids an allocation a block.
    """

    def __init__(
        self,
        design: Design,
        errors: Floats,
        noise: Noise,
        *,
        coefficients: Floats | None = None,
        error_sd: float = 1.0,
        buffers: dict[str, Floats] | None = None,
    ) -> None:
        self.design = design
        self.errors = errors
        self.noise = noise
        self.coefficients = coefficients
        self.error_sd = error_sd
        self._buffers = {} if buffers is None else buffers
        self._shared: dict[Hashable, Any] = {}

    @property
    def width(self) -> int:
        """Replicates B."""
        return self.errors.shape[1]

    def buffer(self, use: str) -> Floats:
        """A reusable work array of the shape of `errors`; the content is undefined."""
        array = self._buffers.get(use)
        if array is None or array.shape != self.errors.shape:
            array = self._buffers[use] = np.empty_like(self.errors)
        return array

    def once(self, key: Hashable, compute: Callable[[], V]) -> V:
        """`compute()` at the first call with this key, its stored result afterwards."""
        if key not in self._shared:
            self._shared[key] = compute()
        return cast(V, self._shared[key])

    @cached_property
    def projections(self) -> Floats:
        """Q'e, (p, B)."""
        return np.asarray(self.design.Q.T @ self.errors)

    @cached_property
    def residuals(self) -> Floats:
        """Least-squares residuals (n, B), in error SDs. Not to be written to."""
        fitted = np.matmul(self.design.Q, self.projections, out=self.buffer("residuals"))
        return np.subtract(self.errors, fitted, out=fitted)

    @cached_property
    def squared_residuals(self) -> Floats:
        """Squared least-squares residuals (n, B). Not to be written to."""
        if "residuals" in self.__dict__:
            return np.multiply(self.residuals, self.residuals, out=self.buffer("squared residuals"))
        # Many procedures look at the squares alone: made in place, they leave the block and one work array in the cache.
        squares = np.matmul(self.design.Q, self.projections, out=self.buffer("squared residuals"))
        np.subtract(self.errors, squares, out=squares)
        return np.multiply(squares, squares, out=squares)

    @cached_property
    def residual_sum(self) -> Floats:
        """Residual sum of squares, (B,)."""
        return np.asarray(np.ones(self.design.n) @ self.squared_residuals)

    @cached_property
    def weighted(self) -> Sample:
        """The sample of the fit with known weights: rows multiplied by the square root of their weight."""
        design = self.design.weighted
        root = np.sqrt(np.asarray(self.design.weights))
        return Sample(design, self.errors * root[:, None], self.noise)

    @cached_property
    def response(self) -> Floats:
        """Responses (n, B), in response units, for procedures that are not equivariant."""
        if self.coefficients is None:
            raise TypeError("this sample has no coefficients; only equivariant procedures can use it")
        mean = self.design.X @ self.coefficients
        return np.asarray(mean[:, None] + self.error_sd * self.errors)
