"""From a circuit to what it really does."""

import dataclasses
from collections.abc import Iterator, Sequence
from itertools import combinations, permutations

import numpy as np

from porter.behaviour.corner import Population, population, units_at_the_ends
from porter.behaviour.explain import margin_why, window_why
from porter.behaviour.measure import OSCILLATES, Measures, measure, release_in_order, works
from porter.behaviour.model import (
    Band,
    Behaviour,
    Corners,
    HeldRow,
    Level,
    Margin,
    NamedLevel,
    PowerOn,
    PriorityRow,
    ReleaseRow,
    Settled,
    Timed,
    TimerFigure,
    Verdict,
    Window,
)
from porter.behaviour.power import assumption, power_notes, power_rows
from porter.behaviour.rules import Evidence, find
from porter.behaviour.rules.words import figure
from porter.circuit.engine import Engine, Ints
from porter.circuit.family import FAMILIES, KEYS, figures, sources
from porter.circuit.values import Floats, columns
from porter.findings import Finding
from porter.spec.model import RAILS, Circuit

_LEVELS: tuple[Level, Level] = ("low", "high")
_OUTPUTS: tuple[Settled, ...] = ("low", "high", "oscillates")
#: Beyond this many buttons held together only as many orders as this one has are walked.
_ALL_ORDERS = 4


def derive(circuit: Circuit) -> Behaviour:
    """Derive everything that the circuit does, over its tolerances.

    Args:
        circuit: as read.

    Returns:
        The behaviour, findings included; nothing is raised for a faulty drawing.
    """
    cols = columns(circuit)
    engine = Engine(circuit, None, cols)
    nominal = measure(engine)
    keys = tuple(nominal.margins)
    drawn = population(circuit, cols, False, keys)
    published = population(circuit, cols, True, keys)
    power_on = _power_on(engine, drawn, published)
    power = tuple(power_rows(circuit, cols, nominal, starts_at(circuit, power_on)))
    base = Behaviour(
        circuit=circuit.title,
        buttons=tuple(b.name for b in circuit.buttons),
        verdict="sound",
        held=tuple(_held_rows(circuit, nominal, drawn, published)),
        priority=tuple(_priority_rows(circuit, nominal)),
        dominance=_dominance(circuit, nominal),
        releases=tuple(_release_rows(circuit, engine)),
        power_on=power_on,
        windows=tuple(_windows(circuit, engine, nominal, drawn, published)),
        margins=tuple(_margins(circuit, engine, nominal, drawn, published)),
        levels=tuple(_levels(engine, drawn)),
        findings=(),
        notes=(*_notes(engine, drawn, published), *power_notes(power), assumption(circuit)),
        power=power,
        figures=tuple(_figures(circuit)),
        timed=tuple(_timed(circuit, nominal, drawn, published)),
        extra={"units": units_at_the_ends((drawn, published)), "slowest_s": _slowest(engine)},
    )
    evidence = Evidence(circuit, engine, nominal, drawn, published, base)
    findings = tuple(sorted(find(evidence), key=lambda f: (f.position, f.rule, f.message)))
    return dataclasses.replace(base, findings=findings, verdict=_verdict(findings, nominal, drawn, published))


def _slowest(engine: Engine) -> float:
    """The longest time constant met so far, seconds, 0 where nothing decays."""
    rates = [float(r) for mode in engine.modes for r in mode.rate[0] if r > 1e-9]
    return 1.0 / min(rates) if rates else 0.0


def _names(circuit: Circuit, mask: int) -> tuple[str, ...]:
    return tuple(b.name for i, b in enumerate(circuit.buttons) if mask >> i & 1)


def _held_rows(
    circuit: Circuit, nominal: Measures, drawn: Population, published: Population
) -> Iterator[HeldRow]:
    for (q, mask), output in sorted(nominal.held.items(), key=lambda item: (item[0][1], item[0][0])):
        if output[0] < 0:
            continue
        period = float(nominal.period_s[q, mask][0])
        oscillates = output[0] == OSCILLATES and period > 0
        parts, guaranteed = (_alike(group.measures.held[q, mask]) for group in (drawn, published))
        yield HeldRow(
            _names(circuit, mask),
            _LEVELS[q],
            _OUTPUTS[int(output[0])],
            period if oscillates else None,
            corners=parts,
            guaranteed=guaranteed,
        )


