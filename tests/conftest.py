"""Fixtures that more than one folder uses."""

import subprocess
import sys
from collections.abc import Callable

import hypothesis
import pytest

hypothesis.settings.register_profile("untimed", deadline=None)  # how fast a thing is, is no matter of tests
hypothesis.settings.load_profile("untimed")


@pytest.fixture
def run_monitord() -> Callable[..., subprocess.CompletedProcess[str]]:
    """Run the command line in a process of its own and return what it said and its exit code."""

    def run(*words: str) -> subprocess.CompletedProcess[str]:
        return subprocess.run(
            [sys.executable, "-m", "monitord", *words],
            capture_output=True,
            text=True,
            timeout=60,
            check=False,
        )

    return run
