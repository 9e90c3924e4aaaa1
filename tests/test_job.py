"""The job folder: whole or not at all, the same bytes every time, and never over somebody's work."""

import dataclasses
import hashlib
import json
import os
import string
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import porter
from porter import job as jobs
from porter.job import FolderError, Job, build_job, check_folder, write_folder, write_job
from porter.parity.acceptance import acceptance_findings, open_rows
from porter.parity.model import Closure, LedgerRow, Parity, Sequences
from porter.resources import folder
from porter.spec.model import Acceptance, Circuit
from porter.spec.read import read

#: A two-button latch without memory: quick to solve and to prove.
SIGN = Path(str(folder("specs") / "door_sign.yaml"))


@pytest.fixture(scope="module")
def sign() -> Job:
    return build_job(read(SIGN))


def contents(place: Path) -> dict[str, bytes]:
    """Return every file of a folder."""
    return {p.relative_to(place).as_posix(): p.read_bytes() for p in place.rglob("*") if p.is_file()}


# --- what is in it ---


def test_the_folder_holds_what_the_contract_names(sign: Job) -> None:
    assert list(sign.files) == [
        "firmware/c/board.c",
        "firmware/c/door_sign.c",
        "firmware/c/door_sign.h",
        "firmware/c/door_sign_selftest.c",
        "firmware/micropython/door_sign.py",
        "firmware/micropython/door_sign_selftest.py",
        "firmware/micropython/main.py",
        "interface.txt",
        "manifest.json",
        "model.json",
        "parity.json",
        "report.html",
        "vectors/door_sign.csv",
        "vectors/door_sign.json",
        "vectors/door_sign.vcd",
    ]


def test_the_manifest_hashes_the_spec_and_every_other_file(sign: Job, tmp_path: Path) -> None:
    write_job(sign, tmp_path / "job")
    said = json.loads((tmp_path / "job" / "manifest.json").read_text("utf-8"))
    assert said["inputs"] == {"door_sign.yaml": hashlib.sha256(SIGN.read_bytes()).hexdigest()}
    assert said["versions"] == {"porter": porter.__version__}
    files = contents(tmp_path / "job")
    del files["manifest.json"]
    assert said["files"] == {path: hashlib.sha256(data).hexdigest() for path, data in files.items()}


