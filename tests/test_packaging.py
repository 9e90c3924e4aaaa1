"""What a wheel carries, and that an installed porter finds its templates and specs."""

import json
import shutil
import subprocess
import sys
import sysconfig
import zipfile
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[1]
NEEDED = ("pyproject.toml", "README.md", "porter", "templates", "specs")

#: Lists the shipped files as an installed porter finds them.
LIST = """
import json, pathlib, site, sys
links, *rest = sys.argv[1:]
sys.path.insert(0, links)
for folder in rest:
    site.addsitedir(folder)
import porter
from porter.resources import folder
def walk(at, above=""):
    for item in at.iterdir():
        name = f"{above}{item.name}"
        if item.is_dir():
            yield from walk(item, name + "/")
        else:
            yield name
found = {top: sorted(walk(folder(top))) for top in ("templates", "specs")}
print(json.dumps({"home": str(pathlib.Path(porter.__file__).parent.resolve()), **found}))
"""


def _files(folder: Path) -> set[str]:
    return {p.relative_to(folder).as_posix() for p in folder.rglob("*") if p.is_file()}


@pytest.fixture(scope="module")
def copy(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A copy of what a build needs: building leaves files about."""
    to = tmp_path_factory.mktemp("copy") / "porter-source"
    to.mkdir()
    for name in NEEDED:
        source = ROOT / name
        if source.is_dir():
            shutil.copytree(source, to / name, ignore=shutil.ignore_patterns("__pycache__"))
        else:
            shutil.copy(source, to / name)
    return to


@pytest.fixture(scope="module")
def others(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Links to everything that is installed, but for porter itself."""
    to = tmp_path_factory.mktemp("others")
    for key in ("purelib", "platlib"):
        for item in Path(sysconfig.get_path(key)).iterdir():
            link = to / item.name
            if "porter" not in item.name and item.suffix != ".pth" and not link.exists():
                link.symlink_to(item)
    return to


def _build(copy: Path, hook: str, to: Path) -> Path:
    """Call a hook of the build backend as an installer does; return the wheel."""
    to.mkdir()
    call = f"import sys; from setuptools import build_meta; build_meta.{hook}(sys.argv[1])"
    done = subprocess.run([sys.executable, "-c", call, str(to)], cwd=copy, capture_output=True, text=True)
    assert done.returncode == 0, done.stdout + done.stderr
    (wheel,) = to.glob("*.whl")
    return wheel


@pytest.fixture(scope="module")
def wheel(copy: Path, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A wheel built from the copy."""
    return _build(copy, "build_wheel", tmp_path_factory.mktemp("wheel") / "out")


def _expected(source: Path) -> set[str]:
    """What a wheel must carry beside its own records."""
    python = {f"porter/{name}" for name in _files(source / "porter") if name.endswith((".py", "py.typed"))}
    shipped = {f"porter/{top}/{name}" for top in ("templates", "specs") for name in _files(source / top)}
    return python | shipped


def _carried(wheel: Path) -> set[str]:
    with zipfile.ZipFile(wheel) as archive:
        return {name for name in archive.namelist() if ".dist-info/" not in name}


def test_wheel_carries_the_package_and_every_template_and_spec(copy: Path, wheel: Path) -> None:
    """Nothing is left out, nothing is added, and nothing stands beside ``porter/``."""
    assert _expected(copy) == _carried(wheel)


def test_a_file_outside_the_patterns_is_noticed(copy: Path, wheel: Path, tmp_path: Path) -> None:
    """The comparison above fails for a template that the build would leave out."""
    other = shutil.copytree(copy, tmp_path / "other", ignore=shutil.ignore_patterns("build", "*.egg-info"))
    (other / "templates" / "note.txt").write_text("left out\n")
    carried = _carried(_build(other, "build_wheel", tmp_path / "out"))
    assert _expected(other) - carried == {"porter/templates/note.txt"}
    assert carried == _carried(wheel)


def _listed(others: Path, *folders: Path) -> dict[str, object]:
    """Run porter from the given site folders, with the other packages of this environment."""
    command = [sys.executable, "-I", "-S", "-c", LIST, str(others), *map(str, folders)]
    done = subprocess.run(command, cwd=others.parent, capture_output=True, text=True)
    assert done.returncode == 0, done.stderr
    found = json.loads(done.stdout)
    assert isinstance(found, dict)
    return found


def _shipped(source: Path) -> dict[str, list[str]]:
    return {top: sorted(_files(source / top)) for top in ("templates", "specs")}


@pytest.mark.parametrize("hook", ["build_wheel", "build_editable"])
def test_an_install_finds_its_templates_and_specs(
    hook: str, copy: Path, others: Path, tmp_path: Path
) -> None:
    """From a normal and from an editable install, seen from another folder."""
    wheel = _build(copy, hook, tmp_path / "out")
    place = tmp_path / "site"
    with zipfile.ZipFile(wheel) as archive:
        archive.extractall(place)
    found = _listed(others, place)
    home = place if hook == "build_wheel" else copy
    assert {"home": str((home / "porter").resolve()), **_shipped(copy)} == found


def test_without_an_install_there_is_no_porter(others: Path) -> None:
    """The test above means something only if this environment's own porter can't answer."""
    command = [sys.executable, "-I", "-S", "-c", LIST, str(others)]
    done = subprocess.run(command, cwd=others.parent, capture_output=True, text=True)
    assert done.returncode != 0
    assert "No module named 'porter'" in done.stderr
