"""The sections that carry the change notice: ledger, deviations, what was proved, vectors."""

from collections.abc import Mapping

from porter.parity.model import LedgerRow, Parity
from porter.report.numbers import count, plural, seconds, volts
from porter.report.page import (
    Block,
    Box,
    Cell,
    Fold,
    Items,
    Section,
    Table,
    Text,
    Tone,
    row,
    sentence,
    together,
)
from porter.spec.model import Acceptance, Circuit
from porter.vectors.model import Suite

_ROW_TONE: Mapping[str, Tone] = {"same": "good", "tighter": "fair", "differs": "bad"}


def ledger_section(parity: Parity) -> Section:
    """Return every aspect of behaviour, circuit against port, and the counterexample if there is one."""
    rows = tuple(row(r.row, r.circuit, r.port, _row_verdict(r), r.accepted or "–") for r in parity.ledger)
    heads = ("Aspect", "Circuit", "Port", "Verdict", "Accepted because")
    blocks: list[Block] = [Table("Ledger: circuit against port", heads, rows, "The ledger is empty.")]
    if parity.counterexample is not None:
        blocks.append(_counterexample(parity))
    return Section("ledger", "Ledger", tuple(blocks))


def _row_verdict(ledger: LedgerRow) -> Cell:
    if ledger.verdict == "differs" and ledger.accepted is not None:
        return Cell("differs, accepted", "fair")
    return Cell(ledger.verdict, _ROW_TONE[ledger.verdict])


def _counterexample(parity: Parity) -> Table:
    assert parity.counterexample is not None
    rows = tuple(
        row(count(tick), seconds(tick * parity.tick_s), together(held))
        for tick, held in parity.counterexample
    )
    caption = "Counterexample: a sequence from power-on after which circuit and port part"
    return Table(caption, ("Tick", "Time", "Held from then on"), rows, "Power-on alone, with no button held.")


def deviations_section(circuit: Circuit, parity: Parity) -> Section:
    """Return the deviations, each on its own: accepted, open, and those that are only tighter."""
    accepted = [r for r in parity.ledger if r.accepted is not None]
    blocks: list[Block] = [_open_box(parity)] if _open(parity) else []
    blocks += [_deviation(r, circuit) for r in accepted]
    tighter = [r for r in parity.ledger if r.verdict == "tighter" and r.accepted is None]
    if tighter:
        said = tuple(f"{r.row}: the circuit {r.circuit}; the port {r.port}" for r in tighter)
        blocks.append(Items("Tighter than the circuit's own spread; needs no acceptance", said))
    named = {r.row for r in parity.ledger}
    idle = tuple(f"{a.row}: {a.because}" for a in circuit.accept if a.row not in named)
    if idle:
        blocks.append(Items("Accepted in the spec, but the ledger has no such row", idle))
    return Section("deviations", "Deviations", tuple(blocks) or (Text("There are no deviations."),))


def _open(parity: Parity) -> tuple[LedgerRow, ...]:
    return tuple(r for r in parity.ledger if r.verdict == "differs" and r.accepted is None)


def _open_box(parity: Parity) -> Box:
    items = tuple(f"{r.row}: the circuit {r.circuit}; the port {r.port}" for r in _open(parity))
    text = (
        "These rows differ and nobody has accepted them; the proof fails until someone does, with a reason."
    )
    return Box("bad", "Open differences", text, items)


def _deviation(ledger: LedgerRow, circuit: Circuit) -> Table:
    rows = [
        row("before (circuit)", ledger.circuit),
        row("after (port)", ledger.port),
        row("verdict", ledger.verdict),
        row("accepted because", ledger.accepted or "–"),
    ]
    rows += [r for a in circuit.accept if a.row == ledger.row for r in _accepted_at(a, ledger)]
    return Table(f"Accepted deviation: {ledger.row}", ("Item", "Value"), tuple(rows))


def _accepted_at(acceptance: Acceptance, ledger: LedgerRow) -> list[tuple[Cell, ...]]:
    at = acceptance.position
    pairs = ((acceptance.circuit, ledger.circuit), (acceptance.port, ledger.port))
    moved = any(then is not None and then != now for then, now in pairs)
    rows = [row("accepted in", f"{at.file}, line {at.line}")]
    rows += [row("values at the time", " / ".join(then or "not recorded" for then, _ in pairs))]
    if moved:
        rows.append(row("still as accepted", Cell("no: the values have changed since", "bad")))
    return rows


# --- what was proved ---


