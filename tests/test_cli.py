"""The command line: exit status, stdout and stderr together."""

import json
import os
import subprocess
import sys
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import jsonschema
import pytest

import porter
from porter import cli
from porter.behaviour.model import Behaviour
from porter.job import judge
from porter.resources import folder
from porter.spec.model import Circuit

#: A two-button latch without memory: quick to solve and to prove.
SIGN = str(folder("specs") / "door_sign.yaml")
LAMP = str(folder("specs") / "aquarium_light.yaml")


@dataclass(frozen=True)
class Ended:
    """How a call ended."""

    status: int
    out: str
    err: str


Call = Callable[..., Ended]
_judged: dict[tuple[str, str], Behaviour] = {}


def judge_once(circuit: Circuit) -> Behaviour:
    """Derive each spec once in all these tests; the same text behaves the same."""
    key = circuit.file, circuit.source
    if key not in _judged:
        _judged[key] = judge(circuit)
    return _judged[key]


@pytest.fixture
def call(capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch) -> Call:
    """Return a function that makes a call in this process."""
    monkeypatch.setattr(cli.signal, "signal", lambda *_: None)  # the test runner has its own
    monkeypatch.setattr("porter.job.judge", judge_once)

    def made(*args: object) -> Ended:
        with pytest.raises(SystemExit) as left:
            cli.main([str(arg) for arg in args])
        said = capsys.readouterr()
        return Ended(left.value.code if isinstance(left.value.code, int) else -1, said.out, said.err)

    return made


def process(*args: str, **more: object) -> "subprocess.CompletedProcess[bytes]":
    """Make a call as a process of its own."""
    command = [sys.executable, "-m", "porter", *args]
    return subprocess.run(command, capture_output=True, check=False, **more)  # type: ignore[call-overload, no-any-return]


def edited(tmp_path: Path, spec: str, *changes: tuple[str, str]) -> Path:
    """Return a copy of a spec with texts replaced."""
    text = Path(spec).read_text("utf-8")
    for old, new in changes:
        assert old in text
        text = text.replace(old, new)
    path = tmp_path / Path(spec).name
    path.write_text(text, "utf-8")
    return path


# --- help and usage ---


def test_help_names_every_command_and_exit_status(call: Call) -> None:
    ended = call("--help")
    assert (ended.status, ended.err) == (0, "")
    for name in ("check", "derive", "prove", "trace", "emit", "vectors", "port", "start", "schema"):
        assert f"  {name} " in ended.out
    assert "Exit status: 0 fine; 1 the answer is no" in ended.out


def test_help_waits_for_no_library() -> None:
    code = (
        "import sys\nfrom porter import cli\n"
        "try: cli.main(['--help'])\n"
        "except SystemExit: pass\n"
        "slow = {'numpy', 'rich', 'yaml', 'jinja2', 'pydantic', 'vcd'} & set(sys.modules)\n"
        "assert not slow, slow"
    )
    subprocess.run([sys.executable, "-c", code], check=True, capture_output=True)


def test_a_job_does_not_load_what_only_the_schema_needs(tmp_path: Path) -> None:
    code = (
        "import sys\nfrom porter import cli\n"
        f"try: cli.main(['port', {SIGN!r}, '-o', {str(tmp_path / 'job')!r}])\n"
        "except SystemExit as left: assert left.code == 0, left.code\n"
        "assert 'pydantic' not in sys.modules"
    )
    subprocess.run([sys.executable, "-c", code], check=True, capture_output=True)


@pytest.mark.parametrize(
    ("args", "said"),
    [
        ([], "Usage: porter"),
        (["chek", SIGN], "Did you mean check?"),
        (["check"], "Missing argument 'SPEC'"),
        (["check", SIGN, "--jsn"], "No such option"),
        (["port", SIGN], "-o"),
        (["vectors", SIGN], "-o DIR"),
        (["trace", SIGN], "--press"),
        (["start", "aquarium"], "Did you mean aquarium_light?"),
    ],
)
def test_an_unusable_call_is_2_and_says_why_on_stderr(call: Call, args: list[str], said: str) -> None:
    ended = call(*args)
    assert (ended.status, ended.out) == (2, "")
    assert said in ended.err


def test_version(call: Call) -> None:
    assert Ended(0, f"porter, version {porter.__version__}\n", "") == call("--version")


# --- check ---


