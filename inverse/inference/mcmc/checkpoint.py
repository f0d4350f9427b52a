"""A checkpoint file that survives being killed at any moment, and can be read while the run goes on.

The file is HDF5. All its space is allocated when it is made, so that appending never touches HDF5's own
tables: steps are written behind the committed ones, then one of two commit records is overwritten in turn.
Each record carries a checksum; after a kill the newest whole record counts, and what was written behind it
does not. A full file is copied into one twice as long, which replaces it in one move.

Datasets: `chain` (step, ensemble, walker, name), `log_prob` (step, ensemble, walker), `starts`, `commits` (2
records).
"""

from __future__ import annotations

import json
import os
import zlib
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from inverse.description.arguments import checked_path

FORMAT = "inverse checkpoint 1"
TWISTER_WORDS = 624
STARTS_TOLERANCE = 1e-6


@dataclass(frozen=True)
class Identity:
    """What must agree for a run to be resumed.

    Attributes
    ----------
    problem_hash : str
        Hash of data, model and priors.
    seed : str
        Entropy and spawn key.
    names : tuple of str
    ensembles, walkers : int
    moves : str
    """

    problem_hash: str
    seed: str
    names: tuple[str, ...]
    ensembles: int
    walkers: int
    moves: str

    def as_json(self) -> str:
        """Write all fields as JSON."""
        return json.dumps({**vars(self), "names": list(self.names)})

    def differences(self, stored: str) -> list[str]:
        """Say which fields of another identity, written as JSON, differ from this one's."""
        theirs, ours = json.loads(stored), json.loads(self.as_json())
        return [
            f"{key}: {theirs.get(key)!r} there, {ours[key]!r} here"
            for key in ours
            if theirs.get(key) != ours[key]
        ]


@dataclass(frozen=True)
class Commit:
    """State of a run at a step.

    Attributes
    ----------
    steps : int
    random_states : tuple of tuple
        One state of a Mersenne Twister per ensemble.
    accepted, evaluations, rejected : ndarray of int, shape (ensembles,)
    """

    steps: int
    random_states: tuple[tuple[Any, ...], ...]
    accepted: np.ndarray
    evaluations: np.ndarray
    rejected: np.ndarray


@dataclass(frozen=True)
class StoredRun:
    """What a checkpoint file holds.

    Attributes
    ----------
    commit : Commit
    chain : ndarray, shape (ensembles, steps, walkers, d)
    log_prob : ndarray, shape (ensembles, steps, walkers)
    starts : ndarray, shape (ensembles, walkers, d)
    names : tuple of str
    problem_hash : str
    """

    commit: Commit
    chain: np.ndarray
    log_prob: np.ndarray
    starts: np.ndarray
    names: tuple[str, ...]
    problem_hash: str


def _record_type(ensembles: int) -> np.dtype[Any]:
    each = (ensembles,)
    return np.dtype(
        [
            ("steps", "i8"),
            ("keys", "u4", (ensembles, TWISTER_WORDS)),
            ("position", "i8", each),
            ("has_gauss", "i8", each),
            ("cached_gaussian", "f8", each),
            ("accepted", "i8", each),
            ("evaluations", "i8", each),
            ("rejected", "i8", each),
            ("checksum", "u4"),
        ]
    )


def _checksum(record: np.ndarray) -> int:
    blank = record.copy()
    blank["checksum"] = 0
    return zlib.crc32(blank.tobytes())


def _as_record(commit: Commit) -> np.ndarray:
    record = np.zeros((), dtype=_record_type(len(commit.random_states)))
    record["steps"] = commit.steps
    for index, (_, keys, position, has_gauss, cached) in enumerate(commit.random_states):
        record["keys"][index] = keys
        record["position"][index] = position
        record["has_gauss"][index] = has_gauss
        record["cached_gaussian"][index] = cached
    for name in ("accepted", "evaluations", "rejected"):
        record[name] = getattr(commit, name)
    record["checksum"] = _checksum(record)
    return record


def _as_commit(record: np.ndarray) -> Commit:
    states = tuple(
        ("MT19937", keys, int(position), int(has_gauss), float(cached))
        for keys, position, has_gauss, cached in zip(
            record["keys"], record["position"], record["has_gauss"], record["cached_gaussian"], strict=True
        )
    )
    counts = (record[name].copy() for name in ("accepted", "evaluations", "rejected"))
    return Commit(int(record["steps"]), states, *counts)


def _newest(records: np.ndarray) -> tuple[int, Commit]:
    """Find the newest whole record and its place."""
    whole = [place for place in (0, 1) if int(records[place]["checksum"]) == _checksum(records[place])]
    if not whole:
        raise ValueError(
            "neither commit record of the checkpoint is whole: the file is damaged; delete it to start anew"
        )
    place = max(whole, key=lambda index: int(records[index]["steps"]))
    return place, _as_commit(records[place])


def _open(path: Path, mode: str) -> Any:
    import h5py

    # No lock: readers may come at any time, and the commit records keep them right.
    return h5py.File(path, mode, locking=False)


def _allocate(file: Any, name: str, shape: tuple[int, ...]) -> None:
    """Make a dataset of doubles whose place in the file is fixed at once, without filling it."""
    import h5py

    settings = h5py.h5p.create(h5py.h5p.DATASET_CREATE)
    settings.set_layout(h5py.h5d.CONTIGUOUS)
    settings.set_alloc_time(h5py.h5d.ALLOC_TIME_EARLY)
    settings.set_fill_time(h5py.h5d.FILL_TIME_NEVER)
    space = h5py.h5s.create_simple(shape)
    h5py.h5d.create(file.id, name.encode(), h5py.h5t.NATIVE_DOUBLE, space, settings)