def test_the_same_bytes_from_another_place_and_time(
    sign: Job, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    elsewhere = tmp_path / "somewhere" / "else"
    elsewhere.mkdir(parents=True)
    (elsewhere / SIGN.name).write_bytes(SIGN.read_bytes())
    monkeypatch.chdir(elsewhere)
    monkeypatch.setenv("TZ", "Pacific/Auckland")
    monkeypatch.setenv("USER", "somebody")
    again = build_job(read(SIGN.name))
    assert again.files == sign.files


def test_no_file_says_where_it_was_made(sign: Job) -> None:
    for path, text in sign.files.items():
        assert str(SIGN.parent) not in text, path
        assert "specs/door_sign" not in text, path


def test_the_job_of_a_sound_spec_passes(sign: Job) -> None:
    assert sign.passed
    assert (sign.errors, sign.open_rows) == ((), ())


#: All that ships and is meant to be good; the slow ones are for the long run.
GOOD = sorted(p.name for p in folder("specs").iterdir() if not p.name.startswith("faulty_"))
QUICK = {"cellar_pump.yaml", "kiln_vent.yaml"}


@pytest.mark.parametrize(
    "name", [pytest.param(n, marks=() if n in QUICK else pytest.mark.system) for n in GOOD if n != SIGN.name]
)
def test_every_shipped_spec_passes(name: str) -> None:
    job = build_job(read(str(folder("specs") / name)))
    assert job.errors == ()
    assert job.open_rows == ()
    assert job.passed


# --- over what is there ---


def test_it_makes_the_folders_above(sign: Job, tmp_path: Path) -> None:
    write_job(sign, tmp_path / "a" / "b" / "job")
    assert contents(tmp_path / "a" / "b" / "job") == {p: t.encode() for p, t in sign.files.items()}


def test_it_takes_an_empty_folder_and_its_own_unchanged_one(sign: Job, tmp_path: Path) -> None:
    place = tmp_path / "job"
    place.mkdir()
    write_job(sign, place)
    first = contents(place)
    write_job(sign, place)
    assert contents(place) == first
    (place / "report.html").unlink()  # what somebody took away is no work lost
    write_job(sign, place)
    assert contents(place) == first
    assert [p.name for p in tmp_path.iterdir()] == ["job"]


def _edit(path: Path) -> None:
    path.write_bytes(path.read_bytes() + b"\n")


def _link(path: Path) -> None:
    kept = path.parent.parent / "kept"
    kept.write_bytes(path.read_bytes())
    path.unlink()
    path.symlink_to(kept)


@pytest.mark.parametrize(
    ("name", "spoil", "said"),
    [
        ("firmware/c/board.c", _edit, r"firmware/c/board\.c \(changed.*\n.*keep your own board\.c outside"),
        ("firmware/micropython/main.py", _edit, r"main\.py \(changed since"),
        ("notes.txt", Path.touch, r"notes\.txt \(not porter's\)"),
        (".hidden", Path.touch, r"\.hidden \(not porter's\)"),
        ("empty", Path.mkdir, r"empty/ \(an empty folder"),
        ("report.html", _link, r"report\.html \(not a plain file\)"),
        ("manifest.json", _edit, r"manifest\.json \(changed"),
        ("manifest.json", Path.unlink, r"report\.html \(not porter's\)"),
        ("manifest.json", lambda p: p.write_text("[]"), r"manifest\.json \(changed"),
    ],
)
def test_it_refuses_what_it_did_not_write(  # type: ignore[no-untyped-def]
    sign: Job, tmp_path: Path, name: str, spoil, said: str
) -> None:
    place = tmp_path / "job"
    write_job(sign, place)
    spoil(place / name)
    before = contents(place)
    with pytest.raises(FolderError, match=f"(?s){said}"):
        write_job(sign, place)
    assert contents(place) == before


def test_an_edited_manifest_is_seen_even_where_it_still_fits(sign: Job, tmp_path: Path) -> None:
    place = tmp_path / "job"
    write_job(sign, place)
    said = json.loads((place / "manifest.json").read_text("utf-8"))
    said["note"] = "approved by the fire brigade"
    (place / "manifest.json").write_text(json.dumps(said, indent=2, sort_keys=True) + "\n")
    with pytest.raises(FolderError, match=r"manifest\.json \(changed"):
        write_job(sign, place)


def test_it_refuses_a_link_a_file_and_the_folder_one_is_in(
    sign: Job, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    real = tmp_path / "real"
    real.mkdir()
    (tmp_path / "link").symlink_to(real)
    (tmp_path / "file").touch()
    monkeypatch.chdir(real)
    for place, said in (
        ("link", "is a link to"),
        ("file", "is a file"),
        ("real", "the folder that you are in"),
    ):
        with pytest.raises(FolderError, match=said):
            write_job(sign, tmp_path / place)
    with pytest.raises(FolderError, match="the folder that you are in"):
        write_job(sign, ".")
    assert list(real.iterdir()) == []


def test_one_job_does_not_take_the_place_of_another(sign: Job, tmp_path: Path) -> None:
    write_job(sign, tmp_path / "job")
    for kind, spec in (("job", "other.yaml"), ("vectors", "door_sign.yaml")):
        with pytest.raises(FolderError, match=r"holds another .* job folder of door_sign\.yaml"):
            check_folder(tmp_path / "job", kind, spec)


# --- whole or not at all ---


def test_a_stage_that_fails_leaves_nothing(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def broken(*_: object, **__: object) -> str:
        raise RuntimeError("no ink")

    monkeypatch.setattr("porter.report.render", broken)
    with pytest.raises(RuntimeError, match="no ink"):
        write_job(build_job(read(SIGN)), tmp_path / "job")
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize("good_writes", [0, 1, 9])
def test_a_disk_that_fills_up_leaves_nothing(
    sign: Job, tmp_path: Path, monkeypatch: pytest.MonkeyPatch, good_writes: int
) -> None:
    written: list[Path] = []
    write = jobs._write

    def filling(path: Path, text: str) -> None:
        if len(written) == good_writes:
            raise OSError(28, "No space left on device")
        written.append(path)
        write(path, text)

    monkeypatch.setattr(jobs, "_write", filling)
    with pytest.raises(FolderError, match="No space left on device"):
        write_job(sign, tmp_path / "above" / "job")
    assert list(tmp_path.iterdir()) == []


def test_what_was_there_comes_back_where_the_last_move_fails(
    sign: Job, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    place = tmp_path / "job"
    write_job(sign, place)
    before = contents(place)
    rename = Path.rename

    def stuck(self: Path, target: Path) -> Path:
        if self.name == "new":
            raise OSError(16, "Device or resource busy")
        return rename(self, target)

    monkeypatch.setattr(Path, "rename", stuck)
    with pytest.raises(FolderError, match="busy"):
        write_job(sign, place)
    assert contents(place) == before
    assert [p.name for p in tmp_path.iterdir()] == ["job"]


def test_the_folder_has_the_rights_of_any_other(sign: Job, tmp_path: Path) -> None:
    before = os.umask(0o022)
    try:
        write_job(sign, tmp_path / "job")
    finally:
        os.umask(before)
    assert (tmp_path / "job").stat().st_mode & 0o777 == 0o755


paths = st.lists(st.text(string.ascii_lowercase, min_size=1, max_size=3), min_size=1, max_size=3)


def _fits(names: dict[str, str]) -> bool:
    """True where no path is a folder of another."""
    return not any(other.startswith(f"{name}/") for name in names for other in names)


@settings(max_examples=40, deadline=None)
@given(
    files=st.dictionaries(paths.map("/".join), st.text(max_size=20), min_size=1, max_size=6).filter(_fits),
    data=st.data(),
)
def test_any_change_to_any_file_is_seen(
    tmp_path_factory: pytest.TempPathFactory, files: dict[str, str], data: st.DataObject
) -> None:
    place = tmp_path_factory.mktemp("any") / "job"
    whole = {**files, "manifest.json": jobs.manifest("job", "x.yaml", "0" * 64, files)}
    write_folder(whole, place, "job", "x.yaml")
    check_folder(place, "job", "x.yaml")
    name = data.draw(st.sampled_from(sorted(whole)))
    old = (place / name).read_bytes()
    new = data.draw(st.binary(max_size=20).filter(lambda b: b != old))
    (place / name).write_bytes(new)
    with pytest.raises(FolderError, match=Path(name).name):
        check_folder(place, "job", "x.yaml")


# --- acceptances against the ledger ---


def _circuit(*accept: tuple[str, str | None, str | None]) -> Circuit:
    circuit = read(SIGN)
    place = circuit.accept[0].position
    taken = tuple(Acceptance(row, "so be it", c, p, place) for row, c, p in accept)
    return dataclasses.replace(circuit, accept=taken)


def _parity(*ledger: LedgerRow) -> Parity:
    closure, tried = Closure(1, 1, 0, None, True, 0, ()), Sequences(1, 1, 0, 0, (1,))
    return Parity("differs", "count", 1e-3, closure, tried, ledger, None, "differs")


@pytest.mark.parametrize(
    ("verdict", "accepted", "found"),
    [
        ("same", ("row", None, None), [("accept-not-needed", "error")]),
        ("tighter", ("row", None, None), [("accept-not-needed", "note")]),
        ("differs", ("row", None, None), []),
        ("differs", ("row", "one", "two"), []),
        ("differs", ("row", "one", "three"), [("accept-outdated", "warning")]),
        ("differs", ("row", "none", "three"), [("accept-outdated", "warning")] * 2),
        ("same", ("another", None, None), []),
    ],
)
def test_acceptances_are_held_against_the_ledger(
    verdict: str, accepted: tuple[str, str | None, str | None], found: list[tuple[str, str]]
) -> None:
    row = LedgerRow("row", "one", "two", verdict, None)  # type: ignore[arg-type]
    seen = acceptance_findings(_circuit(accepted), _parity(row))
    assert [(f.rule, f.severity) for f in seen] == found


def test_open_rows_differ_and_are_not_accepted() -> None:
    rows = [
        LedgerRow("a", "", "", "differs", None),
        LedgerRow("b", "", "", "differs", "so be it"),
        LedgerRow("c", "", "", "same", None),
    ]
    assert [r.row for r in open_rows(_parity(*rows))] == ["a"]