def test_check_of_a_sound_drawing(call: Call) -> None:
    ended = call("check", LAMP)
    assert (ended.status, ended.out) == (0, "Aquarium hood light: sound, 1 note\n")
    assert ended.err.startswith(f"{LAMP}:8:66: note: ")
    assert "\n    |" in ended.err
    assert "^^^\n  mend: " in ended.err


@pytest.mark.parametrize(
    ("name", "rule"),
    [
        ("faulty_bare_led", "led-without-resistor"),
        ("faulty_floating_threshold", "floating-input"),
        ("faulty_loaded_output", "high-level-too-low"),
        ("faulty_uneven_divider", "divider-uneven"),
        pytest.param("faulty_strong_feedback", "feedback-too-strong", marks=pytest.mark.system),  # slow
    ],
)
def test_check_of_a_faulty_drawing_is_1_and_names_its_fault(call: Call, name: str, rule: str) -> None:
    ended = call("check", folder("specs") / f"{name}.yaml")
    assert ended.status == 1
    assert ": error: " in ended.err
    assert f"({rule})" in ended.err
    assert "faulty" in ended.out


def test_an_unusable_spec_is_2_with_every_problem(call: Call, tmp_path: Path) -> None:
    spec = edited(tmp_path, SIGN, ("resistor: 12k", "resistor: 12kF"), ("family: bipolar", "family: bipolr"))
    ended = call("check", spec)
    assert (ended.status, ended.out) == (2, "")
    assert ended.err.count(": error: ") >= 2
    assert f"{spec}:" in ended.err


def test_a_missing_spec_is_2(call: Call, tmp_path: Path) -> None:
    ended = call("derive", tmp_path / "none.yaml")
    assert (ended.status, ended.out) == (2, "")
    assert "none.yaml:1:1: error: can't read the file" in ended.err


def test_check_as_json_has_the_findings_with_the_path_as_given(call: Call) -> None:
    ended = call("check", LAMP, "--json")
    said = json.loads(ended.out)
    assert (ended.status, ended.err, said["verdict"]) == (0, "", "sound")
    (finding,) = said["findings"]
    assert {"rule", "severity", "file", "line", "column", "message", "mend"} == set(finding)
    assert tuple(finding[k] for k in ("rule", "file", "line", "column")) == (
        "power-on-undetermined",
        LAMP,
        8,
        66,
    )


def test_check_as_json_of_an_unusable_spec(call: Call, tmp_path: Path) -> None:
    ended = call("check", tmp_path / "none.yaml", "--json")
    said = json.loads(ended.out)
    assert (
        ended.status,
        said["verdict"],
        [f["rule"] for f in said["findings"]],
    ) == (2, "unusable", ["file-unreadable"])


def test_the_readers_warnings_are_shown(call: Call, tmp_path: Path) -> None:
    spec = edited(tmp_path, SIGN, ("parts:", "parts:\n  R99: {resistor: 100k, between: [lonely, gnd]}"))
    circuit = porter.read(spec)
    ended = call("check", spec)
    for warning in circuit.warnings:
        assert f"({warning.rule})" in ended.err
    assert circuit.warnings


# --- derive ---

BAND = {
    "type": "object",
    "required": ["nominal", "least", "most"],
    "properties": {key: {"type": ["number", "null"]} for key in ("nominal", "least", "most")},
}
NAMES = {"type": "array", "items": {"type": "string"}}
LEVEL = {"enum": ["low", "high"]}


def rows(required: list[str], **properties: object) -> dict[str, object]:
    """Return the schema of a list of objects."""
    return {"type": "array", "items": {"type": "object", "required": required, "properties": properties}}


#: Written by hand from the contract, section "derive --json".
DERIVED = {
    "type": "object",
    "required": [
        *("format", "circuit", "buttons", "verdict", "held", "priority"),
        *("releases", "power_on", "windows", "margins", "findings"),
    ],
    "properties": {
        "format": {"const": 1},
        "circuit": {"type": "string"},
        "buttons": NAMES,
        "verdict": {"enum": ["sound", "typical-only", "faulty"]},
        "held": rows(
            ["held", "from", "output"],
            held=NAMES,
            output={"enum": ["low", "high", "oscillates"]},
            period_s={"type": "number"},
            **{"from": LEVEL},
        ),
        "priority": rows(["held", "output", "winner"], held=NAMES, winner={"type": ["string", "null"]}),
        "releases": rows(["held", "order", "output"], held=NAMES, order=NAMES),
        "power_on": {
            "type": "object",
            "required": ["output", "why"],
            "properties": {"output": {"enum": ["low", "high", "undetermined"]}, "why": {"type": "string"}},
        },
        "windows": rows(
            ["button", "from", "window", "seconds"],
            window={"enum": ["shortest-press", "re-arm-after-tap", "re-arm-after-hold", "stray-gap"]},
            seconds=BAND,
            **{"from": LEVEL},
        ),
        "margins": rows(["where", "volts"], volts=BAND),
        "findings": rows(
            ["rule", "severity", "file", "line", "column", "message", "mend"],
            severity={"enum": ["error", "warning", "note"]},
            line={"type": "integer"},
            column={"type": "integer"},
        ),
    },
}


