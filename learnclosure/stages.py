"""Which artefacts of a study stand, and whether they still belong to their inputs."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from learnclosure import __version__
from learnclosure.atomic import atomic_path


def file_digest(path: Path) -> str:
    """Return the SHA-256 of a file's bytes in hexadecimal.

    Parameters
    ----------
    path : Path

    Returns
    -------
    str
    """
    with path.open("rb") as stream:
        return hashlib.file_digest(stream, "sha256").hexdigest()


def fingerprint(stage: str, parts: Mapping[str, Any]) -> str:
    """Return a digest of everything a stage's result depends on.

    Parameters
    ----------
    stage : str
        Name of the stage.
    parts : mapping
        JSON-serialisable settings and digests of inputs.

    Returns
    -------
    str
    """
    text = json.dumps({"stage": stage, "version": __version__, **parts}, sort_keys=True)
    return hashlib.sha256(text.encode()).hexdigest()


@dataclass(frozen=True)
class Artefacts:
    """Where the artefacts of a study lie.

    Attributes
    ----------
    root : Path
        The study's output folder.
    """

    root: Path

    def statistics(self, region: str) -> Path:
        """Eddy statistics and transport tensor of a region."""
        return self.root / region / "statistics.nc"

    def features(self, region: str) -> Path:
        """Mean-flow features of a region."""
        return self.root / region / "features.nc"

    def closure(self, family: str) -> Path:
        """Trained closure of a family; a working file, never shipped."""
        return self.root / "closure" / f"{family}.joblib"

    def selection(self, family: str) -> Path:
        """Record of how the closure of a family was chosen."""
        return self.root / "closure" / f"{family}.selection.json"

    @property
    def evaluation(self) -> Path:
        """Scores, ceiling, baselines and audit."""
        return self.root / "evaluation.json"

    def bundle(self, family: str) -> Path:
        """Folder that ships the predictor of a family."""
        return self.root / "bundle" / family

    @property
    def report(self) -> Path:
        """The report page."""
        return self.root / "report.html"

    def checkpoint(self, region: str) -> Path:
        """Moments of a region summed so far, while its diagnosis runs."""
        return self.root / "stages" / f"diagnose-{region}.npz"

    def _record(self, stage: str) -> Path:
        return self.root / "stages" / f"{stage}.json"

    def current(self, stage: str, mark: str, outputs: Iterable[Path]) -> bool:
        """Tell whether a stage's outputs stand unchanged and belong to its inputs.

        Parameters
        ----------
        stage : str
            Name of the stage.
        mark : str
            Fingerprint of its inputs as they are now.
        outputs : iterable of Path
            Files it must have written.

        Returns
        -------
        bool
        """
        record = self._record(stage)
        if not record.is_file():
            return False
        try:
            noted = json.loads(record.read_text(encoding="utf-8"))
        except json.JSONDecodeError:
            return False
        if noted.get("fingerprint") != mark:
            return False
        digests = noted.get("outputs", {})
        return all(
            path.is_file() and digests.get(self._name(path)) == file_digest(path)
            for path in outputs
        )

    def note(self, stage: str, mark: str, outputs: Iterable[Path]) -> None:
        """Record that a stage is done.

        Parameters
        ----------
        stage, mark, outputs
            As in ``current``.

        Raises
        ------
        OutputError
            If the record cannot be written.
        """
        noted = {
            "fingerprint": mark,
            "outputs": {self._name(path): file_digest(path) for path in outputs},
        }
        with atomic_path(self._record(stage)) as temporary:
            temporary.write_text(json.dumps(noted, indent=1, sort_keys=True) + "\n")

    def _name(self, path: Path) -> str:
        return path.relative_to(self.root).as_posix()
