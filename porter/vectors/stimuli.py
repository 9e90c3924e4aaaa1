"""What to press, and why: the stimuli of a suite, before any answer is known.

A `Stage` is a port with what is known about how it moves: settling time, how to bring it to
rest with the output low or high, the shortest press it acts on.
"""

import random
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from itertools import accumulate, combinations, permutations

from porter.behaviour.model import Behaviour, Level
from porter.port.model import Port
from porter.vectors.drive import Rest, Runs, drive, merged, rest, total

LEVELS: tuple[Level, Level] = ("low", "high")
#: Windows tried; the middling press (two ticks more than a tap) shows how fast holding moves the re-arm time.
KINDS = ("shortest-press", "re-arm-after-tap", "re-arm-after-press", "re-arm-after-hold", "stray-gap")
#: Cycles of a bounce burst, of a run of toggles, of a slow chatter.
BURST, REPEATS, CHATTER = 5, 8, 12
#: Up to so many buttons every press and release order is tried.
ALL_ORDERS = 3


@dataclass(frozen=True, slots=True)
class Stimulus:
    """A case without its answer; `group` names the family of cases it belongs to."""

    group: str
    name: str
    purpose: str
    held: Runs


@dataclass(frozen=True, slots=True)
class Stage:
    """A port and how to bring it where a case begins.

    Args:
        rest: settling time and periods.
        lead: for each level that can be reached, the stimulus from power-on that settles there.
        acts: ``acts[button, level]``: the shortest press in ticks that changes the settled output
            from `level` and lasts; None where no press up to the settling time does.
    """

    port: Port
    rest: Rest
    lead: dict[Level, Runs]
    acts: dict[tuple[int, Level], int | None]

    def tap(self, button: int, level: Level) -> int:
        """Return the shortest press that acts from *level*, or one tick where none does."""
        return self.acts.get((button, level)) or 1


def set_stage(port: Port) -> Stage:
    """Find out how *port* settles, what brings it low and high, and its shortest presses."""
    still = rest(port)
    lead = _leads(port, still)
    return Stage(port, still, lead, _shortest_presses(port, still, lead))


def _leads(port: Port, still: Rest) -> dict[Level, Runs]:
    """Return the shortest way found to each settled level: at most two presses."""
    begin = ((still.settle, 0),)
    presses = [
        ((ticks, mask), (still.settle, 0))
        for mask in range(1, port.held_count)
        for ticks in (still.dwell(mask), 1)
    ]
    once = [begin + press for press in presses]
    found: dict[Level, Runs] = {}
    for tries in ([begin, *once], [a + b for a in once for b in presses[: 2 * len(port.buttons) ** 2]]):
        levels = drive(port, tries)[1].q.tolist()
        for q, runs in zip(levels, tries, strict=True):
            found.setdefault(LEVELS[q], runs)
        if len(found) == 2:
            break
    return found


# --- where the port's own windows end ---


@dataclass(frozen=True, slots=True)
class Question:
    """From which duration on does `make(duration)` end at `level`?  Asked from 1 to `most` ticks."""

    make: Callable[[int], Runs]
    level: Level
    most: int


def first_acting(port: Port, questions: list[Question]) -> list[int | None]:
    """Return for each question the least duration that ends at its level, None where `most` doesn't.

    Each round tries 24 durations of every question beside each other and narrows to one of their
    gaps, taking for granted that longer durations go on acting.
    """
    spans = [(0, question.most) for question in questions]
    answer: list[int | None] = [None] * len(questions)
    live = list(range(len(questions)))
    while live:
        grids = {i: _grid(*spans[i]) for i in live}
        stimuli = [questions[i].make(d) for i in live for d in grids[i]]
        ends = iter(drive(port, stimuli)[1].q.tolist())
        for i in live:
            acting = [d for d in grids[i] if LEVELS[next(ends)] == questions[i].level]
            answer[i] = min(acting, default=answer[i])
            below = [d for d in grids[i] if d < (answer[i] or 0)]
            spans[i] = (max(below, default=spans[i][0]), answer[i] or 0)
        live = [i for i in live if spans[i][1] - spans[i][0] > 1]
    return answer


