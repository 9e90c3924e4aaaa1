"""What the writers write reads back as it was."""

import csv
import io
import json
from itertools import pairwise

import pytest
from hypothesis import given
from hypothesis import strategies as st
from vector_ports import behaviour, latch, toggle

from porter.vectors import Case, Suite, build_vectors, read_csv, read_json, write_csv, write_json
from porter.vectors.drive import cut, merged

words = st.text(st.characters(codec="utf-8", exclude_categories=("Cs", "Cc")), max_size=12)


@st.composite
def suites(draw: st.DrawFn) -> Suite:
    """Draw a suite of two buttons and two outputs with any runs and purposes."""
    run = st.lists(st.tuples(st.integers(1, 300), st.integers(0, 3)), min_size=1, max_size=8).map(merged)
    cases = []
    for i in range(draw(st.integers(1, 4))):
        held, said = draw(run), draw(run)
        ticks = min(sum(t for t, _ in held), sum(t for t, _ in said))
        cases.append(Case(f"case_{i}", draw(words), cut(held, ticks), cut(said, ticks)))
    return Suite("s", draw(words), ("SET", "CLEAR"), ("lamp", "bell"), 0.002, tuple(cases), (draw(words),))


@given(suites())
def test_csv_reads_back(suite):
    assert read_csv(write_csv(suite), suite) == suite


@given(suites())
def test_json_reads_back(suite):
    assert read_json(write_json(suite)) == suite


@given(suites())
def test_csv_holds_every_tick_for_a_reader_that_knows_only_csv(suite):
    """Python's own csv module, values held between rows."""
    rows = list(csv.reader(io.StringIO(write_csv(suite), newline=""), strict=True))
    assert rows[0] == ["case", "tick", "SET", "CLEAR", "lamp", "bell", "purpose"]
    for case in suite.cases:
        mine = [row for row in rows[1:] if row[0] == case.name]
        ticks = [int(row[1]) for row in mine]
        assert ticks[0] == 0
        assert ticks[-1] == case.ticks - 1
        spans = [b - a for a, b in pairwise([*ticks, case.ticks])]
        held = merged((n, int(r[2]) + 2 * int(r[3])) for n, r in zip(spans, mine, strict=True))
        said = merged((n, int(r[4]) + 2 * int(r[5])) for n, r in zip(spans, mine, strict=True))
        assert (held, said) == (case.held, case.expected)


def test_csv_lines_end_as_rfc_4180_says():
    text = write_csv(build_vectors(behaviour(latch().buttons), latch()))
    assert text.endswith("\r\n")
    assert text.count("\n") == text.count("\r\n")


def test_a_short_case_is_written_tick_by_tick():
    suite = Suite("s", "S", ("A",), ("x",), 0.001, (Case("c", "Taps.", ((1, 0), (1, 1)), ((1, 0), (1, 1))),))
    assert write_csv(suite) == "case,tick,A,x,purpose\r\nc,0,0,0,Taps.\r\nc,1,1,1,\r\n"


def test_json_has_a_format_number_and_a_fixed_order():
    suite = build_vectors(behaviour(("PUSH",)), toggle())
    text = write_json(suite)
    assert text == write_json(suite)
    data = json.loads(text)
    assert list(data) == ["format", "name", "title", "buttons", "outputs", "tick_s", "guarantees", "cases"]
    assert data["format"] == 1
    assert list(data["cases"][0]) == ["name", "purpose", "held", "expected"]


@pytest.mark.parametrize(
    "text",
    [
        "[]",
        "{",
        '{"format": 2}',
        '{"format": 1}',
        '{"format": 1, "name": "s", "title": "", "buttons": [], "outputs": [], "tick_s": 1, "guarantees": [],'
        ' "cases": [{"name": "c", "purpose": "", "held": [[2, 0]], "expected": [[1, 0]]}]}',
    ],
)
def test_json_that_is_no_suite_is_refused(text):
    with pytest.raises(ValueError):
        read_json(text)


@pytest.mark.parametrize("line", ["c,0,2,0,", "c,0,0", "c,x,0,0,", "c,1,0,0,", "c,0,0,0,\r\nc,0,0,0,"])
def test_csv_rows_that_do_not_fit_are_refused(line):
    frame = Suite("s", "S", ("A",), ("x",), 0.001, ())
    with pytest.raises(ValueError):
        read_csv(f"case,tick,A,x,purpose\r\n{line}\r\n", frame)


def test_csv_with_another_header_is_refused():
    with pytest.raises(ValueError, match="header"):
        read_csv("case,tick,B,x,purpose\r\n", Suite("s", "S", ("A",), ("x",), 0.001, ()))