def parity_section(parity: Parity) -> Section:
    """Return what was proved and by how large a search."""
    closure, tried = parity.closure, parity.sequences
    bound = volts(closure.bound_v) if closure.bound_v is not None else "no copies, so no bound is needed"
    complete = Cell("yes, for sequences of any length", "good") if closure.complete else Cell("no", "bad")
    walk = (
        row("reachable states", count(closure.states)),
        row("steps looked at (state and held)", count(closure.steps)),
        row("steps that decide differently", _nought(closure.differs)),
        row("grey steps (within the bound of a threshold)", count(closure.grey)),
        row("a capacitor copy's distance from the true voltage, at most", bound),
        row("the output turns earlier or later for it by, at most", _band(closure.band_s, closure.spread_s)),
        row("walk complete", complete),
    )
    literal = (
        row("depth, held combinations in a row", count(tried.depth)),
        row("ticks that each is held", ", ".join(map(count, tried.strides)) or "not stated"),
        row("sequences run", count(tried.count)),
        row("sequences that differ outside grey", _nought(tried.differences)),
        row("sequences that meet grey", count(tried.grey)),
    )
    said = tuple(map(sentence, closure.said))
    sampling = (
        "Circuit and port are compared with buttons that change on tick boundaries. A real edge falls "
        f"between two ticks and is seen at the next, one tick ({seconds(parity.tick_s)}) late at most."
    )
    blocks: list[Block] = [Items("In words", said)] if said else []
    blocks += [
        *_clock_blocks(parity),
        *_family_blocks(parity),
        Text(sampling),
        Table("Closure: the walk over every reachable state", ("Item", "Found"), walk),
        Table("Sequences: every one run, circuit against port", ("Item", "Found"), literal),
    ]
    return Section("parity", "What was proved", tuple(blocks))


def _band(band_s: float | None, spread_s: float | None) -> str:
    """How far grey decisions reach in time, beside how far apart allowed units are."""
    if band_s is None:
        return "nothing is grey"
    if not spread_s or not band_s:
        return seconds(band_s)
    return f"{seconds(band_s)}; two allowed units differ by {seconds(spread_s)} in their narrowest window"


def _clock_blocks(parity: Parity) -> list[Block]:
    """The walk with the clock at the ends of its tolerance."""
    if not parity.clocks:
        return []
    rows = tuple(
        row(
            f"tick {clock:.4g} of nominal",
            count(c.states),
            _nought(c.differs),
            count(c.grey),
            volts(c.bound_v) if c.bound_v is not None else "none",
            _band(c.band_s, None),
        )
        for clock, c in parity.clocks
    )
    heads = ("Clock", "States", "Decide differently", "Grey", "Bound", "In time")
    return [Table("The same walk with the controller's clock at the ends of its tolerance", heads, rows)]


def _family_blocks(parity: Parity) -> list[Block]:
    """The port against units that span the family."""
    family = parity.family
    if family is None:
        return []
    rows = (
        row("press sequences", count(family.sequences)),
        row("units that span the family", count(family.units)),
        row("clocks, in nominal ticks", ", ".join(f"{c:.4g}" for c in family.clocks)),
        row("output edges that every unit has (always)", count(family.always)),
        row("output edges that some units have (either)", count(family.either)),
        row("sequences in which the port does what no unit does", _nought(family.violations)),
    )
    return [Table("Family: what every allowed unit does, the port must do", ("Item", "Found"), rows)]


def _nought(number: int) -> Cell:
    return Cell(count(number), "bad" if number else "good")


# --- vectors ---


def vectors_section(suite: Suite) -> Section:
    """Return what the test vectors hold and what they are sure to find."""
    ticks = sum(case.ticks for case in suite.cases)
    text = (
        f"{plural(len(suite.cases), 'case')}, {plural(ticks, 'tick')} in all "
        f"({seconds(ticks * suite.tick_s)} of running time), each from power-on."
    )
    rows = tuple(
        row(c.name, c.purpose, count(c.ticks), seconds(c.ticks * suite.tick_s), count(len(c.held)))
        for c in suite.cases
    )
    heads = ("Case", "Shows", "Ticks", "Time", "Steps of the stimulus")
    blocks: list[Block] = [Text(text)]
    if suite.guarantees:
        blocks.append(Items("What the suite is sure to find", tuple(map(sentence, suite.guarantees))))
    blocks.append(Fold("All cases", (Table("Test vectors", heads, rows, "The suite is empty."),)))
    return Section("vectors", "Test vectors", tuple(blocks))