def test_derive_as_json_keeps_the_contract(call: Call) -> None:
    ended = call("derive", SIGN, "--json")
    said = json.loads(ended.out)
    jsonschema.validate(said, DERIVED)
    assert (ended.status, ended.err) == (0, "")
    assert said["buttons"] == ["ENTER", "WAIT"]
    held = {(tuple(r["held"]), r["from"]): r["output"] for r in said["held"]}
    assert (held[("ENTER",), "low"], held[("WAIT",), "high"]) == ("high", "low")
    # reset beats trigger, so the button on the reset pin wins
    assert said["priority"] == [{"held": ["ENTER", "WAIT"], "output": "low", "winner": "WAIT"}]
    # the last one let go decides
    assert {tuple(r["order"]): r["output"] for r in said["releases"]} == {
        ("ENTER", "WAIT"): "low",
        ("WAIT", "ENTER"): "high",
    }


def test_derive_as_json_says_null_for_never(call: Call) -> None:
    said = json.loads(call("derive", SIGN, "--json").out)
    never = [w for w in said["windows"] if (w["button"], w["from"]) == ("ENTER", "high")]
    assert never[0]["seconds"] == {"nominal": None, "least": None, "most": None}


def test_derive_for_people_has_every_table(call: Call) -> None:
    ended = call("derive", SIGN)
    assert ended.out.startswith("Consulting room door sign: sound (")
    for title in ("What each held combination does", "who wins (reset-dominant)", "let go in this order"):
        assert title in ended.out
    for title in ("Time windows", "Margins", "Levels", "after power-on: undetermined"):
        assert title in ended.out
    assert "ENTER + WAIT   low      WAIT" in ended.out


def test_derive_why_adds_where_the_numbers_come_from(call: Call) -> None:
    plain, why = call("derive", SIGN), call("derive", SIGN, "--why")
    assert "where it comes from" not in plain.out
    assert "where it comes from" in why.out
    assert "from rest, time from the closing of" in " ".join(why.out.split())


# --- prove ---

#: Written by hand from the contract, section "prove --json".
PROVED = {
    "type": "object",
    "required": ["format", "verdict", "style", "tick_s", "closure", "sequences", "ledger", "counterexample"],
    "properties": {
        "format": {"const": 1},
        "verdict": {"enum": ["same", "within", "differs"]},
        "style": {"enum": ["count", "charge"]},
        "tick_s": {"type": "number"},
        "closure": {
            "type": "object",
            "required": ["states", "steps", "grey", "bound_v", "complete"],
            "properties": {
                **{key: {"type": "integer"} for key in ("states", "steps", "grey")},
                "bound_v": {"type": ["number", "null"]},
                "complete": {"type": "boolean"},
            },
        },
        "sequences": {
            "type": "object",
            "required": ["depth", "count", "differences"],
            "properties": {key: {"type": "integer"} for key in ("depth", "count", "differences")},
        },
        "ledger": rows(
            ["row", "circuit", "port", "verdict", "accepted"],
            verdict={"enum": ["same", "tighter", "differs"]},
            accepted={"type": ["string", "null"]},
        ),
        "counterexample": {
            "type": ["array", "null"],
            "items": {"type": "array", "prefixItems": [{"type": "integer"}, NAMES]},
        },
    },
}


def test_prove_as_json_keeps_the_contract(call: Call) -> None:
    ended = call("prove", SIGN, "--json")
    said = json.loads(ended.out)
    jsonschema.validate(said, PROVED)
    assert (ended.status, said["counterexample"], said["sequences"]["differences"]) == (0, None, 0)
    accepted = {r["row"]: r["accepted"] for r in said["ledger"] if r["accepted"]}
    assert {a.row: a.because for a in porter.read(SIGN).accept} == accepted


