"""Named checks and their record."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path


@dataclass(frozen=True)
class Check:
    """One check of a bundle.

    Attributes
    ----------
    name : str
        What was checked.
    passed : bool
    found : str
        What was found.
    value, limit : float or None
        Measured value and the most it may be, where the check measures something.
    rule : str
        Name of the rule that was broken, a key of ``rules.RULES``; empty if passed.
    """

    name: str
    passed: bool
    found: str
    value: float | None = None
    limit: float | None = None
    rule: str = ""


@dataclass(frozen=True)
class VerifyReport:
    """Checks of a bundle in the order they were made.

    What follows a failed check of files, sums or graph would have to trust what just
    failed, so it is not made.

    Attributes
    ----------
    folder : Path
        Folder or archive.
    checks : tuple of Check
    """

    folder: Path
    checks: tuple[Check, ...]

    @property
    def passed(self) -> bool:
        """Whether every check passed."""
        return all(check.passed for check in self.checks)


class RefusalError(Exception):
    """Raised within a check to say why it does not pass; never leaves the gate.

    Parameters
    ----------
    rule : str
        Name of the rule that was broken.
    found : str
        What was found.
    """

    def __init__(self, rule: str, found: str) -> None:
        super().__init__(found)
        self.rule = rule


def attempt(name: str, step: Callable[[], str]) -> Check:
    """Make one check.

    Parameters
    ----------
    name : str
    step : callable
        Returns what was found, or raises ``RefusalError``.

    Returns
    -------
    Check
    """
    try:
        return Check(name, True, step())
    except RefusalError as refusal:
        return Check(name, False, str(refusal), rule=refusal.rule)
