"""Finished sites on disk, one record after the other, so that a killed batch goes on where it was.

A record is its length, its CRC-32 and its bytes; the first one says which batch the file belongs to. What a kill has
left half written fails its checksum and is cut off when the file is opened again.
"""

from __future__ import annotations

import json
import os
import zlib
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

__all__ = ["SiteRecord", "SiteStore"]

Array = NDArray[np.float64]

_MAGIC = b"inverse batch 1\n"
_HEAD = np.dtype([("length", "<u8"), ("checksum", "<u4")])


@dataclass(frozen=True)
class SiteRecord:
    """What is kept of a site.

    Attributes
    ----------
    site : str
    fingerprint : str
        Of its trace and its row of the table.
    status : str
        ``ok``, ``not converged``, ``nothing learnt`` or ``failed``.
    reason : str
        Why it is not ok.
    variables : dict
        Quantity -> units, long_name, symbol, role, prior.
    draws : array, shape (quantities, draws)
    quantiles : array, shape (quantities, probabilities)
    numbers : dict
        Diagnostics of the fit.
    modes : list of dict
        Values of the unknowns at the minima found.
    method : str
        How it was sampled.
    warning : str
        What speaks against the model, in sentences.
    """

    site: str
    fingerprint: str
    status: str
    reason: str = ""
    variables: dict[str, dict[str, str]] = field(default_factory=dict)
    draws: Array = field(default_factory=lambda: np.empty((0, 0)))
    quantiles: Array = field(default_factory=lambda: np.empty((0, 0)))
    numbers: dict[str, float] = field(default_factory=dict)
    modes: list[dict[str, float]] = field(default_factory=list)
    method: str = ""
    warning: str = ""

    def to_bytes(self) -> bytes:
        """Write the record as bytes."""
        plain = {k: v for k, v in vars(self).items() if k not in ("draws", "quantiles")}
        plain["shapes"] = [self.draws.shape, self.quantiles.shape]
        head = json.dumps(plain).encode()
        arrays = [np.ascontiguousarray(a, dtype="<f8").tobytes() for a in (self.draws, self.quantiles)]
        return b"".join([np.array(len(head), "<u8").tobytes(), head, *arrays])

    @classmethod
    def from_bytes(cls, data: bytes) -> SiteRecord:
        """Read what `to_bytes` wrote."""
        length = int(np.frombuffer(data[:8], "<u8")[0])
        plain = json.loads(data[8 : 8 + length])
        values = np.frombuffer(data[8 + length :], "<f8")
        first, second = (tuple(shape) for shape in plain.pop("shapes"))
        cut = int(np.prod(first))
        return cls(**plain, draws=values[:cut].reshape(first), quantiles=values[cut:].reshape(second))


class SiteStore:
    """Finished sites, in a file or (without a path) in memory only.

    Parameters
    ----------
    path : path or None
        Made if it does not exist.
    identity : mapping
        What the numbers depend on, apart from each site's own trace and row.

    Raises
    ------
    ValueError
        If the file is no store, or of another batch; it is left as it is.
    """

    def __init__(self, path: Path | None, identity: Mapping[str, Any]) -> None:
        self.path = path
        self.records: dict[str, SiteRecord] = {}
        if path is None:
            return
        if path.exists():
            self._read(path, json.loads(json.dumps(identity)))
        else:
            path.write_bytes(_MAGIC + _framed(json.dumps(identity).encode()))

    def add(self, record: SiteRecord) -> None:
        """Keep a finished site; it is on disk when this returns."""
        self.records[record.site] = record
        if self.path is not None:
            with open(self.path, "ab") as file:
                file.write(_framed(record.to_bytes()))
                file.flush()
                os.fsync(file.fileno())

    def _read(self, path: Path, identity: Mapping[str, Any]) -> None:
        data = path.read_bytes()
        if not data.startswith(_MAGIC):
            raise ValueError(
                f"'{path}' is no store of finished sites; give another path, it has not been touched."
            )
        found = list(_records(data, len(_MAGIC)))
        if not found:
            raise ValueError(f"'{path}' is damaged from its start; delete it to begin anew.")
        theirs = json.loads(found[0][0])
        differing = [k for k in identity if theirs.get(k) != identity[k]]
        if differing:
            raise ValueError(
                f"'{path}' belongs to another batch (its {', '.join(differing)} differ); give another path, or delete "
                "it to begin anew."
            )
        for payload, _ in found[1:]:
            record = SiteRecord.from_bytes(payload)
            self.records[record.site] = record
        if found[-1][1] < len(data):
            os.truncate(path, found[-1][1])


def _framed(payload: bytes) -> bytes:
    return np.array((len(payload), zlib.crc32(payload)), _HEAD).tobytes() + payload


def _records(data: bytes, start: int) -> Iterator[tuple[bytes, int]]:
    """Return each whole record with the place where it ends."""
    while start + _HEAD.itemsize <= len(data):
        length, checksum = np.frombuffer(data[start : start + _HEAD.itemsize], _HEAD)[0]
        first = start + _HEAD.itemsize
        payload = data[first : first + int(length)]
        if len(payload) < int(length) or zlib.crc32(payload) != int(checksum):
            return
        start = first + int(length)
        yield payload, start
