"""The whole job, from a circuit to a folder of evidence and firmware, for the command line and for scripts::

    job = build_job(porter.read("aquarium_light.yaml"))
    write_job(job, "aquarium_light")

A folder is written whole or not at all, and only over what porter wrote itself and
nobody has touched since: ``manifest.json`` holds the hash of each file.
"""

import dataclasses
import hashlib
import json
import shutil
import tempfile
from collections.abc import Callable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Literal

import porter
from porter.behaviour.model import Behaviour
from porter.findings import Finding, PorterError
from porter.parity.model import LedgerRow, Parity
from porter.port.model import Port
from porter.sheet.model import Sheet
from porter.spec.model import Circuit
from porter.trace import Trace
from porter.vectors.model import Suite

if TYPE_CHECKING:
    from porter.emit import Levels

MANIFEST = "manifest.json"
_ELSEWHERE = "give another folder with -o"
#: Called with the name of each stage as it begins.
Progress = Callable[[str], None]


class FolderError(PorterError):
    """The folder can't be written; the message says what is in the way and how to mend it."""


@dataclass(frozen=True, slots=True)
class Job:
    """Everything that came out of one spec.

    Args:
        circuit: with the bare file name in every position.
        behaviour: with the reader's warnings and the interface sheet's errors among its findings.
        acceptance: what is wrong with the spec's acceptances.
        files: text by path in the job folder.
    """

    circuit: Circuit
    behaviour: Behaviour
    port: Port
    parity: Parity
    acceptance: tuple[Finding, ...]
    suite: Suite
    files: Mapping[str, str]

    @property
    def open_rows(self) -> tuple[LedgerRow, ...]:
        """The ledger rows that differ and are not accepted."""
        from porter.parity.acceptance import open_rows

        return open_rows(self.parity)

    @property
    def errors(self) -> tuple[Finding, ...]:
        """The error findings of drawing and acceptances."""
        return errors((*self.behaviour.findings, *self.acceptance))

    @property
    def passed(self) -> bool:
        """True where nothing stands against the port: no error finding, parity proved or accepted."""
        return not self.errors and self.parity.verdict != "differs"


def build_job(circuit: Circuit, *, progress: Progress | None = None) -> Job:
    """Derive, plan, prove, and write every file of the job as text.

    Args:
        circuit: as read; the folder that it was read from doesn't get into the job.
        progress: called with the name of each stage as it begins.

    Raises:
        PorterError: the circuit can't be ported; nothing is raised for a faulty one.
    """
    from porter.emit import emit
    from porter.port.plan import plan
    from porter.sheet import render_text, sheet
    from porter.vectors import build_vectors

    say = progress or _quiet
    circuit = portable(circuit)
    say("solving the circuit")
    behaviour = judge(circuit)
    say("planning the port")
    port = plan(circuit, behaviour)
    parity, acceptance = prove_port(circuit, port, behaviour, say)
    interface = sheet(circuit, behaviour, port)
    say("building the test vectors")
    suite = build_vectors(behaviour, port)
    say("writing the firmware")
    files = {
        "model.json": model_json(behaviour),
        "parity.json": parity_json(parity),
        **emit(port, suite, statement=parity.statement, levels=_levels(interface)),
        **vector_files(suite),
        "interface.txt": render_text(interface),
    }
    say("drawing the report")
    behaviour = dataclasses.replace(behaviour, findings=merged(behaviour.findings, interface.findings))
    shown = dataclasses.replace(behaviour, findings=merged(behaviour.findings, acceptance))
    files["report.html"] = _report(circuit, shown, port, parity, suite, files, interface)
    files[MANIFEST] = manifest("job", circuit.file, port.spec_sha256, files)
    return Job(circuit, behaviour, port, parity, acceptance, suite, dict(sorted(files.items())))


def _quiet(_: str) -> None:
    """Report no progress."""


def _levels(interface: Sheet) -> "Levels":
    from porter.emit import Levels

    pressed = tuple(network.level for network in interface.inputs)
    pull_up = tuple(int(network.to == "gnd") for network in interface.inputs)
    return Levels(pressed, pull_up, interface.active)


# --- the parts of a job, each of use alone ---


def portable(circuit: Circuit) -> Circuit:
    """Return the circuit as if read from its own folder: the same bytes wherever the spec lies."""
    from porter.spec.read import read_text

    if circuit.supply_position.file == circuit.file:
        return circuit
    return read_text(circuit.source, circuit.file)


def judge(circuit: Circuit) -> Behaviour:
    """Derive the behaviour; the reader's warnings join its findings."""
    from porter.behaviour.derive import derive

    behaviour = derive(circuit)
    return dataclasses.replace(behaviour, findings=merged(circuit.warnings, behaviour.findings))


def prove_port(
    circuit: Circuit, port: Port, behaviour: Behaviour, progress: Progress = _quiet
) -> tuple[Parity, tuple[Finding, ...]]:
    """Prove a port; returns the proof and what is wrong with the spec's acceptances."""
    from porter.parity.acceptance import acceptance_findings
    from porter.parity.prove import prove

    progress("proving parity")
    parity = prove(circuit, port, behaviour)
    return parity, acceptance_findings(circuit, parity)


