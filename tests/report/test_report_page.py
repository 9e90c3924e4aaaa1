"""The report as a reader gets it: whole, harmless, the same each time, and nothing missing."""

from dataclasses import replace
from html import unescape

import pytest
from report_jobs import FILES, LAMP, TOGGLE, Job
from report_reader import check, drawings

from porter.behaviour.model import Band, Window
from porter.findings import Finding, Position
from porter.parity.model import LedgerRow
from porter.report.numbers import band_range, seconds, volts

JOBS = pytest.mark.parametrize("job", [LAMP, TOGGLE], ids=lambda job: job.circuit.name)
SECTIONS = [
    *("verdict", "findings", "circuit", "held", "priority", "power-on", "windows", "margins", "memory"),
    *("timing", "ledger", "deviations", "parity", "vectors", "firmware", "evidence", "cautions"),
]


@JOBS
def test_page_is_well_formed_and_asks_nothing_of_the_outside(job: Job) -> None:
    """Tags match, ids are unique, links stay inside, drawings are XML, no script, no URL."""
    assert [i for i in check(job.html()).ids if i in SECTIONS] == SECTIONS


@JOBS
def test_same_values_give_the_same_bytes(job: Job) -> None:
    """Nothing but the arguments reaches the page."""
    assert job.html() == job.html()


@JOBS
def test_every_row_is_in_a_table(job: Job) -> None:
    """No window, margin, ledger row, finding, case or constant is left out."""
    page = check(job.html())
    said = [unescape(" | ".join(row)) for row in page.rows]

    def present(*cells: str) -> bool:
        return any(all(cell in line for cell in cells) for line in said)

    for w in job.behaviour.windows:
        assert present(w.button, w.start, seconds(w.seconds.nominal), band_range(w.guaranteed, "s"))
    for m in job.behaviour.margins:
        assert present(m.where, volts(m.volts.nominal), band_range(m.guaranteed, "V"))
    for r in job.parity.ledger:
        assert present(r.row, r.circuit, r.port, r.verdict, r.accepted or "–")
    for case in job.suite.cases:
        assert present(case.name, case.purpose)
    for c in job.port.constants:
        assert present(c.key, str(c.value), c.meaning, c.working, c.source)
    for part in job.circuit.parts:
        assert present(part.name, part.kind, part.text)
    for finding in job.behaviour.findings:
        assert finding.rule in page.text and finding.severity in page.text


@JOBS
def test_windows_and_traces_are_drawn(job: Job) -> None:
    """Each button with windows and each trace has a drawing; margins and levels have one each."""
    titles = [svg.findtext("title") for svg in drawings(job.html())]

    buttons = {w.button for w in job.behaviour.windows}
    assert {f"Windows of button {b}" for b in buttons} | {t.title for t in job.traces} <= set(titles)
    assert len(titles) == len(buttons) + len(job.traces) + 2


def test_spec_text_is_harmless_wherever_it_stands() -> None:
    """Markup in names and titles comes out as text, in HTML and in drawings."""
    evil = '<script>alert("x")</script>&amp;\'"'
    button = replace(TOGGLE.circuit.buttons[0], name=evil)
    part = replace(TOGGLE.circuit.parts[0], name=evil, text=evil, nodes=(evil, "gnd"))
    window = replace(TOGGLE.behaviour.windows[0], button=evil, why=evil)
    margin = replace(TOGGLE.behaviour.margins[0], where=evil)
    trace = replace(TOGGLE.traces[0], title=evil, buttons={evil: ((0.0, 0),)}, levels=((evil, 1.0),))
    finding = Finding("rule", "error", Position(evil, 1, 1), evil, evil)
    job = (
        TOGGLE.but("circuit", title=evil, buttons=(button,), parts=(part,), source=evil, file=evil)
        .but("behaviour", windows=(window,), margins=(margin,), findings=(finding,), notes=(evil,))
        .but("parity", ledger=(LedgerRow(evil, evil, evil, "differs", evil),), statement=evil)
        .but("port", why=(evil,), buttons=(evil,))
    )
    job = replace(job, traces=(trace,), files={f"firmware/c/{evil}": evil, "x/fan_toggle.c": evil})

    page = check(job.html())

    assert page.text.count('alert("x")') > 15


def test_control_characters_do_not_reach_the_page() -> None:
    """A YAML escape can put any character in a title; XML and UTF-8 can't hold them all."""
    html = LAMP.but("circuit", title="a\x00b\x1b\ud800c\x85").html()
    check(html)
    html.encode("utf-8")
    assert "a���" not in html and "a�b��c�" in html


def test_hazard_strengthens_the_cautions() -> None:
    """The standing cautions are always there; a marked output adds its own, at the top as well."""
    plain, marked = check(LAMP.html()).text, check(TOGGLE.html()).text
    for text in (plain, marked):
        assert "not of safety integrity" in text or "nothing about safety integrity" in text
        assert (
            "common causes" in text and "stays hard-wired" in text and "licensed or competent person" in text
        )
    assert "Marked as hazardous" not in plain
    assert marked.count("output fan (motion)") == 2
    assert "Do not move this function into firmware" in marked and "Do not move" not in plain


def test_counterexample_and_open_differences_are_shown() -> None:
    """A proof that fails shows how, and says that nobody has accepted it."""
    page = check(TOGGLE.html())
    assert ["3", "15 ms", "TOGGLE"] in [[c.replace("\xa0", " ") for c in row] for row in page.rows]
    assert "Open differences" in page.text
    assert "Open differences" not in check(LAMP.html()).text


def test_stale_acceptance_is_called_out() -> None:
    """Values accepted once that have changed since are not passed off as accepted."""
    assert "the values have changed since" in check(LAMP.html()).text
    fresh = replace(LAMP.circuit.accept[0], circuit="under 1 µs", port="1 ms")
    assert "the values have changed since" not in check(LAMP.but("circuit", accept=(fresh,)).html()).text


def test_files_are_hashed_and_cores_listed_line_by_line() -> None:
    """SHA-256 is of the UTF-8 text: the empty file's is the published one (FIPS 180-4 examples)."""
    files = FILES | {"empty.txt": ""}
    page = check(replace(LAMP, files=files).html())
    assert "e3b0c44298fc1c149afbf4c8996fb92427ae41e4649b934ca495991b7852b855" in page.text
    for path in ("firmware/c/lamp_latch.h", "firmware/c/lamp_latch.c", "firmware/micropython/lamp_latch.py"):
        lines = files[path].splitlines()
        assert f"{path} (" in page.text and f"{len(lines)} lines)" in page.text
        assert all(line in page.text for line in lines)


def test_unfinished_value_stops_the_page() -> None:
    """The check behind `None` in the page: a template that prints one fails."""
    with pytest.raises(TypeError, match="not finished text"):
        LAMP.but("circuit", title=None).html()


def test_never_is_said_in_words() -> None:
    """An infinite window reads never, in table and drawing."""
    never = Band(None, None, None)
    job = LAMP.but("behaviour", windows=(Window("SET", "low", "stray-gap", never, never),))
    assert check(job.html()).text.count("never") >= 5
