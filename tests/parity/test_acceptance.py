"""The ledger and its acceptances: no parity while a row is open, and nothing is accepted for ever or for nothing."""

import subprocess
import sys

import pytest
from wrong_ports import SPECS, right

from porter.findings import PorterError
from porter.parity.acceptance import acceptance_findings, open_rows
from porter.parity.ledger import ledger
from porter.parity.prove import prove
from porter.spec.read import read_text

KILN = (SPECS / "kiln_vent.yaml").read_text()
LINE = next(line for line in KILN.splitlines() if "row: output-level" in line)
ROWS = [
    "held-table",
    "priority",
    "release-order",
    "power-on",
    "shortest-press",
    "re-arm-after-tap",
    "re-arm-after-hold",
    "stray-gap",
    "output-chatter",
    "supply-extremes",
    "supply-loss",
    "output-level",
    "start-up-time",
]


def proved(text: str):
    """Read a changed spec and prove the port of the shipped one against it."""
    given, circuit = right("kiln_vent"), read_text(text, "kiln_vent.yaml")
    parity = prove(circuit, given.port, given.behaviour)
    return circuit, parity


def test_every_aspect_has_a_row_with_both_sides():
    """The rows that section 6 names are all there, each saying something of circuit and of port."""
    given = right("kiln_vent")
    rows = ledger(given.circuit, given.behaviour, given.port, given.mem)
    assert set(ROWS) <= {row.row for row in rows}
    assert all(row.circuit and row.port for row in rows)


def test_an_open_row_is_no_parity():
    """Without its acceptance a row that differs fails the proof, and is named."""
    _, parity = proved(KILN.replace(LINE + "\n", ""))
    assert parity.verdict == "differs"
    assert parity.statement.startswith("differs") and "output-level" in parity.statement
    assert [row.row for row in open_rows(parity)] == ["output-level"]


def test_prove_prints_no_parity_while_a_row_is_open(tmp_path):
    """What people read says differs, nowhere that anything is the same as a whole; the status is 1."""
    spec = tmp_path / "kiln_vent.yaml"
    spec.write_text(KILN.replace(LINE + "\n", ""))
    command = [sys.executable, "-m", "porter", "prove", str(spec)]
    said = subprocess.run(command, capture_output=True, check=False, encoding="utf-8")
    assert said.returncode == 1
    assert "differs (not accepted by the spec: output-level)" in said.stdout
    assert "same with" not in said.stdout


@pytest.mark.parametrize("reason", ['""', '"   "', '"…"'])
def test_a_reason_is_needed(reason):
    """An acceptance without words is refused on reading."""
    with pytest.raises(PorterError):
        read_text(KILN.replace(LINE, f"  - {{row: output-level, because: {reason}}}"), "kiln_vent.yaml")


def test_a_row_that_is_the_same_is_not_accepted():
    """An acceptance that covers nothing is an error, since it would hide the day it covers something."""
    circuit, parity = proved(KILN.replace(LINE, LINE + '\n  - {row: held-table, because: "to be safe"}'))
    found = [f for f in acceptance_findings(circuit, parity) if f.rule == "accept-not-needed"]
    assert [(f.severity, "held-table" in f.message) for f in found] == [("error", True)]


def test_an_acceptance_is_for_its_values():
    """One given for other values warns, and the row is open again; for these values it stands."""
    given = right("kiln_vent")
    row = next(
        r for r in ledger(given.circuit, given.behaviour, given.port, given.mem) if r.row == "output-level"
    )

    def accepted_for(port: str) -> str:
        return KILN.replace(
            LINE, f'  - {{row: output-level, because: "the driver takes it", port: "{port}"}}'
        )

    circuit, parity = proved(accepted_for(row.port))
    assert parity.verdict != "differs" and not acceptance_findings(circuit, parity)
    circuit, parity = proved(accepted_for("high 9 V, up to 99 mA"))
    assert parity.verdict == "differs"
    assert [(f.rule, f.severity) for f in acceptance_findings(circuit, parity)] == [
        ("accept-outdated", "warning")
    ]


def test_accepted_rows_are_counted():
    """The statement says how many deviations were accepted, and never plain "same" while there are any."""
    given = right("kiln_vent")
    parity = prove(given.circuit, given.port, given.behaviour)
    assert parity.statement == f"same with {len(given.circuit.accept)} accepted deviations"
