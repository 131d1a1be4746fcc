"""Finished chunks kept in a folder, so that a rehearsal that was stopped goes on where it was."""

from __future__ import annotations

import hashlib
import json
import os
from collections.abc import Iterator, Mapping, Sequence
from pathlib import Path
from typing import Any, Generic, Protocol, TypeVar
from zipfile import BadZipFile

import numpy as np
import numpy.typing as npt

from clingstone.needs import InputError
from clingstone.rehearsal.engine import Pool
from clingstone.rehearsal.study import Job

R = TypeVar("R")
Arrays = Mapping[str, npt.NDArray[Any]]


class Shelved(Protocol[R]):
    """Work whose results can be put on a shelf.

    kind : begins the names of its files. identity : of all that the results depend on. pack, unpack : a
    result as plain arrays and back; None for arrays that are no result of the job.
    """

    @property
    def kind(self) -> str: ...

    @property
    def identity(self) -> tuple[object, ...]: ...

    def pack(self, result: R) -> Arrays: ...

    def unpack(self, job: Job, held: Arrays) -> R | None: ...


class Shelf(Generic[R]):
    """One file per chunk, written whole or not at all, under a label that says which plan they belong to."""

    def __init__(self, folder: Path, work: Shelved[R]) -> None:
        self.folder, self.work = folder, work
        folder.mkdir(parents=True, exist_ok=True)
        path = folder / f"{work.kind}-plan.json"
        label = {"plan": fingerprint(work.identity)}
        if path.exists():
            if json.loads(path.read_text(encoding="utf-8")) != label:
                raise InputError(
                    f"{folder} holds another rehearsal: of other data, settings, remedies or truths",
                    "Name another folder, or remove that one to begin again.",
                )
        else:
            _write(path, json.dumps(label, indent=1).encode())

    def get(self, job: Job) -> R | None:
        """The result of a chunk, or None when it was not finished or its file is damaged."""
        try:
            with np.load(self._path(job), allow_pickle=False) as held:
                return self.work.unpack(job, held)
        except (OSError, ValueError, KeyError, EOFError, BadZipFile):
            return None

    def put(self, job: Job, result: R) -> None:
        from io import BytesIO

        held = BytesIO()
        np.savez(held, allow_pickle=False, **self.work.pack(result))
        _write(self._path(job), held.getvalue())

    def _path(self, job: Job) -> Path:
        return self.folder / f"{self.work.kind}-{job.truth}-{job.chunk}-{job.size}.npz"


def results(pool: Pool, jobs: Sequence[Job], shelf: Shelf[R] | None) -> Iterator[tuple[Job, R]]:
    """Every job with its result, in order: from the shelf, or run now and put there."""
    held = {} if shelf is None else {job: found for job in jobs if (found := shelf.get(job)) is not None}
    fresh = pool.map([job for job in jobs if job not in held])
    for job in jobs:
        result = held.pop(job, None)
        if result is None:
            result = next(fresh)
            if shelf is not None:
                shelf.put(job, result)
        yield job, result


def fingerprint(identity: tuple[object, ...]) -> str:
    """Of arrays by their bytes and of the rest by its words."""
    held = hashlib.sha256()
    for one in identity:
        held.update(
            np.ascontiguousarray(one).tobytes() if isinstance(one, np.ndarray) else repr(one).encode()
        )
    return held.hexdigest()


def _write(path: Path, data: bytes) -> None:
    beside = path.with_name(f".{path.name}.{os.getpid()}")
    beside.write_bytes(data)
    beside.replace(path)
