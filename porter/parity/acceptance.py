"""Acceptances against the ledger: one that nothing needs, and one given for values that have moved."""

from collections.abc import Iterator

from porter.findings import Finding
from porter.parity.model import LedgerRow, Parity
from porter.spec.model import Acceptance, Circuit


def acceptance_findings(circuit: Circuit, parity: Parity) -> tuple[Finding, ...]:
    """Return what is wrong with a spec's acceptances, by position.

    ``accept-not-needed``: an error for a row that is ``same`` (an acceptance that covers nothing
    would hide the day it starts to), a note for one that is ``tighter``.
    ``accept-outdated``: a warning where circuit or port no longer say what the acceptance
    recorded; the row is open again.
    """
    rows = {row.row: row for row in parity.ledger}
    found = (f for a in circuit.accept if a.row in rows for f in _about(a, rows[a.row]))
    return tuple(sorted(found, key=lambda f: (f.position, f.rule)))


def open_rows(parity: Parity) -> tuple[LedgerRow, ...]:
    """Return the rows that differ and that nobody has accepted."""
    return tuple(row for row in parity.ledger if row.verdict == "differs" and row.accepted is None)


def _about(acceptance: Acceptance, row: LedgerRow) -> Iterator[Finding]:
    if row.verdict != "differs":
        yield _not_needed(acceptance, row)
    else:
        yield from _outdated(acceptance, row)


def _not_needed(acceptance: Acceptance, row: LedgerRow) -> Finding:
    return Finding(
        "accept-not-needed",
        "error" if row.verdict == "same" else "note",
        acceptance.position,
        f"`{row.row}` is {row.verdict}, nothing to accept (circuit: {row.circuit}; port: {row.port})",
        f"take the line for `{row.row}` out",
    )


def _outdated(acceptance: Acceptance, row: LedgerRow) -> Iterator[Finding]:
    for who, then, now in (
        ("circuit", acceptance.circuit, row.circuit),
        ("port", acceptance.port, row.port),
    ):
        if then is not None and then != now:
            yield Finding(
                "accept-outdated",
                "warning",
                acceptance.position,
                f"`{row.row}` was accepted with {who}: `{then}`, it is now `{now}`; the row is open again",
                f"look at it again, then write `{who}: {_quoted(now)}`",
            )


def _quoted(text: str) -> str:
    """Return *text* as a YAML scalar in double quotes."""
    return '"' + text.replace("\\", "\\\\").replace('"', '\\"') + '"'