def _alike(outputs: Ints) -> Corners:
    return "same" if (outputs == outputs[0]).all() else "either"


def held_output(nominal: Measures, mask: int) -> Settled:
    """Return what a held combination does: one output whatever was before, or ``keeps``."""
    seen = {int(nominal.held[q, mask][0]) for q in (0, 1)} - {-1}
    if len(seen) == 1:
        return _OUTPUTS[seen.pop()]
    return "keeps" if OSCILLATES not in seen else "oscillates"


def _command(nominal: Measures, mask: int) -> tuple[int, ...]:
    return tuple(int(nominal.held[q, mask][0]) for q in (0, 1))


def _priority_rows(circuit: Circuit, nominal: Measures) -> Iterator[PriorityRow]:
    for mask in range(1 << len(circuit.buttons)):
        pressed = [i for i in range(len(circuit.buttons)) if mask >> i & 1]
        if len(pressed) > 1:
            same = [i for i in pressed if _command(nominal, 1 << i) == _command(nominal, mask)]
            winner = circuit.buttons[same[0]].name if len(same) == 1 else None
            yield PriorityRow(_names(circuit, mask), held_output(nominal, mask), winner)


def _dominance(circuit: Circuit, nominal: Measures) -> str:
    """Name the dominance where some button only sets and some button only resets."""
    count = len(circuit.buttons)
    sets = [i for i in range(count) if _command(nominal, 1 << i) == (1, 1)]
    resets = [i for i in range(count) if _command(nominal, 1 << i) == (0, 0)]
    both = {_command(nominal, 1 << s | 1 << r) for s in sets for r in resets}
    names: dict[tuple[tuple[int, ...], ...], str] = {((0, 0),): "reset-dominant", ((1, 1),): "set-dominant"}
    return names.get(tuple(both), "")


def _release_rows(circuit: Circuit, engine: Engine) -> Iterator[ReleaseRow]:
    count = len(circuit.buttons)
    for size in range(2, count + 1):
        for group in combinations(range(count), size):
            for order in _orders(group):
                output = _after_releases(engine, order)
                named = tuple(circuit.buttons[i].name for i in order)
                yield ReleaseRow(_names(circuit, sum(1 << i for i in group)), named, output)


def _orders(group: Sequence[int]) -> Iterator[tuple[int, ...]]:
    if len(group) <= _ALL_ORDERS:
        yield from permutations(group)
    else:  # the last one decides, so let each be last once
        for k in range(len(group)):
            yield (*group[:k], *group[k + 1 :], group[k])


def _after_releases(engine: Engine, order: Sequence[int]) -> Settled:
    found = (release_in_order(engine, q, order) for q in (0, 1))
    seen = {_OUTPUTS[output] for output in found if output is not None}
    return seen.pop() if len(seen) == 1 else "oscillates" if "oscillates" in seen else "keeps"


def _power_on(engine: Engine, drawn: Population, published: Population) -> PowerOn:
    found = _nominal_start(engine)
    parts, guaranteed = (
        _alike(_start_of(Engine(engine.circuit, group.rows, engine.columns))) for group in (drawn, published)
    )
    return dataclasses.replace(found, corners=parts, guaranteed=guaranteed)


def _start_of(engine: Engine) -> Ints:
    """Return each unit's output after a step of the supply: LOW, HIGH, OSCILLATES, or -1 where it keeps."""
    ends = []
    for q in (0, 1):
        lanes = engine.empty(q)
        engine.run(lanes, np.inf)
        ends.append(np.where(lanes.busy, OSCILLATES, lanes.q))
    return np.where(ends[0] == ends[1], ends[0], -1)


def _nominal_start(engine: Engine) -> PowerOn:
    outcome = int(_start_of(engine)[0])
    if outcome == -1:
        why = (
            "no input forces the latch when the supply steps up over empty capacitors: "
            "it keeps what it came up with"
        )
        return PowerOn("undetermined", why)
    if outcome == OSCILLATES:
        return PowerOn("undetermined", "the circuit oscillates with no button held")
    return PowerOn(_LEVELS[outcome], _forcing(engine, outcome))