def _create(path: Path, identity_json: str, starts: np.ndarray, commit: Commit, capacity: int) -> None:
    ensembles, walkers, dimension = starts.shape
    with _open(path, "w") as file:
        file.attrs["format"] = FORMAT
        file.attrs["identity"] = identity_json
        file["starts"] = starts
        _allocate(file, "chain", (capacity, ensembles, walkers, dimension))
        _allocate(file, "log_prob", (capacity, ensembles, walkers))
        file["commits"] = np.stack([_as_record(commit)] * 2)


def read_checkpoint(path: str | os.PathLike[str]) -> StoredRun:
    """Read a checkpoint, also of a run that is still going on.

    Parameters
    ----------
    path : path

    Returns
    -------
    StoredRun
        Every committed step, burn-in included.

    Raises
    ------
    ValueError
        If the file is no checkpoint.
    """
    with _open_checked(Path(path)) as file:
        commit = _newest(file["commits"][:])[1]
        identity = json.loads(file.attrs["identity"])
        return StoredRun(
            commit,
            np.moveaxis(file["chain"][: commit.steps], 0, 1),
            np.moveaxis(file["log_prob"][: commit.steps], 0, 1),
            file["starts"][:],
            tuple(identity["names"]),
            identity["problem_hash"],
        )


def _open_checked(path: Path) -> Any:
    try:
        file = _open(path, "r")
    except OSError as error:
        raise ValueError(
            f"{path} cannot be read as a checkpoint ({error}); give another file name, or delete it to start "
            "anew"
        ) from error
    if file.attrs.get("format") != FORMAT:
        found = file.attrs.get("format")
        file.close()
        raise ValueError(
            f"{path} is not a checkpoint of this version (its format is {found!r}, not {FORMAT!r}); give "
            "another file name; it has not been touched"
        )
    return file


class Checkpoint:
    """A checkpoint file that is being written.

    Parameters
    ----------
    path : path
        Made if it does not exist; else it must hold the same run.
    identity : Identity
    starts : ndarray, shape (ensembles, walkers, d)
    commit : Commit
        The state before the first step.
    capacity : int
        Steps to make room for at first.

    Raises
    ------
    ValueError
        If the file holds another run or is no checkpoint; it is left as it is.
    """

    def __init__(
        self,
        path: str | os.PathLike[str],
        identity: Identity,
        starts: np.ndarray,
        commit: Commit,
        capacity: int,
    ) -> None:
        self.path = checked_path(path)
        if not self.path.parent.is_dir():
            raise ValueError(
                f"The folder '{self.path.parent}' of the checkpoint does not exist; create it first."
            )
        if self.path.exists():
            self._check_same_run(identity, starts)
        else:
            self._replace(identity.as_json(), starts, commit, capacity, filled=0)

    def _check_same_run(self, identity: Identity, starts: np.ndarray) -> None:
        with _open_checked(self.path) as file:
            self.capacity = len(file["chain"])
            differences = identity.differences(file.attrs["identity"])
            if not differences and not _same_starts(file["starts"][:], starts):
                differences = ["starts: the walkers start elsewhere"]
        if differences:
            raise ValueError(
                f"checkpoint {self.path} belongs to another run ({'; '.join(differences)}); give another "
                "file name, or delete it to start anew"
            )

    def _replace(
        self, identity_json: str, starts: np.ndarray, commit: Commit, capacity: int, filled: int
    ) -> None:
        """Make a file beside the old one, copy the filled steps, and replace the old one in one move."""
        fresh = self.path.with_name(self.path.name + ".new")
        _create(fresh, identity_json, starts, commit, capacity)
        if filled:
            with _open(self.path, "r") as source, _open(fresh, "r+") as target:
                for name in ("chain", "log_prob"):
                    _copy_rows(source[name], target[name], filled)
        with open(fresh, "rb") as written:
            os.fsync(written.fileno())
        os.replace(fresh, self.path)
        self.capacity = capacity

    def append(self, chain: np.ndarray, log_prob: np.ndarray, commit: Commit) -> None:
        """Add steps and the state after them.

        Parameters
        ----------
        chain : ndarray, shape (ensembles, n, walkers, d)
        log_prob : ndarray, shape (ensembles, n, walkers)
        commit : Commit
            Its steps are those committed before plus n.
        """
        first = commit.steps - chain.shape[1]
        self._make_room(commit.steps)
        with _open(self.path, "r+") as file:
            file["chain"][first : commit.steps] = np.moveaxis(chain, 1, 0)
            file["log_prob"][first : commit.steps] = np.moveaxis(log_prob, 1, 0)
            # The steps must have left this process before the record that vouches for them does.
            file.flush()
            newest = _newest(file["commits"][:])[0]
            file["commits"][1 - newest] = _as_record(commit)

    def _make_room(self, steps: int) -> None:
        if steps <= self.capacity:
            return
        with _open(self.path, "r") as file:
            commit = _newest(file["commits"][:])[1]
            identity_json, starts = file.attrs["identity"], file["starts"][:]
        self._replace(identity_json, starts, commit, max(2 * self.capacity, steps), filled=commit.steps)


def _same_starts(stored: np.ndarray, given: np.ndarray) -> bool:
    """Compare starts to rounding: a fit repeated elsewhere may differ in the last digits."""
    return bool(np.all(np.abs(stored - given) <= STARTS_TOLERANCE * np.ptp(stored, axis=(0, 1))))


def _copy_rows(source: Any, target: Any, rows: int, block: int = 256) -> None:
    for first in range(0, rows, block):
        last = min(first + block, rows)
        target[first:last] = source[first:last]