def merged(*groups: Sequence[Finding]) -> tuple[Finding, ...]:
    """Return all findings by position, each once."""
    every = dict.fromkeys(finding for group in groups for finding in group)
    return tuple(sorted(every, key=lambda f: (f.position, f.rule, f.message)))


def errors(findings: Sequence[Finding]) -> tuple[Finding, ...]:
    """Return the findings that are errors."""
    return tuple(f for f in findings if f.severity == "error")


def model_json(behaviour: Behaviour) -> str:
    """Return the text of ``model.json``."""
    from porter.show.machine import derived, dump

    return dump(derived(behaviour))


def parity_json(parity: Parity) -> str:
    """Return the text of ``parity.json``."""
    from porter.show.machine import dump, proved

    return dump(proved(parity))


def vector_files(suite: Suite) -> dict[str, str]:
    """Return the vectors in every format, by path in the job folder."""
    from porter.vectors import write_csv, write_json, write_vcd

    writers = {"csv": write_csv, "json": write_json, "vcd": write_vcd}
    return {f"vectors/{suite.name}.{ending}": write(suite) for ending, write in writers.items()}


def _report(
    circuit: Circuit,
    behaviour: Behaviour,
    port: Port,
    parity: Parity,
    suite: Suite,
    files: Mapping[str, str],
    interface: Sheet,
) -> str:
    from porter.charts import standard_traces
    from porter.report import render

    traces = (*standard_traces(circuit, behaviour, port), *_counterexample(circuit, port, parity))
    return render(
        circuit, behaviour, port, parity, suite, files, traces, versions=_versions(), sheet=interface
    )


