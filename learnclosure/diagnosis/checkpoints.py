"""What is summed already, kept on disk so that a run that was stopped can go on."""

from __future__ import annotations

import json
import time
import zipfile
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np

from learnclosure.atomic import atomic_path
from learnclosure.diagnosis.moment_sums import MomentState

RECORD = "record"


@dataclass
class Checkpoint:
    """A file that always holds the merged sums of the first chunks of a run.

    Attributes
    ----------
    path : Path
        It appears with the first chunk and is removed when the run is done.
    mark : str
        Fingerprint of all the sums depend on; a file with another one is not used.
    every : float, s
        Least time between writing; the last chunks are summed again if a run is stopped.
    """

    path: Path
    mark: str
    every: float = 2.0
    _written: float = field(default=-np.inf, repr=False)

    def load(self) -> tuple[int, MomentState]:
        """Return how many chunks are done, and their sums.

        Returns
        -------
        int, MomentState
            Zero and nothing if there is no file of this run, or none that can be read.
        """
        try:
            with np.load(self.path, allow_pickle=False) as stored:
                record = json.loads(str(stored[RECORD]))
                if record["mark"] == self.mark:
                    sums = {name: stored[name] for name in stored.files if name != RECORD}
                    return int(record["chunks"]), MomentState(sums, tuple(record["fields"]))
        except (OSError, ValueError, KeyError, EOFError, zipfile.BadZipFile):
            # A file of another version or a damaged one: the sums are made anew.
            return 0, MomentState({})
        return 0, MomentState({})

    def save(self, chunks: int, state: MomentState) -> None:
        """Replace the file, unless it was written a moment ago.

        Parameters
        ----------
        chunks : int
            Number of chunks summed.
        state : MomentState

        Raises
        ------
        OutputError
            If it cannot be written.
        """
        if time.monotonic() - self._written < self.every:
            return
        record = {"mark": self.mark, "chunks": chunks, "fields": state.fields}
        arrays: dict[str, Any] = {RECORD: np.array(json.dumps(record)), **state.sums}
        with atomic_path(self.path) as temporary, temporary.open("wb") as stream:
            np.savez(stream, **arrays)
        self._written = time.monotonic()

    def clear(self) -> None:
        """Remove the file, and what a killed process was writing; the run is done."""
        self.path.unlink(missing_ok=True)
        for partial in self.path.parent.glob(f".{self.path.name}.*.partial"):
            partial.unlink(missing_ok=True)
