"""The command line: reads arguments, calls the rooms, turns what they say into text and an exit status.

Results go to stdout; progress and diagnostics go to stderr.  Only click is imported at the
top, so that ``porter --help`` does not wait for numpy; everything else loads where it is used.
"""

import difflib
import io
import os
import shutil
import signal
import sys
import traceback
from collections.abc import Callable, Iterable, Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Any, NoReturn

import click

import porter

if TYPE_CHECKING:
    from rich.console import Console

    from porter.behaviour.model import Behaviour
    from porter.findings import Finding
    from porter.job import Job, Progress
    from porter.parity.model import Parity
    from porter.port.model import Port
    from porter.spec.model import Circuit

#: Exit statuses.
FINE, NO, UNUSABLE, INTERRUPTED = 0, 1, 2, 130

_EPILOG = """\b
Exit status: 0 fine; 1 the answer is no (an error finding, a ledger row that
differs and is not accepted); 2 the call or the spec can't be used; 130 stopped.
"""


def main(args: Sequence[str] | None = None) -> NoReturn:
    """Run the command line and leave with its exit status.

    Args:
        args: the arguments, None = those of the process.
    """
    signal.signal(signal.SIGTERM, _terminated)
    _encode_anything()
    status = _status(sys.argv[1:] if args is None else list(args))
    with _nobody_reading():
        sys.stdout.flush()
    sys.exit(status)


def _terminated(*_: object) -> NoReturn:
    """Leave by an exception, so that whatever is half made goes."""
    sys.exit(128 + signal.SIGTERM)


def _encode_anything() -> None:
    """Let a terminal that lacks a character show another in its place, rather than stop."""
    for stream in (sys.stdout, sys.stderr):
        if reconfigure := getattr(stream, "reconfigure", None):
            reconfigure(errors="replace")


@contextmanager
def _nobody_reading() -> Iterator[None]:
    """Let the reader of stdout leave early (``porter … | head``) without changing the answer."""
    try:
        yield
    except BrokenPipeError:
        with Path(os.devnull).open("wb") as nowhere:
            os.dup2(nowhere.fileno(), sys.stdout.fileno())


def _status(args: list[str]) -> int:
    from porter.findings import PorterError, SpecError

    try:
        with cli.make_context("porter", args) as context:
            return int(cli.invoke(context))
    except click.exceptions.Exit as leaving:  # --help and --version
        return leaving.exit_code
    except click.ClickException as error:
        error.show()
        return error.exit_code
    except (click.Abort, KeyboardInterrupt):
        click.echo("stopped; nothing was left half made", err=True)
        return INTERRUPTED
    except SpecError as error:
        _show_findings(error.findings, error.source)
        return error.exit_code
    except PorterError as error:
        click.echo(f"porter: error: {error}", err=True)
        return error.exit_code
    except Exception as error:
        return _own_fault(error)


def _own_fault(error: Exception) -> int:
    """Say that porter itself is at fault; the traceback is for those who ask for it."""
    if os.environ.get("PORTER_DEBUG") == "1":
        traceback.print_exc()
    said = f"{type(error).__name__}: {error}".splitlines()[0]
    click.echo(
        f"porter: internal error: {said}; please report it, with the spec and the output of PORTER_DEBUG=1",
        err=True,
    )
    return UNUSABLE


class _Commands(click.Group):
    """A group that suggests a name for one that it doesn't know."""

    def resolve_command(
        self, ctx: click.Context, args: list[str]
    ) -> tuple[str | None, click.Command | None, list[str]]:
        name = args[0] if args else ""
        if name and not name.startswith("-") and self.get_command(ctx, name) is None:
            ctx.fail(f"no such command: {name}.{_suggestion(name, self.list_commands(ctx))}")
        return super().resolve_command(ctx, args)

    def list_commands(self, ctx: click.Context) -> list[str]:  # noqa: ARG002  # in the order of the work
        return list(self.commands)


def _suggestion(name: str, known: Sequence[str]) -> str:
    near = difflib.get_close_matches(name, known, n=1)
    return f" Did you mean {near[0]}?" if near else ""


