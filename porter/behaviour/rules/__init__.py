"""The findings: what is wrong with a drawing, with the failing inequality and a way to mend it."""

from collections.abc import Iterator

from porter.behaviour.rules.evidence import Evidence
from porter.findings import Finding

__all__ = ["Evidence", "find"]


def find(evidence: Evidence) -> Iterator[Finding]:
    """Yield the findings of every rule."""
    del evidence
    yield from ()
