"""Suites as files: CSV (RFC 4180), JSON, and value change dump (IEEE 1364)."""

import csv
import io
import json
import re
from collections.abc import Iterator
from dataclasses import replace
from fractions import Fraction
from itertools import accumulate, pairwise
from typing import Any

from vcd import VCDWriter

from porter.vectors.drive import Runs, merged
from porter.vectors.model import Case, Suite

#: Added to the purpose of a case that has rows only where something changes.
HELD_NOTE = " (values hold until the next row)"


# --- CSV ---


def write_csv(suite: Suite) -> str:
    """Return *suite* as CSV: header ``case,tick,<each button>,<each output>,purpose``; 1 = pressed / active.

    A case has a row at tick 0, at each tick at which a button or an output changes, and at its last
    tick; between rows the values hold.  So a case's length is its last tick plus one.  The purpose
    stands in the case's first row.
    """
    text = io.StringIO()
    writer = csv.writer(text, lineterminator="\r\n")
    writer.writerow(["case", "tick", *suite.buttons, *suite.outputs, "purpose"])
    for case in suite.cases:
        writer.writerows(_csv_rows(suite, case))
    return text.getvalue()


def _csv_rows(suite: Suite, case: Case) -> Iterator[list[str | int]]:
    kept = sorted({0, case.ticks - 1, *_starts(case.held), *_starts(case.expected)})
    note = HELD_NOTE if len(kept) < case.ticks else ""
    held, said = _values(case.held, kept), _values(case.expected, kept)
    for tick, mask, bits in zip(kept, held, said, strict=True):
        purpose = case.purpose + note if tick == 0 else ""
        yield [case.name, tick, *_bits(mask, len(suite.buttons)), *_bits(bits, len(suite.outputs)), purpose]


def _starts(runs: Runs) -> list[int]:
    """Return the tick at which each run begins."""
    return [0, *accumulate(ticks for ticks, _ in runs)][:-1]


def _values(runs: Runs, ticks: list[int]) -> list[int]:
    """Return the value of *runs* at each of the sorted *ticks*."""
    begin = dict(zip(_starts(runs), (value for _, value in runs), strict=True))
    value, out = 0, []
    for tick in ticks:
        value = begin.get(tick, value)
        out.append(value)
    return out


def _bits(value: int, count: int) -> list[int]:
    return [value >> i & 1 for i in range(count)]


def read_csv(text: str, frame: Suite) -> Suite:
    """Return the suite that `write_csv` wrote.

    Args:
        frame: gives what the file doesn't hold (which columns are buttons, the tick, titles,
            guarantees); its cases are not looked at.

    Raises:
        ValueError: the header is not the frame's, or a row doesn't fit it (the line is named).
    """
    lines = csv.reader(io.StringIO(text, newline=""), strict=True)
    want = ["case", "tick", *frame.buttons, *frame.outputs, "purpose"]
    if next(lines, None) != want:
        raise ValueError(f"line 1: the header must be {','.join(want)}")
    found: dict[str, list[tuple[int, int, int, str]]] = {}
    for row in lines:
        try:
            found.setdefault(row[0], []).append(_csv_row(row, len(frame.buttons), len(want)))
        except ValueError as error:
            raise ValueError(f"line {lines.line_num}: {error}") from None
    return replace(frame, cases=tuple(_csv_case(name, rows) for name, rows in found.items()))


def _csv_row(row: list[str], buttons: int, width: int) -> tuple[int, int, int, str]:
    if len(row) != width:
        raise ValueError(f"{len(row)} fields where {width} belong")
    bits = row[2:-1]
    if not set(bits) <= {"0", "1"}:
        raise ValueError("a button or output is neither 0 nor 1")
    return int(row[1]), _number(bits[:buttons]), _number(bits[buttons:]), row[-1]


def _number(bits: list[str]) -> int:
    return sum(1 << i for i, bit in enumerate(bits) if bit == "1")


def _csv_case(name: str, rows: list[tuple[int, int, int, str]]) -> Case:
    ticks = [row[0] for row in rows]
    if ticks[0] != 0 or any(b <= a for a, b in pairwise(ticks)):
        raise ValueError(f"case {name}: its ticks must begin at 0 and rise")
    spans = [b - a for a, b in zip(ticks, [*ticks[1:], ticks[-1] + 1], strict=True)]
    held = merged((span, row[1]) for span, row in zip(spans, rows, strict=True))
    said = merged((span, row[2]) for span, row in zip(spans, rows, strict=True))
    return Case(name, rows[0][3].removesuffix(HELD_NOTE), held, said)


# --- JSON ---