def starts_at(circuit: Circuit, power_on: PowerOn) -> int:
    """Return the level that a port starts at: as the spec asks, as the circuit does, or low."""
    if circuit.port.power_on is not None:
        return int(circuit.port.power_on == "high")
    return int(power_on.output == "high")


def _forcing(engine: Engine, output: int) -> str:
    """Say which input forces the latch at the step, or that one does later."""
    at_once = []
    for q in (0, 1):
        lanes = engine.empty(q)
        engine.resolve(lanes)
        at_once.append(int(lanes.q[0]))
    lanes = engine.empty(1 - output)
    lanes.q[:] = 1 - output
    f = engine.guards(lanes)[0]
    commands = ("trigger", f[0] < 0, 1), ("threshold", f[1] > 0, 0), ("reset", f[2] < 0, 0)
    pins = [name for name, on, level in commands if on and level == output]
    if at_once == [output, output] and pins:
        return f"the {' and the '.join(pins)} input forces it the instant the supply is there"
    return "an input forces it while the capacitors charge"


def _band(nominal: Floats, values: Floats) -> Band:
    least, most = float(values.min()), float(values.max())
    return Band(*(None if np.isinf(v) else v for v in (float(nominal[0]), least, most)))


def _windows(
    circuit: Circuit, engine: Engine, nominal: Measures, drawn: Population, published: Population
) -> Iterator[Window]:
    for key, value in nominal.windows.items():
        button, q, kind = key
        yield Window(
            circuit.buttons[button].name,
            _LEVELS[q],
            kind,
            _band(value, drawn.measures.windows[key]),
            _band(value, published.measures.windows[key]),
            window_why(engine, nominal, key, drawn),
        )


def _timed(circuit: Circuit, nominal: Measures, drawn: Population, published: Population) -> Iterator[Timed]:
    for key, value in nominal.timed.items():
        if np.isfinite(value[0]):
            bands = (_band(value, group.measures.timed[key]) for group in (drawn, published))
            yield Timed(circuit.buttons[key[0]].name, _LEVELS[key[1]], *bands)


def _margins(
    circuit: Circuit, engine: Engine, nominal: Measures, drawn: Population, published: Population
) -> Iterator[Margin]:
    for key, value in nominal.margins.items():
        yield Margin(
            margin_place(circuit, key),
            _band(value, drawn.measures.margins[key]),
            _band(value, published.measures.margins[key]),
            margin_why(engine, key, drawn),
        )


def margin_place(circuit: Circuit, key: tuple[int, int, str]) -> str:
    """Say where a margin is taken, in words."""
    mask, q, what = key
    held = " and ".join(_names(circuit, mask))
    if what == "press":
        return f"press of {held} with the output {_LEVELS[q]}: past the level that flips it"
    pin, side = what.split()
    return f"{held + ' held' if held else 'no button held'}, output {_LEVELS[q]}: {pin} {side[:-1]} its level"


def _levels(engine: Engine, drawn: Population) -> Iterator[NamedLevel]:
    """Voltages worth reading: the timer's levels as published, and every node at rest over the part tolerances."""
    supply = float(engine.supply[0])
    cols = engine.columns
    for pin, key, unit in (
        ("trigger", "trigger_ratio", supply),
        ("threshold", "threshold_ratio", supply),
        ("reset", "reset_level", 1.0),
    ):
        k = cols.index(f"timer.{key}")
        if pin == "reset" or not _has_control(engine):
            yield NamedLevel(
                f"{pin} level", Band(*(float(v[k]) * unit for v in (cols.nominal, cols.least, cols.most)))
            )
    units = Engine(engine.circuit, drawn.rows, cols)
    yield from _control_levels(units)
    for q in (0, 1):
        lanes, ok = units.rest(q)
        if ok[0]:
            volts = units.volts(lanes)
            volts = np.where(np.abs(volts) < 1e-9 * supply, 0.0, volts)  # rounding is no voltage
            for name, column in zip(units.topo.nodes, volts.T, strict=True):
                yield NamedLevel(f"{name} at rest, output {_LEVELS[q]}", _band(column, column))


