"""Results as JSON for scripts; the keys and their meaning stay as they are, others may join them.

Times and volts have ten significant digits: more than any part deserves, and few
enough that the last bits of a mathematics library don't show.
"""

import json
from collections.abc import Iterable, Sequence
from pathlib import PurePath
from typing import TYPE_CHECKING, Any

from porter.behaviour.model import Band, Behaviour, HeldRow, Margin, PowerRow, TimerFigure, Window
from porter.findings import Finding
from porter.parity.model import Closure, FamilyCheck, LedgerRow, Parity

if TYPE_CHECKING:
    from porter.job import Job

FORMAT = 1
Object = dict[str, Any]


def dump(data: object) -> str:
    """Return *data* as JSON text with its keys in the order given, and a line break at the end."""
    return json.dumps(data, indent=2, ensure_ascii=False, allow_nan=False) + "\n"


def figure(value: float | None) -> float | None:
    """Return a number with ten significant digits; None stays None."""
    return None if value is None else float(f"{value:.10g}")


def band(values: Band) -> Object:
    """Return a band; null = never."""
    return {
        "nominal": figure(values.nominal),
        "least": figure(values.least),
        "most": figure(values.most),
    }


def findings(found: Iterable[Finding]) -> list[Object]:
    """Return findings with the bare names of their files, so that no folder gets into a result."""
    return [{**f.as_json(), "file": PurePath(f.position.file).name} for f in found]


def derived(behaviour: Behaviour) -> Object:
    """Return what ``derive --json`` prints and ``model.json`` holds."""
    return {
        "format": FORMAT,
        "circuit": behaviour.circuit,
        "buttons": list(behaviour.buttons),
        "verdict": behaviour.verdict,
        "held": [_held(row) for row in behaviour.held],
        "priority": [
            {"held": list(r.held), "output": r.output, "winner": r.winner} for r in behaviour.priority
        ],
        "dominance": behaviour.dominance,
        "releases": [
            {"held": list(r.held), "order": list(r.order), "output": r.output} for r in behaviour.releases
        ],
        "power_on": {
            "output": behaviour.power_on.output,
            "why": behaviour.power_on.why,
            "corners": behaviour.power_on.corners,
            "guaranteed": behaviour.power_on.guaranteed,
        },
        "power": [_course(row) for row in behaviour.power],
        "windows": [_window(w) for w in behaviour.windows],
        "timed": [
            {
                "button": t.button,
                "output": t.output,
                "seconds": band(t.seconds),
                "guaranteed": band(t.guaranteed),
            }
            for t in behaviour.timed
        ],
        "margins": [_margin(m) for m in behaviour.margins],
        "levels": [{"name": level.name, "volts": band(level.volts)} for level in behaviour.levels],
        "figures": [_timer_figure(row) for row in behaviour.figures],
        "findings": findings(behaviour.findings),
        "notes": list(behaviour.notes),
    }


def _held(row: HeldRow) -> Object:
    period = {} if row.period_s is None else {"period_s": figure(row.period_s)}
    agreed = {"corners": row.corners, "guaranteed": row.guaranteed}
    return {"held": list(row.held), "from": row.start, "output": row.output, **period, **agreed}


def _course(row: PowerRow) -> Object:
    return {
        "profile": row.profile,
        "from": row.start,
        "held": list(row.held),
        "output": row.output,
        "why": row.why,
        "port": row.port,
    }


def _timer_figure(row: TimerFigure) -> Object:
    return {
        "name": row.name,
        "least": figure(row.least),
        "typical": figure(row.typical),
        "most": figure(row.most),
        "unit": row.unit,
        "source": row.source,
        "overridden": row.overridden,
    }


def _window(window: Window) -> Object:
    return {
        "button": window.button,
        "from": window.start,
        "window": window.window,
        "seconds": band(window.seconds),
        "guaranteed": band(window.guaranteed),
        "why": window.why,
    }


def _margin(margin: Margin) -> Object:
    return {
        "where": margin.where,
        "volts": band(margin.volts),
        "guaranteed": band(margin.guaranteed),
        "why": margin.why,
    }


def proved(parity: Parity) -> Object:
    """Return what ``prove --json`` prints and ``parity.json`` holds."""
    closure, tried = parity.closure, parity.sequences
    return {
        "format": FORMAT,
        "verdict": parity.verdict,
        "statement": parity.statement,
        "style": parity.style,
        "tick_s": figure(parity.tick_s),
        "closure": _closure(closure),
        "clocks": [{"clock": figure(clock), **_closure(at)} for clock, at in parity.clocks],
        "family": _family(parity.family),
        "sequences": {
            "depth": tried.depth,
            "count": tried.count,
            "differences": tried.differences,
            "grey": tried.grey,
            "strides": list(tried.strides),
        },
        "ledger": [_row(row) for row in parity.ledger],
        "counterexample": _changes(parity.counterexample),
    }


def _closure(closure: Closure) -> Object:
    return {
        "states": closure.states,
        "steps": closure.steps,
        "grey": closure.grey,
        "differs": closure.differs,
        "bound_v": figure(closure.bound_v),
        "band_s": figure(closure.band_s),
        "spread_s": figure(closure.spread_s),
        "complete": closure.complete,
        "said": list(closure.said),
    }


def _family(family: FamilyCheck | None) -> Object | None:
    if family is None:
        return None
    return {
        "sequences": family.sequences,
        "units": family.units,
        "clocks": [figure(c) for c in family.clocks],
        "always": family.always,
        "either": family.either,
        "violations": family.violations,
        "said": family.said,
    }


def _row(row: LedgerRow) -> Object:
    return {
        "row": row.row,
        "circuit": row.circuit,
        "port": row.port,
        "verdict": row.verdict,
        "accepted": row.accepted,
    }


def _changes(changes: Sequence[tuple[int, tuple[str, ...]]] | None) -> list[list[object]] | None:
    return None if changes is None else [[tick, list(names)] for tick, names in changes]


def checked(title: str | None, verdict: str, found: Iterable[Finding]) -> Object:
    """Return what ``check --json`` prints; files are named as they were given."""
    return {"format": FORMAT, "circuit": title, "verdict": verdict, "findings": [f.as_json() for f in found]}


def ported(job: "Job", folder: str) -> Object:
    """Return what ``port --json`` prints."""
    return {
        "format": FORMAT,
        "circuit": job.circuit.title,
        "folder": folder,
        "drawing": job.behaviour.verdict,
        "parity": job.parity.verdict,
        "statement": job.parity.statement,
        "passed": job.passed,
        "open": [row.row for row in job.open_rows],
        "findings": findings((*job.behaviour.findings, *job.acceptance)),
        "files": list(job.files),
    }