def test_prove_for_people_shows_closure_sequences_and_ledger(call: Call) -> None:
    ended = call("prove", SIGN)
    assert "same with 5 accepted deviations" in ended.out
    for title in ("Every reachable state", "Every sequence of held combinations", "Ledger"):
        assert title in ended.out


def test_a_row_that_nobody_accepted_is_1_and_is_named(call: Call, tmp_path: Path) -> None:
    spec = edited(tmp_path, SIGN, ("  - {row: supply-loss", "  # - {row: supply-loss"))
    ended = call("prove", spec)
    assert ended.status == 1
    assert "porter: 1 ledger row differs and is not accepted:" in ended.err
    assert "\n  supply-loss: circuit: " in ended.err
    assert '- {row: supply-loss, because: "' in ended.err


def test_a_row_accepted_without_need_is_an_error_at_its_place(call: Call, tmp_path: Path) -> None:
    spec = edited(tmp_path, SIGN, ("accept:", 'accept:\n  - {row: held-table, because: "why not"}'))
    line = spec.read_text("utf-8").splitlines().index('  - {row: held-table, because: "why not"}') + 1
    ended = call("prove", spec)
    assert ended.status == 1
    assert f"{spec}:{line}:5: error: `held-table` is same, nothing to accept" in ended.err


def test_an_acceptance_for_values_that_have_moved_opens_the_row_again(call: Call, tmp_path: Path) -> None:
    old, new = "{row: start-up-time, ", '{row: start-up-time, port: "ready at once", '
    ended = call("prove", edited(tmp_path, SIGN, (old, new)))
    assert ended.status == 1
    assert "(accept-outdated)" in ended.err
    assert "\n  start-up-time: circuit: " in ended.err


def test_there_is_no_counterexample_to_save(call: Call, tmp_path: Path) -> None:
    ended = call("prove", SIGN, "--save", tmp_path / "case.csv")
    assert ended.status == 0
    assert "there is no counterexample" in ended.err
    assert not (tmp_path / "case.csv").exists()


# --- vectors, emit, start, schema ---


def test_vectors_to_stdout(call: Call) -> None:
    ended = call("vectors", SIGN, "--format", "csv")
    assert ended.status == 0
    assert ended.out.startswith("case,tick,ENTER,WAIT,come_in,engaged,purpose")


def test_vectors_to_a_folder(call: Call, tmp_path: Path) -> None:
    ended = call("vectors", SIGN, "-o", tmp_path / "v")
    assert ended.status == 0
    assert sorted(p.name for p in (tmp_path / "v").iterdir()) == [
        "door_sign.csv",
        "door_sign.json",
        "door_sign.vcd",
        "manifest.json",
    ]


def test_emit_one_language_then_the_other(call: Call, tmp_path: Path) -> None:
    assert call("emit", SIGN, "-o", tmp_path / "f", "--language", "c").status == 0
    assert sorted(p.name for p in (tmp_path / "f").iterdir()) == ["c", "manifest.json"]
    assert call("emit", SIGN, "-o", tmp_path / "f", "--language", "micropython").status == 0
    assert sorted(p.name for p in (tmp_path / "f").iterdir()) == ["manifest.json", "micropython"]


def test_start_lists_the_shipped_specs(call: Call) -> None:
    ended = call("start")
    assert ended.status == 0
    shipped = sorted(p.name.removesuffix(".yaml") for p in folder("specs").iterdir())
    assert shipped == sorted(line.split()[0] for line in ended.out.splitlines())
    assert "Aquarium hood light\n" in ended.out


def test_start_copies_once(call: Call, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)
    assert Ended(0, "wrote door_sign.yaml\n", "") == call("start", "door_sign")
    assert Path(SIGN).read_bytes() == (tmp_path / "door_sign.yaml").read_bytes()
    (tmp_path / "door_sign.yaml").write_text("mine")
    ended = call("start", "door_sign")
    assert ended.status == 2
    assert "`door_sign.yaml` exists" in ended.err
    assert (tmp_path / "door_sign.yaml").read_text() == "mine"
    assert call("start", "door_sign", "-o", "other.yaml").status == 0
    assert Path(SIGN).read_text("utf-8") == call("start", "door_sign", "-o", "-").out


def test_schema_accepts_what_ships(call: Call) -> None:
    import yaml

    schema = json.loads(call("schema").out)
    jsonschema.Draft202012Validator.check_schema(schema)
    jsonschema.validate(yaml.safe_load(Path(LAMP).read_text("utf-8")), schema)


