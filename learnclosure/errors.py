"""Errors a user can cause, all built from one message template.

Hierarchy::

    LearnclosureError
    ├── InputError            wrong input; the command line ends with code 2
    │   ├── StudyError        the study file
    │   ├── SourceError       ensemble files: missing, unreadable, inconsistent
    │   ├── RoleError         which variable plays which part
    │   ├── GridError         grid, mask, faces, spacing
    │   ├── UnitError         units that cannot be understood or converted
    │   ├── DiagnosisError    members or tracers that cannot carry a tensor
    │   ├── TrainingError     tables a closure cannot be trained from
    │   ├── BundleError       a bundle that is incomplete, altered or not ours
    │   └── OutputError       a place that cannot be written
    ├── SimulationError       a simulated ensemble that blew up
    └── CheckFailedError      a check the user asked for failed; code 1
"""

from __future__ import annotations


def compose_message(
    what: str,
    *,
    where: object = None,
    found: object = None,
    expected: object = None,
    remedy: str | None = None,
) -> str:
    """Build the one sentence every user-facing error consists of.

    Parameters
    ----------
    what : str
        What is wrong, without a final full stop.
    where : object, optional
        File, variable or study key the message is about.
    found, expected : object, optional
        What was met and what is allowed.
    remedy : str, optional
        What to do next, as an imperative phrase.

    Returns
    -------
    str
        ``where: what (found ..., expected ...); remedy.``

    Examples
    --------
    >>> compose_message("unknown unit", where="m0.nc: u", found="M/S",
    ...                 expected="a unit such as 'm s-1'", remedy="correct the attribute")
    "m0.nc: u: unknown unit (found M/S, expected a unit such as 'm s-1'); correct the attribute."
    """
    text = f"{where}: {what}" if where is not None else what
    details = []
    if found is not None:
        details.append(f"found {found}")
    if expected is not None:
        details.append(f"expected {expected}")
    if details:
        text += f" ({', '.join(details)})"
    if remedy:
        text += f"; {remedy}"
    return text if text.endswith(".") else text + "."


class LearnclosureError(Exception):
    """Base of every error learnclosure raises on purpose.

    Parameters
    ----------
    what : str
        What is wrong.
    where, found, expected : object, optional
        Place, what was met, what is allowed.
    remedy : str, optional
        What to do next.
    """

    exit_code = 2

    def __init__(
        self,
        what: str,
        *,
        where: object = None,
        found: object = None,
        expected: object = None,
        remedy: str | None = None,
    ) -> None:
        super().__init__(
            compose_message(what, where=where, found=found, expected=expected, remedy=remedy)
        )
        self.what = what
        self.where = where
        self.found = found
        self.expected = expected
        self.remedy = remedy


class InputError(LearnclosureError):
    """Something the user gave cannot be used as it is."""


class StudyError(InputError):
    """The study file is missing, malformed or contradicts itself."""


class SourceError(InputError):
    """Ensemble files are missing, unreadable or inconsistent with each other."""


class RoleError(InputError):
    """No variable, or more than one, was found for a part it must play."""


class GridError(InputError):
    """The grid, its mask, its faces or its spacing cannot be understood."""


class UnitError(InputError):
    """A unit is unknown or cannot be converted to the quantity's own."""


class DiagnosisError(InputError):
    """Members or tracers at hand cannot determine a transport tensor."""


class TrainingError(InputError):
    """A closure cannot be trained or scored from what was given."""


class BundleError(InputError):
    """A bundle is incomplete, was altered or is not a learnclosure bundle."""


class OutputError(InputError):
    """An output file or folder cannot be written."""


class SimulationError(LearnclosureError):
    """A simulated ensemble lost numerical stability."""


class CheckFailedError(LearnclosureError):
    """A check the user asked for did not pass."""

    exit_code = 1