def _grid(low: int, high: int) -> list[int]:
    """Return at most 25 durations in (low, high], the highest among them."""
    stride = max(1, -(-(high - low) // 24))
    return sorted({*range(low + stride, high, stride), high})


def _shortest_presses(
    port: Port, still: Rest, lead: dict[Level, Runs]
) -> dict[tuple[int, Level], int | None]:
    keys = [(button, level) for level in lead for button in range(len(port.buttons))]
    questions = [
        Question(_press(lead[level], 1 << button, still.settle), _other(level), still.settle)
        for button, level in keys
    ]
    return dict(zip(keys, first_acting(port, questions), strict=True))


def _press(lead: Runs, mask: int, settle: int) -> Callable[[int], Runs]:
    return lambda ticks: (*lead, (ticks, mask), (settle, 0))


def _other(level: Level) -> Level:
    return "high" if level == "low" else "low"


# --- the cases ---


def all_stimuli(behaviour: Behaviour, stage: Stage) -> Iterator[Stimulus]:
    """Yield every stimulus of a suite, the most telling groups first."""
    yield from power_on(stage)
    yield from single_presses(stage)
    yield from combinations_held(stage)
    yield from together(stage)
    yield from windows(behaviour, stage)
    yield from timed(stage)
    yield from bounces(stage)
    yield from quick(stage)
    yield from stuck(stage)
    yield from repeated(behaviour, stage)
    yield from mixed(stage)


def names_of(stage: Stage, buttons: tuple[int, ...] | list[int]) -> str:
    """Return the buttons' names as a piece of an identifier."""
    return "_".join(stage.port.buttons[b] for b in buttons)


def _listed(stage: Stage, buttons: tuple[int, ...] | list[int]) -> str:
    return ", then ".join(stage.port.buttons[b] for b in buttons)


def _ticks(count: int) -> str:
    return f"{count} tick" if count == 1 else f"{count} ticks"


def _mask(buttons: tuple[int, ...] | list[int]) -> int:
    return sum(1 << b for b in buttons)


def _groups(stage: Stage, least: int) -> list[tuple[int, ...]]:
    count = len(stage.port.buttons)
    return [group for size in range(least, count + 1) for group in combinations(range(count), size)]


def _hold(stage: Stage, mask: int) -> tuple[int, int]:
    return stage.rest.dwell(mask), mask


def power_on(stage: Stage) -> Iterator[Stimulus]:
    """Yield power-on with nothing held, and with buttons held already."""
    settle = stage.rest.settle
    yield Stimulus("power-on", "power_on_idle", "Power comes on and nobody presses anything.", ((settle, 0),))
    groups = _groups(stage, 1)
    for group in groups if len(groups) <= 15 else [g for g in groups if len(g) in (1, len(groups[-1]))]:
        yield Stimulus(
            "power-on",
            f"power_on_{names_of(stage, group)}_held",
            f"Power comes on with {_joined(stage, group)} held already, which is released later.",
            (_hold(stage, _mask(group)), (settle, 0)),
        )


def _joined(stage: Stage, group: tuple[int, ...]) -> str:
    return " and ".join(stage.port.buttons[b] for b in group)


def single_presses(stage: Stage) -> Iterator[Stimulus]:
    """Yield from each settled level each button: one tick, the shortest press that acts, a long hold."""
    settle = stage.rest.settle
    for level, lead in stage.lead.items():
        for b, name in enumerate(stage.port.buttons):
            begin = f"Settled {level}: {name} is"
            yield Stimulus(
                "single presses",
                f"{level}_{name}_tap",
                f"{begin} tapped for one tick.",
                (*lead, (1, 1 << b), (settle, 0)),
            )
            yield Stimulus(
                "single presses",
                f"{level}_{name}_hold",
                f"{begin} held until settled.",
                (*lead, _hold(stage, 1 << b), (settle, 0)),
            )
            least = stage.acts[b, level]
            for ticks in () if least is None else (least - 1, least, least + 1):
                yield Stimulus(
                    "single presses",
                    f"{level}_{name}_press_{ticks}",
                    f"{begin} pressed for {_ticks(ticks)}; the port acts from {least} on.",
                    (*lead, (ticks, 1 << b), (settle if ticks else 0, 0)),
                )


def combinations_held(stage: Stage) -> Iterator[Stimulus]:
    """Yield every combination of two or more buttons, pressed and released one after another.

    Up to `ALL_ORDERS` buttons in every order of presses and of releases; beyond that pairs in every order,
    all buttons in every rotation, and a walk that passes every combination, one button at a time.
    """
    few = len(stage.port.buttons) <= ALL_ORDERS
    for level, lead in stage.lead.items():
        for group in _groups(stage, 2):
            orders = _orders(group, few)
            for press, release in orders:
                yield _in_order(stage, level, lead, press, release)
        if not few:
            yield _walk(stage, level, lead)


def _orders(group: tuple[int, ...], few: bool) -> list[tuple[tuple[int, ...], tuple[int, ...]]]:
    if few or len(group) == 2:
        return [(p, r) for p in permutations(group) for r in permutations(group)]
    turns = [group[i:] + group[:i] for i in range(len(group))]
    return [pair for turn in turns for pair in ((turn, turn), (turn, turn[::-1]))] if len(group) > 3 else []


def _in_order(
    stage: Stage, level: Level, lead: Runs, press: tuple[int, ...], release: tuple[int, ...]
) -> Stimulus:
    downs = [_mask(press[: i + 1]) for i in range(len(press))]
    ups = [_mask(release[i + 1 :]) for i in range(len(release))]
    return Stimulus(
        "held combinations",
        f"{level}_press_{names_of(stage, press)}_release_{names_of(stage, release)}",
        f"Settled {level}: press {_listed(stage, press)}; release {_listed(stage, release)}; settle at each.",
        (*lead, *(_hold(stage, mask) for mask in downs + ups)),
    )


def _walk(stage: Stage, level: Level, lead: Runs) -> Stimulus:
    codes = [i ^ i >> 1 for i in range(1, stage.port.held_count)]
    return Stimulus(
        "held combinations",
        f"{level}_every_combination",
        f"Settled {level}: passes every held combination, changing one button at a time.",
        (*lead, *(_hold(stage, mask) for mask in codes), (stage.rest.settle, 0)),
    )


def together(stage: Stage) -> Iterator[Stimulus]:
    """Yield buttons that change in the same tick: pressed, released or swapped at once."""
    settle = stage.rest.settle
    for level, lead in stage.lead.items():
        for group in _groups(stage, 2) if len(stage.port.buttons) <= 4 else _groups(stage, 2)[-1:]:
            yield Stimulus(
                "same tick",
                f"{level}_{names_of(stage, group)}_together",
                f"Settled {level}: {_joined(stage, group)} pressed and released in the same tick.",
                (*lead, _hold(stage, _mask(group)), (settle, 0)),
            )
            yield Stimulus(
                "same tick",
                f"{level}_{names_of(stage, group)}_together_brief",
                f"Settled {level}: {_joined(stage, group)} pressed together for one tick.",
                (*lead, (1, _mask(group)), (settle, 0)),
            )
        for a, b in permutations(range(len(stage.port.buttons)), 2):
            yield from _pair(stage, level, a, b)


def _pair(stage: Stage, level: Level, a: int, b: int) -> Iterator[Stimulus]:
    """Yield two buttons close to each other: swapped at once, overlapping, a moment apart, far apart."""
    one, two, settle = stage.port.buttons[a], stage.port.buttons[b], stage.rest.settle
    lead, end = stage.lead[level], (settle, 0)
    hold_a, hold_b, both = _hold(stage, 1 << a), _hold(stage, 1 << b), 1 << a | 1 << b
    short_a, short_b = (_surely(stage, button) for button in (a, b))
    for name, how, runs in (
        (f"{one}_swaps_to_{two}", "goes up in the tick in which {} goes down", (hold_a, hold_b)),
        *(
            (
                f"{one}_overlaps_{two}_{n}",
                f"goes up {_ticks(n)} after {{}} goes down",
                (hold_a, (n, both), hold_b),
            )
            for n in sorted({1, short_b[0] - 1, short_b[0]} - {0})
        ),
        (f"{one}_close_to_{two}", "is held until just before a short press of {}", (hold_a, (1, 0), short_b)),
        (f"{one}_then_{two}", "is pressed shortly, and later {}", (short_a, end, short_b)),
    ):
        purpose = f"Settled {level}: {one} {how.format(two)}."
        yield Stimulus("same tick", f"{level}_{name}", purpose, (*lead, *runs, end))


def _surely(stage: Stage, button: int) -> tuple[int, int]:
    """Return the shortest press that acts from either level."""
    return max(stage.tap(button, level) for level in LEVELS), 1 << button


# --- windows ---


@dataclass(frozen=True, slots=True)
class Probe:
    """A window to be tried: `make(ticks)` is the stimulus, `nominal` the circuit's own ticks if known."""

    name: str
    what: str
    start: Level
    nominal: int | None
    make: Callable[[int], Runs]


def windows(behaviour: Behaviour, stage: Stage) -> Iterator[Stimulus]:
    """Yield each window at the circuit's nominal and at the port's own end, one tick below, at and above."""
    probes = _probes(behaviour, stage)
    longest = [stage.rest.settle if p.nominal is None else 2 * p.nominal + 8 for p in probes]
    questions = [Question(p.make, _other(p.start), most) for p, most in zip(probes, longest, strict=True)]
    for probe, edge in zip(probes, first_acting(stage.port, questions), strict=True):
        yield from _around(probe, edge)


def _around(probe: Probe, edge: int | None) -> Iterator[Stimulus]:
    known = [n for n in (probe.nominal, edge) if n is not None]
    facts = [] if probe.nominal is None else [f"the circuit's nominal is {probe.nominal}"]
    facts += [] if edge is None else [f"the port acts from {edge} on"]
    for ticks in sorted({n + by for n in known for by in (-1, 0, 1) if n + by >= 1}):
        purpose = f"{probe.what} {_ticks(ticks)}; {' and '.join(facts)}."
        yield Stimulus("windows", f"{probe.name}_{ticks}", purpose, probe.make(ticks))


def _probes(behaviour: Behaviour, stage: Stage) -> list[Probe]:
    """Return the behaviour's finite windows, and those that the port has for itself."""
    told: dict[tuple[str, str, str], float | None] = {
        (w.button, w.start, w.window): w.seconds.nominal for w in behaviour.windows
    }
    probes = []
    for b, name in enumerate(stage.port.buttons):
        for start in LEVELS:
            for kind in KINDS:
                seconds = told.get((name, start, kind))
                nominal = None if seconds is None else round(seconds / stage.port.tick_s)
                if _can_try(stage, b, start, kind, nominal):
                    probes.append(_probe(stage, b, start, kind, nominal))
    return probes


def _can_try(stage: Stage, b: int, start: Level, kind: str, nominal: int | None) -> bool:
    """True where the probe can begin, and either the circuit or the port has such a window."""
    if nominal is not None:
        return (start if kind == "shortest-press" else _other(start)) in stage.lead
    return kind != "shortest-press" and all(stage.acts.get((b, level)) for level in LEVELS)


def _probe(stage: Stage, b: int, start: Level, kind: str, nominal: int | None) -> Probe:
    begin: Level = start if kind == "shortest-press" else _other(start)
    mask, settle, lead = 1 << b, stage.rest.settle, stage.lead[begin]
    name, tap, hold = stage.port.buttons[b], stage.tap(b, begin), _hold(stage, mask)
    stem = f"{start}_{name}_{kind.replace('-', '_')}"
    if kind == "shortest-press":
        return Probe(
            stem, f"Settled {start}: {name} is pressed for", start, nominal, _press(lead, mask, settle)
        )
    first = {"re-arm-after-tap": (tap, mask), "re-arm-after-press": (tap + 2, mask)}.get(kind, hold)
    again = (stage.tap(b, start), mask) if kind == "stray-gap" else hold
    how = {"re-arm-after-tap": "a tap", "re-arm-after-press": "a press a little longer"}.get(kind, "a hold")
    then = "its contact opens for" if kind == "stray-gap" else "it is pressed again after"
    what = f"After {how} of {name} that turned the output {start} {then}"
    return Probe(stem, what, start, nominal, lambda ticks: (*lead, first, (ticks, 0), again, (settle, 0)))


def timed(stage: Stage) -> Iterator[Stimulus]:
    """Yield second presses around the time at which the effect of a first one ends by itself."""
    keys = [(level, b) for level in stage.lead for b in range(len(stage.port.buttons))]
    begins = [(*stage.lead[level], (stage.tap(b, level), 1 << b)) for level, b in keys]
    if not keys:
        return
    said = drive(stage.port, [(*begin, (stage.rest.settle, 0)) for begin in begins], 64)[0]
    for (level, b), begin, runs in zip(keys, begins, said, strict=True):
        ends = [end - total(begin) for end in accumulate(ticks for ticks, _ in runs)]
        for gap in [end for end in ends[:-1] if end > 0][:2]:
            for ticks in sorted({gap // 2, gap - 1, gap, gap + 1} - {0}):
                yield Stimulus(
                    "timed outputs",
                    f"{level}_{stage.port.buttons[b]}_again_{ticks}",
                    f"Settled {level}: {stage.port.buttons[b]} is pressed again {_ticks(ticks)} after a press"
                    f" whose effect ends by itself after {_ticks(gap)}.",
                    (*begin, (ticks, 0), begin[-1], (stage.rest.settle, 0)),
                )


# --- contacts and people ---


def bounces(stage: Stage) -> Iterator[Stimulus]:
    """Yield bursts of one-tick contacts before a hold, after it, and a slow chatter."""
    settle = stage.rest.settle
    for level, lead in stage.lead.items():
        for b, name in enumerate(stage.port.buttons):
            mask = 1 << b
            hold = _hold(stage, mask)
            yield Stimulus(
                "bounce",
                f"{level}_{name}_bounces_on_press",
                f"Settled {level}: {name} bounces in one-tick contacts before it stays held.",
                (*lead, *((1, mask), (1, 0)) * BURST, hold, (settle, 0)),
            )
            yield Stimulus(
                "bounce",
                f"{level}_{name}_bounces_on_release",
                f"Settled {level}: {name} is held and bounces in one-tick gaps on release.",
                (*lead, hold, *((1, 0), (1, mask)) * BURST, (settle, 0)),
            )
            yield Stimulus(
                "bounce",
                f"{level}_{name}_bounces_on_both",
                f"Settled {level}: {name} bounces on press, and on release after a short press.",
                (
                    *lead,
                    *((1, mask), (1, 0)) * BURST,
                    (stage.tap(b, level), mask),
                    *((1, 0), (1, mask)) * BURST,
                    (settle, 0),
                ),
            )
        for b, name in enumerate(stage.port.buttons):
            yield Stimulus(
                "bounce",
                f"{level}_{name}_chatters",
                f"Settled {level}: {name} closes for one tick in every ten, again and again.",
                (*lead, *((1, 1 << b), (9, 0)) * CHATTER, (settle, 0)),
            )


def quick(stage: Stage) -> Iterator[Stimulus]:
    """Yield two taps in quick succession: of one tick, and just long enough to act."""
    for level, lead in stage.lead.items():
        for b, name in enumerate(stage.port.buttons):
            for tap, gap in {(1, 1): 0, (stage.tap(b, level), 1): 0, (stage.tap(b, level), 2): 0}:
                yield Stimulus(
                    "double taps",
                    f"{level}_{name}_double_tap_{tap}_{gap}",
                    f"Settled {level}: two taps of {name} of {_ticks(tap)}, {_ticks(gap)} apart.",
                    (*lead, (tap, 1 << b), (gap, 0), (tap, 1 << b), (stage.rest.settle, 0)),
                )


def stuck(stage: Stage) -> Iterator[Stimulus]:
    """Yield buttons held, and left alone, past 256 and 65 536 ticks, and pressed once more after that."""
    settle, lead = stage.rest.settle, ((stage.rest.settle, 0),)
    for b, name in enumerate(stage.port.buttons):
        mask = 1 << b
        press = _surely(stage, b)
        for ticks in (257, 65537 + settle):
            yield Stimulus(
                "stuck buttons",
                f"stuck_{name}_{ticks}",
                f"{name} is stuck for {ticks} ticks, longer than a counter of that size can tell.",
                (*lead, (ticks, mask), (settle, 0), press, (settle, 0)),
            )
            yield Stimulus(
                "stuck buttons",
                f"idle_{ticks}_{name}",
                f"{name} is pressed, left alone for {ticks} ticks, and pressed again.",
                (*lead, press, (ticks, 0), press, (settle, 0)),
            )


def repeated(behaviour: Behaviour, stage: Stage) -> Iterator[Stimulus]:
    """Yield the same button pressed many times, as slowly as it always acts and as fast as it can be."""
    for b, name in enumerate(stage.port.buttons):
        press = _surely(stage, b)
        gap = _longest_window(behaviour, stage, name)
        lead = ((stage.rest.settle, 0),)
        yield Stimulus(
            "repeated",
            f"repeated_{name}",
            f"{name} is pressed {REPEATS} times with gaps of {_ticks(gap)}.",
            (*lead, *(press, (gap, 0)) * REPEATS, (stage.rest.settle, 0)),
        )
        yield Stimulus(
            "repeated",
            f"repeated_fast_{name}",
            f"{name} is pressed {CHATTER} times for one tick, one tick apart.",
            (*lead, *((1, 1 << b), (1, 0)) * CHATTER, (stage.rest.settle, 0)),
        )


def _longest_window(behaviour: Behaviour, stage: Stage, button: str) -> int:
    seconds = [w.seconds.nominal for w in behaviour.windows if w.button == button and w.seconds.nominal]
    return min(stage.rest.settle, round(max(seconds, default=0.0) / stage.port.tick_s) + 2)


def mixed(stage: Stage) -> Iterator[Stimulus]:
    """Yield four sequences that mix all buttons and durations, drawn with a fixed seed."""
    spans = sorted(
        {
            1,
            2,
            3,
            7,
            *(t + d for t in stage.acts.values() if t for d in (0, 1)),
            *(max(1, stage.rest.settle >> s) for s in (1, 2, 3, 4)),
        }
    )
    for i in range(1, 5):
        draw = random.Random(i).random  # the only part of the module whose stream is promised to stay
        runs = [(spans[int(draw() * len(spans))], int(draw() * stage.port.held_count)) for _ in range(32)]
        yield Stimulus(
            "mixed",
            f"mixed_{i}",
            "A mixed sequence of short and long presses of all buttons.",
            merged([(stage.rest.settle, 0), *runs, (stage.rest.settle, 0)]),
        )
