"""A file of finished replicates, one JSON record a line, from which an interrupted check goes on."""

from __future__ import annotations

import json
import os
from dataclasses import asdict
from pathlib import Path
from typing import Any

from inverse.description.arguments import checked_path
from inverse.study.coverage.judgement import Replicate

__all__ = ["Store"]


class Store:
    """Finished replicates on disk.

    Parameters
    ----------
    path : path or None
        With None nothing is kept.
    header : dict
        What must agree for the file to be continued: problem, seed, sampler, simulator.

    Raises
    ------
    ValueError
        If the file belongs to another check, or is no such file.
    """

    def __init__(self, path: str | os.PathLike[str] | None, header: dict[str, Any]) -> None:
        self.path = None if path is None else checked_path(path)
        if self.path is not None and not self.path.parent.is_dir():
            raise ValueError(f"The folder '{self.path.parent}' of the store does not exist; create it first.")
        self.rows: dict[int, Replicate] = {}
        if self.path is None:
            return
        if self.path.exists() and self.path.stat().st_size:
            self._read(self.path, header)
        else:
            self._write(header)

    def add(self, row: Replicate) -> None:
        """Keep a replicate; it is on disk when this returns."""
        self.rows[row.number] = row
        if self.path is not None:
            self._write(asdict(row))

    def _write(self, record: dict[str, Any]) -> None:
        assert self.path is not None
        with self.path.open("a", encoding="utf-8") as file:
            file.write(json.dumps(record) + "\n")
            file.flush()
            os.fsync(file.fileno())

    def _read(self, path: Path, header: dict[str, Any]) -> None:
        text = path.read_text(encoding="utf-8")
        whole, _, torn = text.rpartition("\n")
        if torn:
            # A killed write: what follows the last whole line does not count.
            os.truncate(path, len((whole + "\n").encode()) if whole else 0)
        try:
            first, *rest = [json.loads(line) for line in whole.split("\n")]
            different = [key for key in header if first.get(key) != header[key]]
            self.rows = {r["number"]: Replicate(**r) for r in rest}
        except (ValueError, TypeError, KeyError, AttributeError) as error:
            raise ValueError(f"{path} is no file of replicates ({error}); give another name.") from error
        if different:
            raise ValueError(
                f"{path} belongs to another check: its {', '.join(different)} differ; give another name, or delete it."
            )
