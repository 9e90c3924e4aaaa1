"""From a port to its suite: answers to every stimulus, and words with a guarantee."""

import re
from collections.abc import Iterable
from itertools import groupby

from porter.behaviour.model import Behaviour
from porter.port.model import Port
from porter.vectors.drive import Rest, Runs, cut, drive, merged, total
from porter.vectors.mealy import Mealy, explore, hsi_suite, minimise
from porter.vectors.model import Case, Suite
from porter.vectors.stimuli import Stimulus, all_stimuli, set_stage

#: Run-length coded entries (stimulus and answer together) of a whole suite: what fits a small self-test.
MOST_ENTRIES = 4000
INSTEAD = "; the cases by kind below are what is tried instead."
#: Answer entries of one case; a case that oscillates longer than that is cut short.
MOST_ANSWERS = 128
#: Reachable states that are explored, and states of the minimal machine that a guarantee is tried for.
MOST_EXPLORED, MOST_STATES = 1 << 14, 200


def build_vectors(
    behaviour: Behaviour, port: Port, *, extra_states: int = 1, most_entries: int = MOST_ENTRIES
) -> Suite:
    """Return the suite for *port*: cases from the behaviour and, where the port is small, a guaranteed set.

    The answers are those of the port's reference step, the definition of its arithmetic.

    Args:
        behaviour: gives the windows (seconds) that are tried one tick below, at and one above.
        extra_states: how many states more than the minimal machine's a wrong port may have for the
            guarantee to cover it; fewer are promised where the suite would get too long.
        most_entries: run-length coded entries of the whole suite, stimuli and answers together.
    """
    stage = set_stage(port)
    told = _distinct(all_stimuli(behaviour, stage))
    cases, left_out = _within(_answered(port, told), most_entries)
    room = most_entries - _entries(cases)
    sure, promise = _guaranteed(port, extra_states, room, {case.held for case in cases})
    says = (promise, *_covered(told, left_out), *_settled(stage.rest))
    return Suite(port.name, port.title, port.buttons, port.outputs, port.tick_s, (*cases, *sure), says)


def _distinct(stimuli: Iterable[Stimulus]) -> list[Stimulus]:
    """Return the stimuli with their runs merged, less empty ones and those that came before."""
    seen: dict[Runs, Stimulus] = {}
    for s in stimuli:
        held = merged(s.held)
        if held:
            seen.setdefault(held, Stimulus(s.group, s.name, s.purpose, held))
    return _uniquely_named(list(seen.values()))


def _uniquely_named(stimuli: list[Stimulus]) -> list[Stimulus]:
    """Make identifiers of the names, and number those that two stimuli would share."""
    taken: set[str] = set()
    out = []
    for s in stimuli:
        stem = re.sub(r"[^0-9A-Za-z_]", "_", s.name)
        name, n = stem, 2
        while name in taken:
            name, n = f"{stem}_{n}", n + 1
        taken.add(name)
        out.append(Stimulus(s.group, name, s.purpose, s.held))
    return out


def _answered(port: Port, stimuli: list[Stimulus]) -> list[tuple[str, Case]]:
    said = drive(port, [s.held for s in stimuli], MOST_ANSWERS)[0]
    cases = [(s.group, _case(s.name, s.purpose, s.held, a)) for s, a in zip(stimuli, said, strict=True)]
    once: dict[Runs, tuple[str, Case]] = {}
    for group, case in cases:  # cutting can make twins
        once.setdefault(case.held, (group, case))
    return list(once.values())


def _case(name: str, purpose: str, held: Runs, expected: Runs) -> Case:
    ticks = total(expected)
    if ticks == total(held):
        return Case(name, purpose, held, expected)
    note = f"{purpose} Cut after {ticks} ticks: the output goes on changing."
    return Case(name, note, cut(held, ticks), expected)


def entries(case: Case) -> int:
    """Return the run-length coded entries of *case*, stimulus and answer."""
    return len(case.held) + len(case.expected)


def _entries(cases: Iterable[Case]) -> int:
    return sum(entries(case) for case in cases)


def _within(cases: list[tuple[str, Case]], limit: int) -> tuple[list[Case], dict[str, int]]:
    """Return the cases that fit *limit* entries and, per group, how many were left out."""
    kept, left_out = list[Case](), dict[str, int]()
    for group, case in cases:
        if entries(case) <= limit:
            kept.append(case)
            limit -= entries(case)
        else:
            left_out[group] = left_out.get(group, 0) + 1
    return kept, left_out


# --- the guarantee ---


def _guaranteed(port: Port, extra: int, room: int, told: set[Runs]) -> tuple[list[Case], str]:
    """Return the words of the HSI method that fit *room* entries, and what they promise."""
    machine = explore(port, MOST_EXPLORED)
    if machine is None:
        return (
            [],
            f"No fault-detection guarantee: the port has more than {MOST_EXPLORED} reachable states{INSTEAD}",
        )
    least = minimise(machine)
    if least.states > MOST_STATES:
        return [], (
            f"No fault-detection guarantee: the minimal machine has {least.states} states,"
            f" more than the {MOST_STATES} that it is tried for{INSTEAD}"
        )
    for more in range(extra, -1, -1):
        cases = _words(port, least, more, room)
        if cases is not None:
            return [case for case in cases if case.held not in told], _promise(least.states, more)
    return [], (
        f"No fault-detection guarantee: the words for the {least.states} states of the minimal"
        f" machine would take more than the {room} table entries left{INSTEAD}"
    )


def _words(port: Port, machine: Mealy, extra: int, room: int) -> list[Case] | None:
    if machine.states * machine.inputs ** (extra + 1) * 2 > room:  # each word takes two entries at least
        return None
    words = hsi_suite(machine, extra)
    held = [merged((1, x) for x in word) for word in words]
    if sum(map(len, held)) > room:
        return None
    about = f"Tells the states apart by the HSI method, for at most {machine.states + extra} states: word"
    cases = [
        Case(f"states_{i:03}", f"{about} {i} of {len(held)}.", runs, said)
        for i, (runs, said) in enumerate(zip(held, drive(port, held)[0], strict=True), 1)
    ]
    return cases if _entries(cases) <= room else None


def _promise(n: int, extra: int) -> str:
    return (
        f"Every port with at most m = {n + extra} states that passes behaves as this one does for every"
        f" input sequence of any length (HSI method; the minimal machine has n = {n} states)."
    )


# --- what the suite says of itself ---


def _covered(told: list[Stimulus], left_out: dict[str, int]) -> list[str]:
    groups = [group for group, _ in groupby(told, key=lambda s: s.group)]
    counts = {group: sum(s.group == group for s in told) - left_out.get(group, 0) for group in groups}
    lines = ["Cases by kind: " + ", ".join(f"{group} {n}" for group, n in counts.items()) + "."]
    if left_out:
        lost = ", ".join(f"{group} {n}" for group, n in left_out.items())
        lines.append(f"Left out to keep the tables small: {lost}.")
    return lines


def _settled(still: Rest) -> list[str]:
    lines = [f"Settled means held still for {still.settle} ticks, after which the port changes no more."]
    if any(still.period):
        lines.append("Combinations that never rest are held for four of their periods instead.")
    if not still.bounded:
        lines.append("Some state neither rested nor came round within the longest time tried.")
    return lines
