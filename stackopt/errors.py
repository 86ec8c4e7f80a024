"""Every error a user can cause, and the exit code it ends with.

::

    StackoptError                 exit code
     |- InputError                2   a file, an option or a stack text is wrong
     |   `- RunError              2   a run folder cannot be used
     |- WorkersLostError          2   worker processes or a cluster cannot be used; a run's checkpoint stands
     |- UnmetMaskError            1   the answer is no: no stack meets the mask
     |- NothingLeftError          1   the answer is no: the filters leave no stack of a front
     `- InterruptedRunError       130 stopped by the user, a checkpoint is written
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass


@dataclass(frozen=True)
class Finding:
    """One mistake: where it is, what was found, what is allowed or what to do."""

    file: str
    key: str
    message: str

    def __str__(self) -> str:
        return ": ".join(part for part in (self.file, self.key, self.message) if part)


class StackoptError(Exception):
    """Base of all errors that stackopt raises on purpose."""

    exit_code = 2


class InputError(StackoptError):
    """Input that cannot be used; carries every finding, not only the first.

    Parameters
    ----------
    findings : str, Finding or iterable of Finding
        What is wrong. A plain string is a finding without a file.
    """

    def __init__(self, findings: str | Finding | Iterable[Finding]) -> None:
        if isinstance(findings, str):
            findings = Finding("", "", findings)
        self.findings = (findings,) if isinstance(findings, Finding) else tuple(findings)
        super().__init__("\n".join(str(finding) for finding in self.findings))


class RunError(InputError):
    """A run folder that cannot be read, written or resumed."""


class WorkersLostError(StackoptError):
    """Workers that are killed again and again, or cannot be reached."""


class UnmetMaskError(StackoptError):
    """No stack the problem allows meets the mask."""

    exit_code = 1


class NothingLeftError(StackoptError):
    """The filters of a choice leave no stack of the front."""

    exit_code = 1


class InterruptedRunError(StackoptError):
    """The user stopped a run; its checkpoint is written."""

    exit_code = 130
