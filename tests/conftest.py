"""What all tests share: golden files with the flag that rewrites them, and how hypothesis behaves.

``pytest --update-golden`` rewrites; where CI is set the flag is refused, so that a
build can't approve its own output.

Set ``PORTER_SHRINK`` to let hypothesis look for the smallest failing example.
"""

import os
from collections.abc import Callable
from pathlib import Path

import pytest
from hypothesis import Phase, settings

# Every run tries the same examples, so that a failure is there again the next time. Shrinking one
# can take minutes where an example is a whole proof, so it is done on request.
settings.register_profile(
    "porter",
    deadline=None,
    derandomize=True,
    print_blob=True,
    phases=[phase for phase in Phase if phase is not Phase.shrink or os.environ.get("PORTER_SHRINK")],
)
settings.load_profile("porter")


def pytest_addoption(parser: pytest.Parser) -> None:
    parser.addoption(
        "--update-golden", action="store_true", help="rewrite the golden files instead of comparing"
    )


def pytest_configure(config: pytest.Config) -> None:
    if config.getoption("--update-golden") and os.environ.get("CI"):
        raise pytest.UsageError(
            "--update-golden is refused where CI is set: look at the change, then commit it"
        )


@pytest.fixture
def golden(request: pytest.FixtureRequest) -> Callable[[Path, str], None]:
    """Return a check that a text is the same as the golden file, byte for byte."""

    def check(path: Path, text: str) -> None:
        if request.config.getoption("--update-golden"):
            path.parent.mkdir(parents=True, exist_ok=True)
            path.write_text(text, encoding="utf-8", newline="")
        assert path.exists(), f"{path} is missing: make it with `pytest --update-golden`, and read it"
        expected = path.read_bytes().decode("utf-8")
        assert expected == text, f"{path} differs; `pytest --update-golden` rewrites it"

    return check
