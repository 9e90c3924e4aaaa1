"""What porter has to say about a spec or a drawing, as values.

A `Finding` is data: the rooms return them, the command line and the report
render them.  Nothing in here prints.
"""

from dataclasses import dataclass
from typing import Literal

Severity = Literal["error", "warning", "note"]


@dataclass(frozen=True, slots=True, order=True)
class Position:
    """A place in a spec file; line and column count from 1, length in characters."""

    file: str
    line: int
    column: int
    length: int = 1


@dataclass(frozen=True, slots=True)
class Finding:
    """One thing to mend or to know.

    Args:
        rule: slug of the rule, such as ``floating-input``.
        severity: ``error`` makes the exit status non-zero, ``warning`` and ``note`` don't.
        position: where in the spec.
        message: what is wrong, with the failing inequality in numbers.
        mend: what to write or fit instead.
    """

    rule: str
    severity: Severity
    position: Position
    message: str
    mend: str

    def as_json(self) -> dict[str, object]:
        """Return the finding as the contract's JSON object."""
        return {
            "rule": self.rule,
            "severity": self.severity,
            "file": self.position.file,
            "line": self.position.line,
            "column": self.position.column,
            "message": self.message,
            "mend": self.mend,
        }


class PorterError(Exception):
    """Base of the errors that a user can mend; `exit_code` is the command's status."""

    exit_code = 2


class SpecError(PorterError):
    """The spec can't be used; carries every finding of the run and the source text."""

    def __init__(self, findings: tuple[Finding, ...], source: str) -> None:
        super().__init__("; ".join(f.message for f in findings))
        self.findings = findings
        self.source = source