def write_json(suite: Suite) -> str:
    """Return *suite* as JSON, one case a line.

    ``held`` and ``expected`` are run-length coded: ``[[ticks, mask], ...]``, bit i of a mask being
    the i-th button or output.
    """
    head = {
        "format": 1,
        "name": suite.name,
        "title": suite.title,
        "buttons": suite.buttons,
        "outputs": suite.outputs,
        "tick_s": suite.tick_s,
        "guarantees": suite.guarantees,
    }
    lines = ",\n".join(f"  {_json(key)}: {_json(value)}" for key, value in head.items())
    cases = ",\n".join(f"    {_json(_case_json(case))}" for case in suite.cases)
    return f'{{\n{lines},\n  "cases": [\n{cases}\n  ]\n}}\n'


def _json(value: object) -> str:
    return json.dumps(value, ensure_ascii=False)


def _case_json(case: Case) -> dict[str, object]:
    return {"name": case.name, "purpose": case.purpose, "held": case.held, "expected": case.expected}


def read_json(text: str) -> Suite:
    """Return the suite that `write_json` wrote.

    Raises:
        ValueError: not JSON, another format number, or something is missing or of another kind.
    """
    data = json.loads(text)
    if not isinstance(data, dict) or data.get("format") != 1:
        raise ValueError('the file must be an object with "format": 1')
    try:
        return Suite(
            data["name"],
            data["title"],
            tuple(data["buttons"]),
            tuple(data["outputs"]),
            float(data["tick_s"]),
            tuple(map(_json_case, data["cases"])),
            tuple(data["guarantees"]),
        )
    except (KeyError, TypeError) as error:
        raise ValueError(f"not a suite of vectors: {error!r}") from error


def _json_case(data: dict[str, Any]) -> Case:
    held, said = (tuple((int(t), int(v)) for t, v in data[key]) for key in ("held", "expected"))
    if sum(t for t, _ in held) != sum(t for t, _ in said):
        raise ValueError(f"case {data['name']}: held and expected differ in length")
    return Case(data["name"], data["purpose"], held, said)


# --- value change dump ---


def write_vcd(suite: Suite) -> str:
    """Return *suite* as a value change dump, its cases one after another.

    Before each case ``power_on`` is 1 for one tick, with no button pressed and the outputs unknown
    (x); ``case`` is the case's number from 0 on (the header's comment names them).  A value at a
    time holds for the tick that begins there.  ``power_on`` rises once more at the very end.
    """
    text = io.StringIO()
    unit, stride = _timescale(suite.tick_s)
    with VCDWriter(
        text,
        timescale=unit,
        date="",
        version="porter",
        comment=_names(suite),
        default_scope_type="module",
        check_values=True,
    ) as writer:
        top = _word(suite.name)
        number = writer.register_var(top, "case", "integer", size=32, init=0)
        reset = writer.register_var(top, "power_on", "wire", size=1, init=1)
        buttons = [
            writer.register_var((top, "buttons"), _word(b), "wire", size=1, init=0) for b in suite.buttons
        ]
        outputs = [writer.register_var((top, "outputs"), _word(o), "wire", size=1) for o in suite.outputs]
        tick = 0
        for i, case in enumerate(suite.cases):
            begin: list[tuple[Any, int | str]] = [
                (number, i),
                (reset, 1),
                *((b, 0) for b in buttons),
                *((o, "x") for o in outputs),
            ]
            for var, value in begin:
                writer.change(var, tick * stride, value)
            writer.change(reset, (tick + 1) * stride, 0)
            for at, var, value in _changes(case, buttons, outputs):
                writer.change(var, (tick + 1 + at) * stride, value)
            tick += 1 + case.ticks
        writer.change(reset, tick * stride, 1)
    return text.getvalue()


def _word(name: str) -> str:
    """Return *name* without white space and ``$``, which would end a word of the dump."""
    return re.sub(r"[\s$]", "_", name)


def _changes(case: Case, buttons: list[Any], outputs: list[Any]) -> list[tuple[int, Any, int]]:
    """Return (tick, variable, value) in order of time."""
    both = [(case.held, buttons), (case.expected, outputs)]
    found = [
        (at, var, value >> i & 1)
        for runs, variables in both
        for at, (_, value) in zip(_starts(runs), runs, strict=True)
        for i, var in enumerate(variables)
    ]
    return sorted(found, key=lambda change: change[0])


def _names(suite: Suite) -> str:
    return "\n".join(f"{i} {case.name}" for i, case in enumerate(suite.cases)).replace("$", "_")


def _timescale(tick_s: float) -> tuple[str, int]:
    """Return a time unit that IEEE 1364 allows and the tick in it, to 1 in 10^9 where that can be."""
    ticks = Fraction(tick_s)
    for exponent, name in ((0, "s"), (-3, "ms"), (-6, "us"), (-9, "ns"), (-12, "ps")):
        stride = ticks / Fraction(10) ** exponent
        if round(stride) >= 1 and abs(stride / round(stride) - 1) < Fraction(1, 10**9):
            return f"1 {name}", round(stride)
    return "1 fs", max(1, round(ticks * 10**15))
