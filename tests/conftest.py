"""What every test shares: reproducible property tests, and the rule for tests that need a browser."""

from __future__ import annotations

import os
import shutil
from pathlib import Path

import pytest
from hypothesis import settings

# Compiling a kernel takes seconds at its first use, so a per-example deadline would measure the compiler; and the
# same examples on every run, so that a red test stays red until it is mended.
settings.register_profile("schurbench", deadline=None, derandomize=True, print_blob=True)
settings.load_profile("schurbench")

#: Set to 1 where a missing browser is a failure, as in the continuous check.
REQUIRE_BROWSER = "SCHURBENCH_REQUIRE_BROWSER"


def find_chromium() -> str | None:
    """Path of the system's Chromium, or None."""
    return shutil.which("chromium") or shutil.which("chromium-browser")


def pytest_runtest_setup(item: pytest.Item) -> None:
    if item.get_closest_marker("browser") is not None and find_chromium() is None:
        if os.environ.get(REQUIRE_BROWSER) == "1":
            pytest.fail(f"{REQUIRE_BROWSER}=1, but no chromium is on the path", pytrace=False)
        pytest.skip(f"no chromium on the path (set {REQUIRE_BROWSER}=1 to make this a failure)")


@pytest.fixture(scope="session")
def chromium() -> str:
    """Path of the system's Chromium; only for tests marked ``browser``."""
    path = find_chromium()
    assert path is not None
    return path


@pytest.fixture(scope="session")
def data() -> Path:
    """The folder of small licensed matrices, described in its README.md."""
    return Path(__file__).parent / "data"