def _has_control(engine: Engine) -> bool:
    return engine.circuit.timer.pins.get("control", "gnd") not in RAILS


def _control_levels(units: Engine) -> Iterator[NamedLevel]:
    """The levels that a network on the control pin makes, at rest."""
    if not _has_control(units):
        return
    rests = [units.rest(q) for q in (0, 1)]
    lanes = next((lanes for lanes, ok in rests if ok[0]), rests[0][0])
    control = units.volts(lanes)[:, units.topo.node(units.circuit.timer.pins["control"])]
    trigger, threshold = (
        units.rows[:, units.columns.index(f"timer.{key}")] for key in ("trigger_ratio", "threshold_ratio")
    )
    for name, volts in (("trigger", control * trigger / threshold), ("threshold", control)):
        yield NamedLevel(f"{name} level", _band(volts, volts))


def _figures(circuit: Circuit) -> Iterator[TimerFigure]:
    """The fitted timer's figures: the spec's own, or the family's with the documents they stand in."""
    timer = circuit.timer
    said = sources(FAMILIES[timer.family], circuit.supply.nominal)
    for key, spread in figures(timer, circuit.supply.nominal).items():
        own = key in timer.values
        place = timer.value_positions.get(key)
        line = f"{circuit.file}:{place.line}" if place else circuit.file
        source = line if own else said[key]
        yield TimerFigure(key, spread.least, spread.nominal, spread.most, KEYS[key][0], source, own)


def _strained(engine: Engine) -> Iterator[str]:
    """Where the output carries more than the straight line of its model was drawn through."""
    out = engine.circuit.timer.pins.get("output", "gnd")
    if out in RAILS:
        return
    for q, most in enumerate(FAMILIES[engine.circuit.timer.family].modelled_a):
        lanes, ok = engine.rest(q)
        ampere = _output_ampere(engine, q, float(engine.volts(lanes)[0, engine.topo.node(out)]))
        if ok[0] and ampere > most:
            yield (
                f"the {_LEVELS[q]} output carries {figure(ampere, 'A')}, more than the {figure(most, 'A')} up to which "
                "its model follows published levels: the real level may lie further from its rail"
            )


def _output_ampere(engine: Engine, q: int, volts: float) -> float:
    """Return the current that the output sources (high) or sinks (low) at a voltage."""

    def fitted(key: str) -> float:
        return float(engine.columns.nominal[engine.columns.index(f"timer.{key}")])

    if q:
        across, ohm = float(engine.supply[0]) - fitted("high_drop") - volts, fitted("high_resistance")
    else:
        across, ohm = volts - fitted("low_level"), fitted("low_resistance")
    return across / max(ohm, 1e-3)


def _notes(engine: Engine, drawn: Population, published: Population) -> Iterator[str]:
    for name, group in (("part tolerances", drawn), ("part tolerances and published figures", published)):
        how = (
            "every corner"
            if group.exhaustive
            else "the corners that each result's own slopes point to, and a fixed draw of others"
        )
        yield f"{name}: {len(group.moving)} values move something; {how}, {len(group.rows)} units"
        mixed = [w for w in group.measures.windows.values() if np.isinf(w).any() and np.isfinite(w).any()]
        if mixed:
            yield (
                f"{name}: {len(mixed)} windows are there in some units only; such a window ends where it ceases "
                "to be, which need not be at a corner"
            )
    yield from _strained(engine)
    if engine.topo.states > 1:
        yield "more than one capacitor: the corners are the rule here, not a proof of the extremes"


def _verdict(
    findings: Sequence[Finding], nominal: Measures, drawn: Population, published: Population
) -> Verdict:
    if any(f.severity == "error" for f in findings):
        return "faulty"
    for group in (drawn, published):
        if not works(group.measures, nominal).all() or any(
            m.min() < 0 for m in group.measures.margins.values()
        ):
            return "typical-only"
    return "sound"