@click.group(cls=_Commands, epilog=_EPILOG, context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(porter.__version__, "--version", prog_name="porter")
def cli() -> None:
    """Port a timer-chip on/off latch to a small microcontroller, and prove that nothing changes.

    \b
    porter start aquarium_light            a spec to begin from
    porter check aquarium_light.yaml       what is wrong with the drawing
    porter port aquarium_light.yaml -o job everything, into one folder
    """


_spec = click.argument("spec", type=click.Path(dir_okay=True))
_as_json = click.option("--json", "as_json", is_flag=True, help="Print JSON for scripts.")
_folder = click.Path(file_okay=True, path_type=Path)


# --- commands ---


@cli.command()
@_spec
@_as_json
def check(spec: str, as_json: bool) -> int:
    """Say what is wrong with a drawing, and how to mend it."""
    from porter.findings import SpecError
    from porter.show import machine

    try:
        circuit, behaviour = _judged(spec)
    except SpecError as error:
        if as_json:
            _print(machine.dump(machine.checked(None, "unusable", error.findings)))
        raise
    if as_json:
        found = _placed(behaviour.findings, spec)
        _print(machine.dump(machine.checked(circuit.title, behaviour.verdict, found)))
        return _answer(behaviour.findings)
    from porter.render import render_summary

    _diagnose(circuit, behaviour.findings, spec)
    counts = render_summary(behaviour.findings) or "nothing to mend"
    _print(f"{circuit.title}: {behaviour.verdict}, {counts}\n")
    return _answer(behaviour.findings)


@cli.command()
@_spec
@click.option("--why", is_flag=True, help="Add where each time and margin comes from.")
@_as_json
def derive(spec: str, why: bool, as_json: bool) -> int:
    """Derive what the circuit does, and when."""
    circuit, behaviour = _judged(spec)
    if as_json:
        from porter.job import model_json

        _print(model_json(behaviour))
        return _answer(behaviour.findings)
    from porter.show import people

    _diagnose(circuit, behaviour.findings, spec)
    _tables(lambda out: people.show_behaviour(out, behaviour, why))
    return _answer(behaviour.findings)


@cli.command()
@_spec
@click.option(
    "--save",
    type=_folder,
    metavar="FILE.csv",
    help="Write the counterexample, if there is one, for `porter trace`.",
)
@_as_json
def prove(spec: str, save: Path | None, as_json: bool) -> int:
    """Prove that the port does the same, or show where not."""
    from porter.job import errors, merged, parity_json, prove_port
    from porter.port.plan import plan

    with _progress() as say:
        circuit, behaviour = _judged(spec, say)
        port = plan(circuit, behaviour)
        parity, acceptance = prove_port(circuit, port, behaviour, say)
    found = merged(errors(behaviour.findings), acceptance)
    if save is not None:
        _save_counterexample(parity, port, save, spec)
    _diagnose(circuit, found, spec)
    _say_open(parity)
    if as_json:
        _print(parity_json(parity))
    else:
        from porter.show import people

        _tables(lambda out: people.show_parity(out, parity))
    return _answer(found, parity)


@cli.command()
@_spec
@click.argument("presses", required=False, type=click.Path())
@click.option(
    "--press",
    "written",
    multiple=True,
    metavar="NAME@AT[+LENGTH]",
    help="A press, such as SET@0.1+50ms; repeat it for more.",
)
@click.option("--case", metavar="NAME", help="Which case of a file of test vectors.")
@click.option(
    "--start",
    type=click.Choice(["low", "high", "power-on"]),
    help="At rest with that output, or power-on. Default: at rest as the port starts; power-on for vectors.",
)
@click.option("--until", metavar="TIME", help="End of the run. Default: 1 s after the last change.")
@click.option(
    "--supply",
    metavar="TIME:VOLTS,...",
    help="The supply over time, such as 0:0,10ms:12 for a ramp; two of one time are a step.",
)
@click.option("--csv", "as_csv", is_flag=True, help="Print every change as CSV.")
@_as_json
def trace(
    spec: str,
    presses: str | None,
    written: tuple[str, ...],
    case: str | None,
    start: str | None,
    until: str | None,
    supply: str | None,
    as_csv: bool,
    as_json: bool,
) -> int:
    """Run circuit and port through the same presses.

    PRESSES is a CSV file with the header time_s,button,action (press or release); one with
    time_s and a column of 0 and 1 for each button; or a case of the test vectors.
    """
    from porter.port.plan import plan
    from porter.show import lanes, play

    if (presses is not None and written) or not (presses or written or supply):
        raise click.UsageError("name a file of presses or give --press, one of the two")
    circuit, behaviour = _judged(spec)
    port = plan(circuit, behaviour)
    tape = play.read_file(presses, circuit, port, case) if presses else play.read_words(written, circuit)
    course = None if supply is None else play.read_supply(supply)
    run = play.play(circuit, port, tape, start, until, course)
    if as_json:
        _print(play.as_json(run))
    elif as_csv:
        _print(play.as_csv(run))
    else:
        _tables(lambda out: lanes.show_trace(out, run.trace, port.tick_s))
    return FINE


@cli.command()
@_spec
@click.option("-o", "folder", type=_folder, required=True, metavar="DIR", help="Folder to write.")
@click.option("--language", type=click.Choice(["c", "micropython"]), help="Only this language.")
def emit(spec: str, folder: Path, language: str | None) -> int:
    """Write the firmware alone, with its self-tests."""
    job = _build(spec, folder, "firmware")
    wanted = f"firmware/{language or ''}"
    files = {p.partition("/")[2]: t for p, t in job.files.items() if p.startswith(wanted)}
    _write_files("firmware", files, folder, job.circuit, job.port)
    return _answer((*job.behaviour.findings, *job.acceptance), job.parity)


@cli.command()
@_spec
@click.option("-o", "folder", type=_folder, metavar="DIR", help="Folder to write.")
@click.option(
    "--format",
    "form",
    type=click.Choice(["csv", "json", "vcd"]),
    help="Only this format; to stdout without -o.",
)
def vectors(spec: str, folder: Path | None, form: str | None) -> int:
    """Write the test vectors alone."""
    from porter import job as jobs
    from porter.port.plan import plan
    from porter.vectors import build_vectors

    if folder is None and form is None:
        raise click.UsageError("give -o DIR for a folder of files, or --format for one format on stdout")
    if folder is not None:
        jobs.check_folder(folder, "vectors", Path(spec).name)
    with _progress() as say:
        circuit, behaviour = _judged(spec, say)
        port = plan(circuit, behaviour)
        say("building the test vectors")
        files = jobs.vector_files(build_vectors(behaviour, port))
    wanted = {p.partition("/")[2]: t for p, t in files.items() if p.endswith(form or "")}
    _diagnose(circuit, jobs.errors(behaviour.findings), spec)
    if folder is None:
        _print("".join(wanted.values()))
    else:
        _write_files("vectors", wanted, folder, circuit, port)
    return _answer(behaviour.findings)


@cli.command()
@_spec
@click.option("-o", "folder", type=_folder, required=True, metavar="DIR", help="Folder to write.")
@_as_json
def port(spec: str, folder: Path, as_json: bool) -> int:
    """Do the whole job into one folder.

    Report, proof, firmware in C and MicroPython, and test vectors."""
    from porter.job import write_job
    from porter.show import machine

    job = _build(spec, folder, "job")
    write_job(job, folder)
    if as_json:
        _print(machine.dump(machine.ported(job, str(folder))))
    else:
        _print(_port_lines(job, folder))
    return _answer((*job.behaviour.findings, *job.acceptance), job.parity)


@cli.command()
@click.argument("name", required=False)
@click.option(
    "-o", "file", type=_folder, metavar="FILE", help="File to write; - for stdout. Default: NAME.yaml here."
)
def start(name: str | None, file: Path | None) -> int:
    """Copy a shipped spec to begin from; without NAME, list them."""
    from porter.show import shipped

    if name is None:
        _print(shipped.listing())
        return FINE
    names = shipped.names()
    stem = name.removesuffix(".yaml")
    if stem not in names:
        raise click.UsageError(
            f"there is no shipped spec {name!r}.{_suggestion(stem, names)} `porter start` lists them."
        )
    if file == Path("-"):
        _print(shipped.text(stem))
        return FINE
    target = file or Path(f"{stem}.yaml")
    shipped.copy(stem, target)
    _print(f"wrote {target}\n")
    return FINE


@cli.command()
def schema() -> int:
    """Print the JSON Schema of a spec, for editors."""
    from porter.show import machine
    from porter.spec.schema import schema as spec_schema

    _print(machine.dump(spec_schema()))
    return FINE


# --- what the commands share ---


def _judged(spec: str, say: "Progress | None" = None) -> "tuple[Circuit, Behaviour]":
    """Read and derive; the circuit's positions carry the bare file name from here on."""
    from porter.job import judge, portable
    from porter.spec.read import read

    circuit = read(spec)
    if say is not None:
        say("solving the circuit")
    circuit = portable(circuit)
    return circuit, judge(circuit)


def _build(spec: str, folder: Path, kind: str) -> "Job":
    """Build the whole job, with the folder looked at before the work; its diagnostics are shown."""
    from porter.job import build_job, check_folder, merged
    from porter.spec.read import read

    check_folder(folder, kind, Path(spec).name)
    circuit = read(spec)
    with _progress() as say:
        job = build_job(circuit, progress=say)
    _diagnose(job.circuit, merged(job.behaviour.findings, job.acceptance), spec)
    _say_open(job.parity)
    return job


def _write_files(kind: str, files: dict[str, str], folder: Path, circuit: "Circuit", planned: "Port") -> None:
    from porter.job import MANIFEST, manifest, write_folder

    whole = {**files, MANIFEST: manifest(kind, circuit.file, planned.spec_sha256, files)}
    write_folder(whole, folder, kind, circuit.file)
    _print(_wrote(folder, whole))


def _wrote(folder: Path, files: Iterable[str]) -> str:
    return f"wrote {folder}:\n" + "".join(f"  {path}\n" for path in sorted(files))


def _port_lines(job: "Job", folder: Path) -> str:
    parity, planned = job.parity, job.port
    return (
        f"{job.circuit.title}\n"
        f"  drawing: {job.behaviour.verdict}\n"
        f"  port:    {parity.statement}\n"
        f"  style:   {planned.style}, tick {planned.tick_s * 1e3:g} ms, {len(job.suite.cases)} test cases\n"
        + _wrote(folder, job.files)
    )


def _answer(findings: "Sequence[Finding]", parity: "Parity | None" = None) -> int:
    """Return the exit status of what was found."""
    no = any(f.severity == "error" for f in findings) or (parity is not None and parity.verdict == "differs")
    return NO if no else FINE


def _placed(findings: "Sequence[Finding]", spec: str) -> "list[Finding]":
    """Return findings with the spec's path as it was given, so that editors find the file."""
    from dataclasses import replace

    return [replace(f, position=replace(f.position, file=spec)) for f in findings]


def _diagnose(circuit: "Circuit", findings: "Sequence[Finding]", spec: str) -> None:
    _show_findings(_placed(findings, spec), circuit.source)


def _show_findings(findings: "Sequence[Finding]", source: str) -> None:
    from porter.render import render_findings

    text = render_findings(findings, source, _colourful(sys.stderr))
    # color=True: the text has been made for this stream already
    click.echo(text, err=True, nl=False, color=True)


def _say_open(parity: "Parity") -> None:
    """Name the rows that nobody has accepted, and how to accept them."""
    from porter.parity.acceptance import open_rows

    rows = open_rows(parity)
    if not rows:
        return
    they = "row differs and is" if len(rows) == 1 else "rows differ and are"
    lines = [f"porter: {len(rows)} ledger {they} not accepted:"]
    lines += [f"  {row.row}: circuit: {row.circuit}; port: {row.port}" for row in rows]
    lines += ["  to take one on purpose, add it to the spec with your reason:"]
    lines += ["  accept:", f'    - {{row: {rows[0].row}, because: "why this is all right here"}}']
    click.echo("\n".join(lines), err=True)


def _save_counterexample(parity: "Parity", planned: "Port", file: Path, spec: str) -> None:
    from porter.show import play

    if parity.counterexample is None:
        click.echo(f"there is no counterexample; {file} was not written", err=True)
        return
    play.save_changes(parity.counterexample, planned, file)
    click.echo(f"wrote {file}; replay it with: porter trace {spec} {file} --start power-on", err=True)


def _print(text: str) -> None:
    """Print a result: to a terminal as it can, else as UTF-8 with its line ends as they are."""
    with _nobody_reading():
        click.echo(text if sys.stdout.isatty() else text.encode(), nl=False, color=True)


def _colourful(stream: Any) -> bool:
    """True where a stream is a terminal that shows colours and nobody minds them."""
    return not os.environ.get("NO_COLOR") and os.environ.get("TERM") != "dumb" and bool(stream.isatty())


def _tables(show: "Callable[[Console], None]") -> None:
    """Print what *show* puts on a console; a terminal has its own width, a file a fixed one."""
    from porter.show.people import FILE_WIDTH, console

    width = shutil.get_terminal_size().columns if sys.stdout.isatty() else FILE_WIDTH
    text = io.StringIO()
    show(console(text, width, _colourful(sys.stdout)))
    _print(text.getvalue())


@contextmanager
def _progress() -> "Iterator[Progress]":
    """Yield a function that shows the stage at work, on a terminal only."""
    if not sys.stderr.isatty() or os.environ.get("TERM") == "dumb":
        yield lambda _: None
        return
    from rich.console import Console
    from rich.progress import Progress, SpinnerColumn, TextColumn, TimeElapsedColumn

    screen = Console(stderr=True, no_color=not _colourful(sys.stderr), markup=False)
    columns = (SpinnerColumn(), TextColumn("{task.description}", markup=False), TimeElapsedColumn())
    with Progress(*columns, console=screen, transient=True) as bar:
        task = bar.add_task("reading", total=None)
        yield lambda stage: bar.update(task, description=stage)
