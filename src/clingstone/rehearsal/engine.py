"""Who runs the chunks: this process, all cores, or a Dask cluster. The counts are the same in all three."""

from __future__ import annotations

import copyreg
import os
from collections.abc import Iterator, Sequence
from concurrent.futures import ProcessPoolExecutor
from concurrent.futures.process import BrokenProcessPool
from contextlib import contextmanager
from dataclasses import dataclass
from types import MappingProxyType
from typing import Any, Literal, Protocol, get_args

from clingstone.needs import InputError, NotSupported
from clingstone.run import one_thread

Name = Literal["here", "cores", "dask"]
PATIENCE = 10  # seconds in which a Dask scheduler has to answer
RETRIES = 5  # times that a chunk is given out again when its worker dies


def _read_only(held: dict[Any, Any]) -> MappingProxyType[Any, Any]:
    return MappingProxyType(held)


# Designs hold read-only mappings, which the pickle of the standard library does not know.
copyreg.pickle(MappingProxyType, lambda held: (_read_only, (dict(held),)))


class Work(Protocol):
    """What is shared with every worker: it turns a job into counts, from the job alone."""

    def run(self, job: Any) -> Any: ...


@dataclass(frozen=True)
class Engine:
    """Where chunks run.

    workers : processes of "cores"; all cores when left out. scheduler : address of the Dask scheduler.
    """

    name: Name = "here"
    workers: int | None = None
    scheduler: str | None = None

    def __post_init__(self) -> None:
        if self.name not in get_args(Name):
            listed = ", ".join(repr(n) for n in get_args(Name))
            raise InputError(f"engine={self.name!r} is not one of {listed}", f"Choose one of {listed}.")
        if self.workers is not None and self.workers < 1:
            raise InputError(f"workers={self.workers} is not a number of processes", "Use 1 or more.")
        if self.scheduler is not None and self.name != "dask":
            raise InputError(
                f"a scheduler was named, but the engine is {self.name!r}", 'Use engine="dask" with it.'
            )
        if self.name == "dask" and self.scheduler is None:
            raise InputError(
                "the engine is Dask, but no scheduler was named",
                'Give its address, such as "tcp://10.0.0.1:8786" (scheduler=, --scheduler).',
            )

    @contextmanager
    def open(self, work: Work) -> Iterator[Pool]:
        """A pool that runs jobs of one work, in order."""
        if self.name == "cores":
            count = self.workers or _cores()
            context = _spawned()
            with ProcessPoolExecutor(count, context, _take, (work,)) as pool:
                yield _Cores(pool)
        elif self.name == "dask":
            with _client(str(self.scheduler)) as client:
                yield _Dask(client, client.scatter(work, broadcast=True, hash=False))
        else:
            yield _Here(work)


class Pool(Protocol):
    def map(self, jobs: Sequence[Any]) -> Iterator[Any]:
        """Results in the order of the jobs."""
        ...


@dataclass(frozen=True)
class _Here:
    work: Work

    def map(self, jobs: Sequence[Any]) -> Iterator[Any]:
        for job in jobs:
            with one_thread():
                result = self.work.run(job)
            yield result


@dataclass(frozen=True)
class _Cores:
    pool: ProcessPoolExecutor

    def map(self, jobs: Sequence[Any]) -> Iterator[Any]:
        try:
            yield from self.pool.map(_work, jobs)
        except BrokenProcessPool as error:
            raise NotSupported(
                "a worker process ended before its work was done, perhaps for want of memory",
                "Use fewer workers; with a folder, the chunks that were finished are kept.",
            ) from error


@dataclass(frozen=True)
class _Dask:
    client: Any
    work: Any

    def map(self, jobs: Sequence[Any]) -> Iterator[Any]:
        futures = [self.client.submit(_remote, self.work, job, retries=RETRIES, pure=False) for job in jobs]
        for future in futures:
            yield future.result()


# ---- inside a worker ---------------------------------------------------------------------------

_held: list[Work] = []


def _take(work: Work) -> None:
    _held[:] = [work]


def _work(job: Any) -> Any:
    with one_thread():
        return _held[0].run(job)


def _remote(work: Work, job: Any) -> Any:
    with one_thread():
        return work.run(job)


# ---- outside -----------------------------------------------------------------------------------


def _cores() -> int:
    try:
        return len(os.sched_getaffinity(0))
    except AttributeError:
        return os.cpu_count() or 1


def _spawned() -> Any:
    from multiprocessing import get_context

    return get_context("spawn")  # a forked child would inherit threads of BLAS in an unknown state


@contextmanager
def _client(address: str) -> Iterator[Any]:
    try:
        from distributed import Client
    except ImportError as error:
        raise NotSupported(
            "the engine is Dask, but the package distributed is not installed",
            'Install it with: pip install "clingstone[dask]".',
        ) from error
    try:
        client: Any = Client(address, timeout=PATIENCE, set_as_default=False)  # type: ignore[no-untyped-call]
    except (OSError, ValueError) as error:
        raise InputError(
            f"no Dask scheduler answered at {address} within {PATIENCE} seconds",
            "Look whether it runs and whether the address is right; it reads like tcp://HOST:8786.",
        ) from error
    with client:
        yield client
