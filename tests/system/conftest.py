"""What the system tests share."""

from pathlib import Path

import pytest


@pytest.fixture(scope="session")
def specs(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A folder for changed specs."""
    return tmp_path_factory.mktemp("specs")
