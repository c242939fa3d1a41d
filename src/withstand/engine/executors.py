"""Where tasks run: in this process, in worker processes, or on a Dask cluster. All are `concurrent.futures` executors."""

from __future__ import annotations

import importlib
import multiprocessing
import pickle
import signal
from collections.abc import Iterator
from concurrent.futures import Executor, Future, ProcessPoolExecutor
from contextlib import contextmanager
from typing import Any, TypeVar

from threadpoolctl import threadpool_limits

from withstand.engine.block import Active, CellKey, Kernel
from withstand.engine.job import Job
from withstand.engine.ratios import RatioKernel, Ratios
from withstand.engine.tally import Tally
from withstand.errors import InputError

Results = dict[CellKey, list[Tally | None]]

K = TypeVar("K", bound=Kernel)

_kernels: dict[str, Kernel] = {}
"""One kernel a process, kept between tasks of the same job."""


def parcel(job: Job, executor: Executor) -> Job | bytes:
    """The job in the form the executor can take.

    Pickled here, once, rather than by the executor for every task: a job that cannot be pickled is then refused at once,
    where an executor may hang on it.

    Raises
    ------
    InputError
        If the job cannot cross process borders, as with a function defined in a notebook or a lambda.
    """
    if isinstance(executor, InProcess):
        return job
    try:
        return pickle.dumps(job)
    except (pickle.PicklingError, AttributeError, TypeError) as error:
        raise InputError(
            f"the procedures or departures cannot be sent to worker processes ({error})",
            where="workers",
            remedy="Define your functions in an importable module, or use workers=1.",
        ) from error


def run_task(job: Job | bytes, token: str, task: int, active: Active) -> Results:
    """Run one task in whatever process this is, with linear algebra held to one thread.

    Parameters
    ----------
    job : Job or bytes
        What to do, pickled where it crossed a process border.
    token : str
        Names the job within the run, so that a worker keeps its kernel.
    task : int
        Which range of blocks.
    active : mapping
        Procedures to judge, by world.
    """
    kernel = _kernel(Kernel, job, token)
    with threadpool_limits(1):
        return kernel.run(_blocks(kernel, task), active)


def run_ratios(job: Job | bytes, token: str, task: int, active: Active) -> Ratios:
    """The ratios of one task, as `run_task`."""
    kernel = _kernel(RatioKernel, job, token)
    with threadpool_limits(1):
        return kernel.ratios(_blocks(kernel, task), active)


def _kernel(kind: type[K], job: Job | bytes, token: str) -> K:
    known = _kernels.get(token)
    if not isinstance(known, kind):
        _kernels.clear()
        known = _kernels[token] = kind(pickle.loads(job) if isinstance(job, bytes) else job)
    return known


def _blocks(kernel: Kernel, task: int) -> range:
    first = task * kernel.job.blocks_per_task
    return range(first, first + kernel.job.blocks_per_task)


class InProcess(Executor):
    """Runs every task at once in this process: for one worker, and for code that cannot cross process borders."""

    def submit(self, fn: Any, /, *args: Any, **kwargs: Any) -> Future[Any]:
        """Run now; the future is done when this returns."""
        future: Future[Any] = Future()
        try:
            future.set_result(fn(*args, **kwargs))
        except BaseException as error:
            if not isinstance(error, Exception):
                raise
            future.set_exception(error)
        return future


class Workers(ProcessPoolExecutor):
    """Worker processes that leave interrupts to the driver from their first moment on.

    A terminal sends Ctrl-C to workers too. The driver alone ends the run, and closes them.
    """

    def __init__(self, workers: int) -> None:
        # A fresh interpreter a worker: a forked one would inherit the state of threaded libraries.
        super().__init__(workers, mp_context=multiprocessing.get_context("spawn"), initializer=_ignore_interrupts)

    def submit(self, fn: Any, /, *args: Any, **kwargs: Any) -> Future[Any]:
        """Submit; a worker that this starts inherits that interrupts are held back, until its initializer ignores them."""
        with _interrupts_held_back():
            return super().submit(fn, *args, **kwargs)


def _load() -> None:
    """Nothing: to find this function, a worker imports the engine."""


def _ignore_interrupts() -> None:
    signal.signal(signal.SIGINT, signal.SIG_IGN)


@contextmanager
def _interrupts_held_back() -> Iterator[None]:
    """Hold back SIGINT in this thread, where the system can; one that comes meanwhile is delivered afterwards."""
    if not hasattr(signal, "pthread_sigmask"):
        yield
        return
    before = signal.pthread_sigmask(signal.SIG_BLOCK, {signal.SIGINT})
    try:
        yield
    finally:
        signal.pthread_sigmask(signal.SIG_SETMASK, before)


@contextmanager
def open_executor(workers: int = 1, cluster: str | None = None) -> Iterator[Executor]:
    """Open an executor.

    Parameters
    ----------
    workers : int
        Worker processes; 1 runs in this process.
    cluster : str, optional
        Address of a Dask scheduler, used instead.

    Raises
    ------
    InputError
        If the cluster's library is not installed or the address does not answer.
    """
    if cluster is not None:
        with _dask(cluster) as executor:
            yield executor
    elif workers == 1:
        yield InProcess()
    else:
        pool = Workers(workers)
        for _ in range(workers):
            pool.submit(_load)  # they start and import while the driver is at the exact answers
        try:
            yield pool
        finally:
            pool.shutdown(wait=True, cancel_futures=True)


@contextmanager
def _dask(address: str) -> Iterator[Executor]:
    try:
        # By name, so that the types are the same to a checker with and without the library.
        distributed: Any = importlib.import_module("distributed")
    except ImportError as error:
        raise InputError(
            "a cluster needs the library 'distributed', which is not installed",
            where="--cluster",
            remedy='Install it with: pip install "withstand[cluster]".',
        ) from error
    try:
        client = distributed.Client(address, timeout="10s")
    except (OSError, ValueError, TimeoutError) as error:
        raise InputError(
            f"no Dask scheduler answers at '{address}' ({error})",
            where="--cluster",
            remedy="Start one, or leave --cluster out to use this machine.",
        ) from error
    try:
        yield client.get_executor(pure=False)
    finally:
        client.close()
