"""Finished chunks kept in a folder, so that a rehearsal that was stopped goes on where it was."""

from __future__ import annotations

import hashlib
import json
import os
from pathlib import Path
from zipfile import BadZipFile

import numpy as np

from clingstone.needs import InputError
from clingstone.rehearsal.study import Counts, Job, Study

LABEL = "rehearsal-plan.json"


class Shelf:
    """One file per chunk, written whole or not at all, under a label that says which plan they belong to."""

    def __init__(self, folder: Path, study: Study, replicates: int) -> None:
        self.folder, self.shape = folder, study.empty().sums.shape
        label = {"plan": fingerprint(study), "chunk": study.chunk}
        folder.mkdir(parents=True, exist_ok=True)
        path = folder / LABEL
        if path.exists():
            if json.loads(path.read_text(encoding="utf-8")) != label:
                raise InputError(
                    f"{folder} holds another rehearsal: of other data, settings, remedies or truths",
                    "Name another folder, or remove that one to begin again.",
                )
        else:
            _write(path, json.dumps(label, indent=1).encode())

    def get(self, job: Job) -> Counts | None:
        """The counts of a chunk, or None when it was not finished or its file is damaged."""
        try:
            with np.load(self._path(job), allow_pickle=False) as held:
                found = Counts(int(held["size"]), held["sums"], held["apart"])
        except (OSError, ValueError, KeyError, EOFError, BadZipFile):
            return None
        return found if found.sums.shape == self.shape and found.size == job.size else None

    def put(self, job: Job, counts: Counts) -> None:
        from io import BytesIO

        held = BytesIO()
        np.savez(held, size=counts.size, sums=counts.sums, apart=counts.apart)
        _write(self._path(job), held.getvalue())

    def _path(self, job: Job) -> Path:
        return self.folder / f"{job.truth}-{job.chunk}-{job.size}.npz"


def fingerprint(study: Study) -> str:
    """Of all that the counts depend on: design, y's own fit, truths, contenders, seed and confidence."""
    settings, response = study.fits.run.settings, study.fits.response
    held = hashlib.sha256()
    for array in (response.design.Q, response.coef, response.ss):
        held.update(np.ascontiguousarray(array).tobytes())
    words = [settings.seed, settings.confidence, study.terms]
    words += [(t.name, t.node, t.theta, t.sigma2, t.different) for t in study.truths]
    words += [(c.remedy.id, c.remedy.at, c.pick) for c in study.contenders]
    held.update(repr(words).encode())
    return held.hexdigest()


def _write(path: Path, data: bytes) -> None:
    beside = path.with_name(f".{path.name}.{os.getpid()}")
    beside.write_bytes(data)
    beside.replace(path)
