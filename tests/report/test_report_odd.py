"""Odd values: the page must stay whole whatever the rooms before it found."""

from dataclasses import replace
from itertools import pairwise

from hypothesis import given, settings
from hypothesis import strategies as st
from report_jobs import LAMP, TOGGLE
from report_reader import check

from porter.behaviour.model import Band, Margin, NamedLevel, Window
from porter.report.bars import Bar, companions
from porter.report.lanes import differences, level_at, stretches
from porter.report.numbers import NEVER, quantity
from porter.report.svg import Scale, nice_step
from porter.trace import Trace, Wave

LEVELS = st.sampled_from(["low", "high"])
KINDS = st.sampled_from(["shortest-press", "re-arm-after-tap", "re-arm-after-hold", "stray-gap"])
NAMES = st.text(min_size=1, max_size=80)
TIMES = st.one_of(st.none(), st.floats(0, 1e300), st.just(float("inf")), st.just(float("nan")))
VOLTS = st.one_of(st.none(), st.floats(-1e300, 1e300))


def bands(values: st.SearchStrategy[float | None]) -> st.SearchStrategy[Band]:
    return st.builds(Band, values, values, values)


WINDOWS = st.builds(Window, NAMES, LEVELS, KINDS, bands(TIMES), bands(TIMES), NAMES)
MARGINS = st.builds(Margin, NAMES, bands(VOLTS), bands(VOLTS), NAMES)
SHORT, LONG = Band(2e-6, 1e-6, 3e-6), Band(0.5, 0.4, 0.6)
BARS = st.builds(Bar, NAMES, LEVELS, bands(TIMES), bands(TIMES))
CHANGES = st.lists(st.tuples(st.floats(0, 10), st.integers(0, 1)), max_size=8).map(lambda c: tuple(sorted(c)))
TICKS = st.sampled_from([1e-9, 1e-3, 1.0, 3600.0])


@settings(max_examples=40, deadline=None)
@given(st.lists(WINDOWS, max_size=4), st.lists(MARGINS, max_size=3), bands(VOLTS), TICKS)
def test_any_windows_margins_and_levels(
    windows: list[Window], margins: list[Margin], level: Band, tick_s: float
) -> None:
    """Infinite, huge, tiny, out of order, not numbers, or none at all: the page is whole."""
    levels = (NamedLevel("level", level),)
    job = LAMP.but("behaviour", windows=tuple(windows), margins=tuple(margins), levels=levels)
    check(job.but("port", tick_s=tick_s).html())


@settings(max_examples=40, deadline=None)
@given(st.dictionaries(NAMES, CHANGES, max_size=3), CHANGES, CHANGES, NAMES, st.floats(0, 1e6), st.booleans())
def test_any_trace(
    buttons: dict[str, tuple[tuple[float, int], ...]],
    circuit: tuple[tuple[float, int], ...],
    port: tuple[tuple[float, int], ...],
    name: str,
    end_s: float,
    with_waves: bool,
) -> None:
    """Signals without entries, past the end, with several entries at once, under any name."""
    waves = (Wave(name, (0.0, end_s), (0.0, 5.0)),) if with_waves else ()
    trace = Trace(
        name, end_s, buttons, {name: circuit}, {name: port}, circuit, waves, ((name, 1.0), (name, 1.0))
    )
    check(replace(TOGGLE, traces=(trace,)).html())


@given(st.lists(BARS, max_size=8))
def test_every_bar_is_drawn_once(bars: list[Bar]) -> None:
    """Windows far apart get axes of their own; none is lost and none drawn twice."""
    drawn = [bar for group in companions(bars) for bar in group]
    assert sorted(map(id, drawn)) == sorted(map(id, bars))


def test_windows_far_apart_do_not_share_an_axis() -> None:
    """A press of microseconds beside a re-arm of half a second would shrink one of them to nothing."""
    short, long, none = (
        Bar(n, "", b, b) for n, b in (("a", SHORT), ("b", LONG), ("c", Band(0.0, 0.0, None)))
    )
    assert companions((long, short, none)) == ((short,), (long, none))


@given(CHANGES, CHANGES)
def test_differences_are_where_levels_differ(
    one: tuple[tuple[float, int], ...], other: tuple[tuple[float, int], ...]
) -> None:
    """A point is inside a difference exactly where the two levels are unequal."""
    gaps = differences(one, other, 10.0)
    for k in range(101):
        t = k / 10.01
        assert (level_at(one, t) != level_at(other, t)) == any(g.start <= t < g.end for g in gaps)


@given(CHANGES, st.floats(0.1, 20))
def test_stretches_cover_the_run(changes: tuple[tuple[float, int], ...], end_s: float) -> None:
    """Stretches follow one another without a hole, to the end."""
    pieces = list(stretches(changes, end_s))
    assert pieces[-1][1] == end_s
    assert all(a[1] == b[0] for a, b in pairwise(pieces))


def test_numbers_read_as_an_engineer_writes_them() -> None:
    """Prefixes, four digits at most, a true minus, words for what is no number."""
    blank = "\N{NO-BREAK SPACE}"
    cases = {
        (4700.0, "ohm"): "4.7 kΩ",
        (1e-7, "F"): "100 nF",
        (4.7e-6, "F"): "4.7 µF",
        (0.5161234, "s"): "516.1 ms",
        (3600.0, "s"): f"3{blank}600 s",
        (-0.05, "V"): "−50 mV",
        (0.0, "s"): "0 s",
        (999.96e-6, "s"): "1 ms",
        (None, "s"): NEVER,
        (float("inf"), "s"): NEVER,
        (float("nan"), "V"): "not known",
    }
    assert {case: quantity(*case).replace(blank, " ") for case in cases} == {
        case: text.replace(blank, " ") for case, text in cases.items()
    }


@given(st.floats(1e-12, 1e12))
def test_steps_of_an_axis_are_one_two_or_five(step: float) -> None:
    """The step is at least what was asked for and less than 2.5 times it, and begins with 1, 2 or 5."""
    found = nice_step(step)
    assert step * (1 - 1e-6) <= found <= step * 2.5 * (1 + 1e-6)
    assert f"{found:.3e}"[0] in "125"


@given(st.floats(allow_nan=True), st.booleans())
def test_scale_keeps_everything_on_paper(value: float, log: bool) -> None:
    """Whatever the value, its pixel is inside the axis."""
    scale = Scale(0.1, 1000.0, 100.0, 700.0, "s", log)
    assert 100.0 <= scale(value) <= 700.0
