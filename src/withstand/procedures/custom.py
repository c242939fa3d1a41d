"""A procedure of the user's own: any Python callable, one replicate at a time."""

from __future__ import annotations

import ctypes
import hashlib
import inspect
import math
import pickle
import queue
import threading
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from functools import partial
from types import CodeType, ModuleType
from typing import Any

import numpy as np

from withstand.errors import InputError, ScenarioError
from withstand.procedures.base import Fitter, Procedure
from withstand.procedures.fit import Fit, Flags, IntervalFit
from withstand.procedures.sample import Sample
from withstand.study.design import Design, Floats
from withstand.study.focus import Focus, FocusKind

Answers = tuple[float, float, float, float]
"""Estimate, low and high end of the interval, p-value."""


@dataclass(frozen=True)
class Custom(Procedure):
    """A callable that fits one data set.

    Parameters
    ----------
    name : str
        What people see.
    fit : callable
        `fit(y, X)` returns estimate, low, high, p for the focal quantity: a point estimate, the ends of its interval at the
        study's level, and the p-value of its null value. y is (n,), X is (n, p) with the columns of the model formula, rows in
        analysis order (time order where the study has one). p may be None: the test then rejects where the interval misses.
        To run in worker processes it must be importable: defined in a module, not in a notebook cell.
    focus : str, optional
        The focal quantity it answers for; needed where the study has several.
    seconds : float
        Longest time one call may take.
    with_design : bool
        Call `fit(y, X, design)`; the design has `groups`, `order`, `columns` and `factors` in the order of the rows.

    Notes
    -----
    A call that raises, takes too long, or returns anything that is not a finite number counts as a failure. The callable sees
    responses at the reference coefficients, and again in the null world and at the effect: up to three calls a replicate. Its
    arrays are its own; writing to them harms nothing.
    """

    name: str  # type: ignore[misc]  # every callable has a name of its own, where a built-in procedure has its class's
    fit: Callable[..., Any]
    focus: str | None = None
    seconds: float = 10.0
    with_design: bool = False

    family = "custom"
    title = "the user's own procedure"
    formula = "a Python callable"
    source = "the user"
    equivariant = False
    claims_variance = False

    def __post_init__(self) -> None:
        where = "Custom"
        if not isinstance(self.name, str) or not self.name.strip():
            raise ScenarioError(f"the name of a custom procedure is {self.name!r}", where=where, remedy="Give it a name.")
        if not callable(self.fit):
            raise ScenarioError(
                f"fit of '{self.name}' is {self.fit!r}, which cannot be called",
                where=where,
                remedy="Give a function fit(y, X) that returns estimate, low, high, p.",
            )
        if not (self.seconds > 0.0 and math.isfinite(self.seconds)):
            raise ScenarioError(
                f"seconds of '{self.name}' is {self.seconds!r}", where=where, remedy="Give a positive number of seconds."
            )

    @property
    def identity(self) -> str:
        """The name."""
        return self.name

    @property
    def key(self) -> str:
        """The name, with a hash of the code and of what it carries, so that stored results of other code are not taken up.

        Notes
        -----
        Functions that the callable looks up in its module are known by name only: after a change there, run afresh.
        """
        told = f"{self.focus}|{self.seconds:g}|{self.with_design}|".encode() + fingerprint(self.fit)
        return f"{self.name} {hashlib.sha256(told).hexdigest()[:16]}"

    def not_applicable(self, design: Design, focus: Focus) -> str | None:
        """See Procedure."""
        if self.focus is not None and focus.name != self.focus:
            return f"not applicable, because '{self.name}' answers for '{self.focus}'"
        if focus.k > 1:
            return "not applicable, because a custom procedure gives a single estimate"
        return None

    def prepare(self, design: Design, foci: Sequence[Focus], level: float) -> Fitter:
        """See Procedure.

        Raises
        ------
        ScenarioError
            If it has to answer for more than one focal quantity.
        """
        if len(foci) > 1:
            names = ", ".join(f"'{focus.name}'" for focus in foci)
            raise ScenarioError(
                f"'{self.name}' gives one answer, and the study asks for {names}",
                where="Custom",
                remedy=f"Say which it is: Custom('{self.name}', fit, focus='{foci[0].name}').",
            )
        alpha, null = 1.0 - level, None if foci[0].kind is FocusKind.NEW else float(foci[0].null[0])

        def fit(sample: Sample) -> list[Fit]:
            response = sample.response
            answers = np.full((4, sample.width), np.nan)
            with Timed(self.seconds) as timed:
                for replicate in range(sample.width):
                    arguments: list[Any] = [response[:, replicate].copy(), design.X.copy()]
                    if self.with_design:
                        arguments.append(design)
                    answers[:, replicate] = timed.call(partial(_answers, self.fit, arguments, null))
            return [_fit_of(answers, alpha)]

        return fit


