"""Shared fixtures: where the open datasets lie, and the no-skip rule of CI."""

from __future__ import annotations

import os
from pathlib import Path

import pytest
from hypothesis import HealthCheck, settings

REPO = Path(__file__).resolve().parents[1]

# Machines are noisy and compile on first use: time is no ground for failure, and CI tries the same
# inputs every time (the marked fuzzing runs try new ones).
settings.register_profile(
    "steady", deadline=None, derandomize=True, suppress_health_check=[HealthCheck.too_slow]
)
settings.load_profile("steady")


def pytest_runtest_makereport(item, call):
    # A browser test that skips would pass silently on a machine without a browser.
    if not os.environ.get("TWICETOLD_NO_SKIP") or not item.get_closest_marker("browser"):
        return
    if call.excinfo is not None and call.excinfo.errisinstance(pytest.skip.Exception):
        pytest.fail(f"{item.nodeid} was skipped, and may not be", pytrace=False)


@pytest.fixture(scope="session")
def shared_data() -> Path:
    """Folder of the two open CLDF datasets beside the checkout; skips where absent."""
    folder = Path(os.environ.get("TWICETOLD_DATA", REPO.parent / "shared" / "data"))
    if not folder.is_dir():
        pytest.skip("the open datasets are not on this machine")
    return folder


@pytest.fixture(scope="session")
def example_folder() -> Path:
    """The committed demonstration catalogue (tables)."""
    return REPO / "data_examples" / "archipelago"
