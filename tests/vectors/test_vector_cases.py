"""A suite answers as the reference step does, covers what it says, and stays small."""

from itertools import permutations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from vector_ports import (
    behaviour,
    charge,
    count_ports,
    latch,
    one_shot,
    oscillator,
    three_buttons,
    toggle,
    toggle_and_clear,
)

from porter.port.model import Port
from porter.port.step import run
from porter.vectors import Suite, build_vectors
from porter.vectors.drive import drive, merged, rest
from porter.vectors.mealy import explore, minimise

PORTS = [latch(), toggle(), toggle_and_clear(), three_buttons(), charge(), oscillator()]
NAMES = ["latch", "toggle", "toggle_and_clear", "three_buttons", "charge", "oscillator"]
each_port = pytest.mark.parametrize("port", PORTS, ids=NAMES)


def suite_of(port: Port) -> Suite:
    return build_vectors(behaviour(port.buttons), port)


def spread(runs: tuple[tuple[int, int], ...]) -> np.ndarray:
    return np.repeat([value for _, value in runs], [ticks for ticks, _ in runs])


def answers_agree(port: Port, suite: Suite, longest: int = 3000) -> None:
    for case in suite.cases:
        if case.ticks <= longest:
            assert run(port, spread(case.held)[None])[0].tolist() == spread(case.expected).tolist(), case.name


def held_masks(suite: Suite) -> set[int]:
    return {mask for case in suite.cases for _, mask in case.held}


# --- answers ---


@given(count_ports())
@settings(max_examples=12, deadline=None)
def test_expected_is_what_the_reference_step_says(port):
    suite = suite_of(port)
    answers_agree(port, suite, longest=200)
    assert held_masks(suite) == set(range(port.held_count))
    assert all(case.ticks == sum(t for t, _ in case.expected) for case in suite.cases)


@each_port
def test_expected_is_what_the_reference_step_says_of_known_ports(port):
    answers_agree(port, suite_of(port))


runs_of = st.lists(st.tuples(st.integers(1, 40), st.integers(0, 3)), min_size=1, max_size=12)


@given(
    st.lists(runs_of, min_size=1, max_size=4), st.sampled_from([latch((2, 1), (3, 2)), toggle_and_clear()])
)
@settings(deadline=None)
def test_driving_by_runs_is_stepping_tick_by_tick(stimuli, port):
    stimuli = [merged(runs) for runs in stimuli]
    said, end = drive(port, stimuli)
    for lane, runs in enumerate(stimuli):
        out = run(port, spread(runs)[None])[0]
        assert spread(said[lane]).tolist() == out.tolist()
        assert port.answer[end.q[lane]][runs[-1][1]] == out[-1]


# --- settling ---


def test_a_toggle_settles_when_its_longest_counter_has_run_down():
    assert 11 <= rest(toggle()).settle <= 14


@each_port
def test_nothing_changes_after_the_settling_time(port):
    still = rest(port)
    assert still.bounded
    resting = [mask for mask in range(port.held_count) if not still.period[mask]]
    said, _ = drive(port, [((still.settle, mask), (500, mask)) for mask in resting])
    assert all(sum(t for t, _ in runs[:-1]) < still.settle for runs in said)


def test_an_oscillation_is_seen_and_held_for_four_periods():
    still = rest(oscillator())
    assert still.period == (0, 2)
    assert still.dwell(1) <= 8


# --- coverage ---


@each_port
def test_power_on_and_every_held_combination_are_there(port):
    suite = suite_of(port)
    names = {case.name for case in suite.cases}
    assert "power_on_idle" in names
    assert held_masks(suite) == set(range(port.held_count))
    first = {case.held[0][1] for case in suite.cases if case.name.startswith("power_on")}
    assert first == set(range(port.held_count))


def test_three_buttons_are_pressed_and_released_in_every_order():
    masks = {tuple(mask for _, mask in case.held) for case in suite_of(three_buttons()).cases}
    for press in permutations([1, 2, 4]):
        for release in permutations([1, 2, 4]):
            order = (0, *np.cumsum(press).tolist(), *(7 - np.cumsum(release)).tolist())
            assert order in masks