def _counterexample(circuit: Circuit, port: Port, parity: Parity) -> Iterator[Trace]:
    """Run the press sequence that circuit and port answer differently, where there is one, from power-on."""
    from porter.charts import run_trace

    if parity.counterexample is None:
        return
    schedule = [(tick * port.tick_s, held) for tick, held in parity.counterexample]
    last = parity.counterexample[-1][0]
    end_s = (last + max(20, last // 5)) * port.tick_s  # long enough to see the one and miss the other
    level: Literal["low", "high"] = "high" if port.start_q else "low"
    title = "Counterexample: a press sequence from power-on that circuit and port answer differently"
    trace = run_trace(circuit, port, schedule, end_s, title, output=level)
    yield dataclasses.replace(trace, waves=(), levels=())  # a chart of edges


def _versions() -> dict[str, str]:
    return {"porter": porter.__version__}


# --- the manifest ---


def manifest(kind: str, spec_file: str, spec_sha256: str, files: Mapping[str, str]) -> str:
    """Return the text of ``manifest.json``: the spec, what made it, and the SHA-256 of every other file.

    Args:
        kind: ``job`` for everything, ``firmware`` or ``vectors`` for that part alone.
    """
    return _sealed(
        {
            "format": 1,
            "kind": kind,
            "inputs": {spec_file: spec_sha256},
            "versions": _versions(),
            "files": {path: _digest(text.encode()) for path, text in files.items()},
        }
    )


def _sealed(content: Mapping[str, object]) -> str:
    """Return the content as JSON with a hash of itself, so that an edit of the manifest shows too."""
    return _json({**content, "seal": _digest(_json(content).encode())})


def _json(content: Mapping[str, object]) -> str:
    return json.dumps(content, indent=2, sort_keys=True, ensure_ascii=False) + "\n"


def _digest(data: bytes) -> str:
    return hashlib.sha256(data).hexdigest()


@dataclass(frozen=True, slots=True)
class _Written:
    """What a folder's manifest says: kind and spec of the job, hash by path."""

    kind: str
    spec_file: str
    hashes: Mapping[str, str]


def _written(folder: Path) -> _Written | None:
    """Return what a folder's manifest says, None where it has none as porter writes it."""
    try:
        text = (folder / MANIFEST).read_bytes().decode()
        content = json.loads(text)
        content.pop("seal")
        said = _Written(content["kind"], ", ".join(content["inputs"]), dict(content["files"]))
        return said if _sealed(content) == text else None
    except (OSError, ValueError, KeyError, TypeError, AttributeError):
        return None


# --- the folder ---


def write_job(job: Job, folder: str | Path) -> None:
    """Write a job's files; see `write_folder`."""
    write_folder(job.files, folder, "job", job.circuit.file)


def write_folder(files: Mapping[str, str], folder: str | Path, kind: str, spec_file: str) -> None:
    """Write files into a folder, all of them or none.

    Args:
        files: text by path, ``manifest.json`` among them.
        folder: made with its parents; it may exist if it is empty, or if porter wrote it for
            the same spec and nothing in it has changed.
        kind, spec_file: as in the manifest.

    Raises:
        FolderError: something else is there, or the system refuses; nothing has been changed.
    """
    folder = Path(folder)
    check_folder(folder, kind, spec_file)
    try:
        with _parents(folder), _beside(folder) as made:
            for path, text in files.items():
                _write(made / path, text)
            check_folder(folder, kind, spec_file)  # again: whoever was quick is safe too
            _into_place(made, folder)
    except OSError as error:
        raise FolderError(f"can't write `{folder}`: {error.strerror or error}") from error


def check_folder(folder: str | Path, kind: str, spec_file: str) -> None:
    """Make sure that a folder may be written over by a job of this kind and spec.

    Raises:
        FolderError: it holds what porter didn't write or somebody changed since; each such file is named.
    """
    folder = Path(folder)
    if folder.is_symlink():
        raise FolderError(
            f"`{folder}` is a link to `{folder.readlink()}`: name that folder itself, or {_ELSEWHERE}"
        )
    if folder.exists() and not folder.is_dir():
        raise FolderError(f"`{folder}` is a file: {_ELSEWHERE}")
    if folder.is_dir():
        _check_place(folder)
        _check_contents(folder)
        _check_owner(folder, kind, spec_file)


def _check_contents(folder: Path) -> None:
    strange = tuple(_strangers(folder))
    if strange:
        raise FolderError(
            f"`{folder}` is not written over, since it holds what porter did not write, or wrote and "
            f"somebody changed since:\n{_listed(strange)}\n"
            f"  mend: {_pins(strange)}move these, or {_ELSEWHERE}"
        )


def _pins(strange: Sequence[str]) -> str:
    """Say where a filled-in pin layer belongs, where one is in the way."""
    names = [Path(line.split(" (")[0]).name for line in strange]
    mine = next((name for name in ("board.c", "main.py") if name in names), None)
    return f"keep your own {mine} outside of this folder, which is remade as a whole; " if mine else ""


def _check_owner(folder: Path, kind: str, spec_file: str) -> None:
    """Refuse to put one job in the place of another: its report may be somebody's evidence."""
    said = _written(folder)
    if said is not None and (said.kind, said.spec_file) != (kind, spec_file):
        raise FolderError(
            f"`{folder}` holds another piece of work, the {said.kind} folder of {said.spec_file}: "
            f"move it, or {_ELSEWHERE}"
        )


def _check_place(folder: Path) -> None:
    """Refuse the folder that the call is made in: taking it away would leave the shell nowhere."""
    here, place = Path.cwd(), folder.resolve()
    if place == here or place in here.parents:
        raise FolderError(f"`{folder}` is the folder that you are in, or holds it: {_ELSEWHERE}")


def _listed(lines: Sequence[str], most: int = 20) -> str:
    more = [f"… and {len(lines) - most} more"] if len(lines) > most else []
    return "\n".join(f"  {line}" for line in (*lines[:most], *more))


def _strangers(folder: Path) -> Iterator[str]:
    """Yield what is in a folder that porter didn't write, or that has changed since, with why."""
    said = _written(folder)
    hashes = None if said is None else said.hashes
    for path in sorted(folder.rglob("*")):
        name = path.relative_to(folder).as_posix()
        if path.is_dir() and not path.is_symlink():
            if not any(path.iterdir()):
                yield f"{name}/ (an empty folder that porter did not make)"
        elif why := _strange(path, name, hashes):
            yield f"{name} ({why})"


def _strange(path: Path, name: str, hashes: Mapping[str, str] | None) -> str:
    """Return why a file isn't ours, empty where it is."""
    if path.is_symlink() or not path.is_file():
        return "not a plain file"
    if name == MANIFEST:
        return "" if hashes is not None else "changed, or not porter's"
    if hashes is None or name not in hashes:
        return "not porter's"
    return "" if _digest(path.read_bytes()) == hashes[name] else "changed since porter wrote it"


def _write(path: Path, text: str) -> None:
    path.parent.mkdir(parents=True, exist_ok=True)
    path.write_bytes(text.encode())


@contextmanager
def _parents(folder: Path) -> Iterator[None]:
    """Make the folders above one; take those made away again where the work inside fails."""
    missing = [p for p in folder.absolute().parents if not p.exists()]
    try:
        for parent in reversed(missing):
            parent.mkdir()
        yield
    except BaseException:
        for parent in missing:
            if parent.is_dir() and not any(parent.iterdir()):
                parent.rmdir()
        raise


@contextmanager
def _beside(folder: Path) -> Iterator[Path]:
    """Yield an empty folder on the same disk; whatever is left of it at the end goes."""
    outer = Path(tempfile.mkdtemp(prefix=f".{folder.name}-", dir=folder.absolute().parent))
    try:
        made = outer / "new"
        made.mkdir()  # with the rights that the user's mask gives, unlike the one around it
        yield made
    finally:
        shutil.rmtree(outer, ignore_errors=True)


def _into_place(made: Path, folder: Path) -> None:
    """Put a finished folder where it belongs; what was there comes back if that fails."""
    old = made.with_name("old")
    if folder.is_dir():
        folder.rename(old)
    try:
        made.rename(folder)
    except BaseException:
        if old.is_dir():
            old.rename(folder)
        raise
