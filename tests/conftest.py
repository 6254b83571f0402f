"""What every test may use: the data folder, a Chromium, and hypothesis without chance."""

from __future__ import annotations

import os
import shutil
from pathlib import Path

import pytest
from hypothesis import HealthCheck, settings

TESTS = Path(__file__).resolve().parent

# The same examples on every run: a failure seen once can be seen again.
settings.register_profile(
    "firstarc", derandomize=True, deadline=None, suppress_health_check=[HealthCheck.too_slow], print_blob=True
)
settings.load_profile("firstarc")


@pytest.fixture(scope="session")
def data_dir() -> Path:
    """The folder tests/data: published values, simulated and real observations with their sources."""
    return TESTS / "data"


@pytest.fixture(scope="session")
def project_root() -> Path:
    """The folder that holds pyproject.toml."""
    return TESTS.parent


@pytest.fixture(scope="session")
def chromium() -> str:
    """Path of a Chromium; without one the test is skipped, or fails where CI is set."""
    for name in ("chromium", "chromium-browser", "google-chrome", "google-chrome-stable"):
        found = shutil.which(name)
        if found:
            return found
    sentence = "no Chromium on PATH (Debian: apt-get install chromium)"
    if os.environ.get("CI"):
        pytest.fail(f"{sentence}; under CI browser tests must run", pytrace=False)
    pytest.skip(sentence)