@given(count_ports())
@settings(max_examples=25, deadline=None)
def test_a_guaranteed_suite_takes_every_transition_of_the_minimal_machine(port):
    suite = suite_of(port)
    if not suite.guarantees[0].startswith("Every port"):
        assert suite.guarantees[0].startswith("No fault-detection guarantee")
        return
    whole = explore(port, 1 << 14)
    assert whole is not None
    machine, taken = minimise(whole), set()
    for case in suite.cases:
        state = 0
        for mask in spread(case.held)[:400].tolist():
            taken.add((state, mask))
            state = int(machine.after[state, mask])
    assert len(taken) == machine.states * machine.inputs


def test_windows_are_tried_one_tick_below_at_and_above():
    windows = [("PUSH", "high", "re-arm-after-hold", 0.0162)]
    port = charge()
    gaps = {
        case.held[2][0]
        for case in build_vectors(behaviour(("PUSH",), windows), port).cases
        if case.name.startswith("high_PUSH_re_arm_after_hold")
    }
    assert {15, 16, 17} <= gaps


def test_a_port_is_tried_where_its_own_window_ends():
    """The answers of two neighbouring durations differ: between them the port's window ends."""
    cases = [c for c in suite_of(charge()).cases if c.name.startswith("high_PUSH_re_arm_after_tap_")]
    ends = {case.held[2][0]: case.expected[-1][1] for case in cases}
    assert any(ends.get(gap) == 1 and ends.get(gap + 1) == 0 for gap in ends)


def test_a_one_shot_is_pressed_again_around_its_end():
    suite = suite_of(one_shot())
    tap = next(case for case in suite.cases if case.name == "low_GO_tap")
    lit = next(ticks for ticks, bits in tap.expected if bits)
    gaps = {case.held[2][0] for case in suite.cases if case.name.startswith("low_GO_again")}
    assert {lit - 2, lit - 1, lit} <= gaps
    answers_agree(one_shot(), suite)


@pytest.mark.parametrize("port", PORTS[:-1], ids=NAMES[:-1])
def test_stuck_buttons_cross_8_and_16_bit_counters(port):
    suite = suite_of(port)
    for b in range(len(port.buttons)):
        holds = {ticks for case in suite.cases for ticks, mask in case.held if mask == 1 << b}
        assert any(256 < ticks < 65536 for ticks in holds)
        assert max(holds) > 65536


def test_a_case_that_goes_on_changing_is_cut_short_and_says_so():
    stuck = [case for case in suite_of(oscillator()).cases if "stuck" in case.name]
    assert stuck
    assert all("Cut after" in case.purpose and len(case.expected) == 128 for case in stuck)


# --- size and order ---


@each_port
def test_suites_stay_small_and_have_no_twins(port):
    suite = suite_of(port)
    assert sum(len(c.held) + len(c.expected) for c in suite.cases) <= 4000
    assert len({c.name for c in suite.cases}) == len(suite.cases) == len({c.held for c in suite.cases})
    assert all(c.name.isidentifier() and c.purpose.endswith(".") for c in suite.cases)


def test_a_one_button_charge_port_has_less_than_two_hundred_cases():
    assert len(suite_of(charge()).cases) < 200


def test_what_does_not_fit_is_said():
    suite = build_vectors(behaviour(latch().buttons), latch(), most_entries=200)
    assert sum(len(c.held) + len(c.expected) for c in suite.cases) <= 200
    assert any(line.startswith("Left out") for line in suite.guarantees)


def test_more_room_gives_a_guarantee_where_little_gives_none():
    port = toggle_and_clear()
    assert suite_of(port).guarantees[0].startswith("No fault-detection guarantee")
    wide = build_vectors(behaviour(port.buttons), port, extra_states=0, most_entries=30_000)
    assert wide.guarantees[0].startswith("Every port with at most m = 56 states")


def test_a_charge_port_says_that_it_has_no_guarantee():
    assert "more than 16384 reachable states" in suite_of(charge(rate=652, held_rate=12400)).guarantees[0]


def test_the_same_port_gives_the_same_suite():
    assert suite_of(toggle_and_clear()) == suite_of(toggle_and_clear())


def test_button_names_become_identifiers():
    base = latch()
    odd = Port(**{f: getattr(base, f) for f in base.__slots__} | {"buttons": ("SET-A", "SET A")})
    names = [c.name for c in suite_of(odd).cases]
    assert all(name.isidentifier() for name in names)
    assert len(set(names)) == len(names)
