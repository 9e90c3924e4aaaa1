"""Every rule of the reader has a spec that breaks it, and the text that a person then sees.

``tests/bad/<rule>_<name>.yaml`` lies beside ``.expected``.
"""

from collections.abc import Callable
from pathlib import Path

import pytest

from porter.findings import Finding, SpecError
from porter.render import render_findings
from porter.spec.read import read_text
from porter.spec.rules import RULES
from porter.spec.tree import decode

BAD = Path(__file__).parents[1] / "bad"
SPECS = sorted(BAD.glob("*.yaml"))
#: Rules about files that can't lie in a repository; see test_spec_file.py.
ELSEWHERE = {"file-unreadable", "file-too-large"}


def findings_of(path: Path) -> tuple[tuple[Finding, ...], str]:
    """Return all findings of a spec and its source."""
    try:
        circuit = read_text(decode(path.read_bytes(), path.name), path.name)
    except SpecError as error:
        return error.findings, error.source
    return circuit.warnings, circuit.source


def rule_of(path: Path) -> str:
    return path.stem.split("_")[0]


@pytest.mark.parametrize("path", SPECS, ids=lambda p: p.stem)
def test_findings_read_as_recorded(path: Path, golden: Callable[[Path, str], None]) -> None:
    """The rendered findings are those beside the spec."""
    findings, source = findings_of(path)

    golden(path.with_suffix(".expected"), render_findings(findings, source, color=False))


@pytest.mark.parametrize("path", SPECS, ids=lambda p: p.stem)
def test_each_spec_breaks_its_rule(path: Path) -> None:
    """A spec breaks the rule that it is named for, and every finding points at a place in the file."""
    findings, source = findings_of(path)

    assert rule_of(path) in {finding.rule for finding in findings}
    lines = source.split("\n")
    for finding in findings:
        place = finding.position
        assert place.file == path.name
        assert 1 <= place.line <= len(lines)
        assert place.column + place.length <= len(lines[place.line - 1]) + 2


def test_each_rule_has_a_spec() -> None:
    """No rule is without a spec that breaks it, and no spec without a rule."""
    assert set(RULES) - ELSEWHERE == {rule_of(path) for path in SPECS}


def test_each_expected_text_has_its_spec() -> None:
    """No expected text was left behind."""
    assert {path.stem for path in SPECS} == {path.stem for path in BAD.glob("*.expected")}