def _answers(fit: Callable[..., Any], arguments: list[Any], null: float | None) -> Answers:
    """One call, its result as four numbers; where p is None the interval decides."""
    estimate, low, high, p = fit(*arguments)
    estimate, low, high = float(estimate), float(low), float(high)
    if p is None:
        p = 1.0 if null is None or low <= null <= high else 0.0
    return estimate, low, high, float(p)


def _fit_of(answers: Floats, alpha: float) -> IntervalFit:
    estimate, low, high, p = answers
    failed: Flags = ~(np.isfinite(answers).all(axis=0) & (low <= high) & (p >= 0.0) & (p <= 1.0))
    estimate, low, high = (np.where(failed, 0.0, values) for values in (estimate, low, high))
    rejected: Flags = p <= alpha
    return IntervalFit(estimate[None], failed if failed.any() else None, low, high, test=lambda value: rejected)


class _TookTooLong(BaseException):
    """Raised inside a call that is out of time; no ordinary `except Exception` stops it."""


class Timed:
    """Runs calls one after another in a thread that is abandoned when a call takes too long.

    Parameters
    ----------
    seconds : float
        Longest time one call may take.

    Notes
    -----
    Signals would do only in a main thread, and cluster workers have none to give. Code that is stuck outside the interpreter
    cannot be stopped from within; its thread is left behind and a new one taken.
    """

    def __init__(self, seconds: float) -> None:
        self.seconds = seconds
        self._thread: threading.Thread | None = None
        self._calls: queue.SimpleQueue[Callable[[], Answers] | None] = queue.SimpleQueue()
        self._results: queue.SimpleQueue[Answers] = queue.SimpleQueue()

    def __enter__(self) -> Timed:
        return self

    def __exit__(self, *told: object) -> None:
        if self._thread is not None:
            self._calls.put(None)

    def call(self, function: Callable[[], Answers]) -> Answers:
        """The result of a call; not-a-numbers where it raises or takes too long."""
        if self._thread is None:
            self._calls, self._results = queue.SimpleQueue(), queue.SimpleQueue()
            self._thread = threading.Thread(target=_serve, args=(self._calls, self._results), daemon=True)
            self._thread.start()
        self._calls.put(function)
        try:
            return self._results.get(timeout=self.seconds)
        except queue.Empty:
            thread, self._thread = self._thread, None
            self._calls.put(None)
            if thread.ident is not None:
                ctypes.pythonapi.PyThreadState_SetAsyncExc(ctypes.c_ulong(thread.ident), ctypes.py_object(_TookTooLong))
            return NO_ANSWER


NO_ANSWER: Answers = (math.nan, math.nan, math.nan, math.nan)


def _serve(calls: queue.SimpleQueue[Callable[[], Answers] | None], results: queue.SimpleQueue[Answers]) -> None:
    """Run calls until told to stop."""
    try:
        while (function := calls.get()) is not None:
            try:
                answer = function()
            except _TookTooLong:
                return
            except BaseException:  # whatever a stranger's code raises, exits included, is a failure of its replicate
                answer = NO_ANSWER
            results.put(answer)
    except _TookTooLong:
        return


def fingerprint(function: Callable[..., Any]) -> bytes:
    """A hash of a callable's code and of what it carries along (defaults, closure, arguments of a partial, attributes).

    Raises
    ------
    InputError
        If it carries something that has no stable form.
    """
    digest = hashlib.sha256()
    _feed(function, digest.update, set())
    return digest.digest()


Update = Callable[[bytes], None]


def _feed(item: Any, update: Update, seen: set[int]) -> None:
    """Hash code by its instructions, everything else by its pickled form."""
    if id(item) in seen:
        return
    inner = getattr(item, "__func__", item)
    if isinstance(item, ModuleType):
        update(item.__name__.encode())
    elif isinstance(item, (tuple, list)):
        for part in item:
            _feed(part, update, seen)
    elif isinstance(item, partial):
        _feed((item.func, item.args, sorted(item.keywords.items())), update, seen)
    elif isinstance(getattr(inner, "__code__", None), CodeType):
        seen.add(id(item))
        cells = tuple(cell.cell_contents for cell in inner.__closure__ or ())
        _feed_code(inner.__code__, update)
        _feed((inner.__defaults__, inner.__kwdefaults__, getattr(item, "__self__", None), cells), update, seen)
    else:
        try:
            update(pickle.dumps(item, protocol=4))
        except (pickle.PicklingError, AttributeError, TypeError) as error:
            raise InputError(
                f"a custom procedure carries an object of type '{type(item).__name__}', which has no stable form ({error})",
                where="Custom",
                remedy="Give it plain values and arrays to carry.",
            ) from error
        code = getattr(inspect.getattr_static(type(item), "__call__", None), "__code__", None)
        if isinstance(code, CodeType):
            _feed_code(code, update)


def _feed_code(code: CodeType, update: Update) -> None:
    update(code.co_code)
    update(repr(code.co_names).encode())
    for constant in code.co_consts:
        if isinstance(constant, CodeType):
            _feed_code(constant, update)
        else:
            # Sets print in an order that changes from process to process.
            update(repr(sorted(map(repr, constant)) if isinstance(constant, frozenset) else constant).encode())