# --- port ---


def test_port_says_what_came_out(call: Call, tmp_path: Path) -> None:
    ended = call("port", SIGN, "-o", tmp_path / "job")
    assert ended.status == 0
    assert "drawing: sound" in ended.out
    assert "same with 5 accepted deviations" in ended.out
    assert "  report.html\n" in ended.out


def test_port_as_json(call: Call, tmp_path: Path) -> None:
    ended = call("port", SIGN, "-o", tmp_path / "job", "--json")
    said = json.loads(ended.out)
    assert (ended.status, said["passed"], said["open"]) == (0, True, [])
    assert all((tmp_path / "job" / path).is_file() for path in said["files"])


def test_port_of_a_faulty_drawing_writes_the_report_and_is_1(call: Call, tmp_path: Path) -> None:
    ended = call("port", folder("specs") / "faulty_bare_led.yaml", "-o", tmp_path / "job")
    assert ended.status == 1
    assert "(led-without-resistor)" in ended.err
    assert "\n  supply-loss: circuit: " in ended.err
    assert "led-without-resistor" in (tmp_path / "job" / "report.html").read_text("utf-8")


def test_port_of_an_unusable_spec_writes_nothing(call: Call, tmp_path: Path) -> None:
    spec = edited(tmp_path, SIGN, ("family: bipolar", "family: bipolr"))
    assert call("port", spec, "-o", tmp_path / "job").status == 2
    assert [spec.name] == [p.name for p in tmp_path.iterdir()]


# --- trouble ---


def test_ctrl_c_is_130_and_leaves_nothing(
    call: Call, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    def interrupted(*_: object) -> None:
        raise KeyboardInterrupt

    monkeypatch.setattr("porter.job._into_place", interrupted)
    ended = call("port", SIGN, "-o", tmp_path / "a" / "job")
    assert (ended.status, ended.out) == (130, "")
    assert "Traceback" not in ended.err
    assert list(tmp_path.iterdir()) == []


def test_a_fault_of_porters_own_is_one_line_and_2(call: Call, monkeypatch: pytest.MonkeyPatch) -> None:
    def broken(*_: object) -> None:
        raise ZeroDivisionError("sums\nwent wrong")

    monkeypatch.delenv("PORTER_DEBUG", raising=False)
    monkeypatch.setattr("porter.job.judge", broken)
    ended = call("check", SIGN)
    assert (ended.status, ended.out) == (2, "")
    assert ended.err.count("\n") == 1
    assert "internal error: ZeroDivisionError: sums; please report it" in ended.err
    monkeypatch.setenv("PORTER_DEBUG", "1")
    assert "Traceback" in call("check", SIGN).err


def test_a_reader_that_leaves_early_changes_nothing() -> None:
    read, write = os.pipe()
    os.close(read)
    command = [sys.executable, "-m", "porter", "derive", SIGN, "--json"]
    ended = subprocess.run(command, stdout=write, stderr=subprocess.PIPE, check=False)
    os.close(write)
    assert (ended.returncode, ended.stderr) == (0, b"")


def test_no_colour_into_files() -> None:
    ended = process("check", str(folder("specs") / "faulty_bare_led.yaml"))
    assert ended.returncode == 1
    assert b"\x1b" not in ended.stdout + ended.stderr


@pytest.mark.parametrize(("name", "colours"), [("", True), ("1", False)])
def test_colour_on_a_terminal_unless_no_color_is_set(name: str, colours: bool) -> None:
    pty = pytest.importorskip("pty")
    ours, theirs = pty.openpty()
    environ = {**os.environ, "NO_COLOR": name, "TERM": "xterm"}
    command = [sys.executable, "-m", "porter", "check", str(folder("specs") / "faulty_bare_led.yaml")]
    child = subprocess.Popen(command, stdout=subprocess.DEVNULL, stderr=theirs, env=environ)
    os.close(theirs)
    said = b""
    try:
        while part := os.read(ours, 65536):
            said += part
    except OSError:  # Linux says so when the other end of a terminal is closed
        pass
    os.close(ours)
    assert child.wait() == 1
    assert b"error:" in said
    assert colours == (b"\x1b[31m" in said)


def test_output_survives_a_terminal_without_the_characters() -> None:
    environ = {**os.environ, "PYTHONIOENCODING": "ascii"}
    ended = process("derive", SIGN, env=environ)
    assert ended.returncode == 0
    assert b"Traceback" not in ended.stderr
