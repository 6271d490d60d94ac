"""What all tests share: the table of matrices on the path, the folder of real files, the command line."""

from __future__ import annotations

import subprocess
import sys
from collections.abc import Callable
from pathlib import Path

import pytest

HERE = Path(__file__).parent
# Searched for doctests, those of two rooms would clash: modules of one name.
collect_ignore_glob = ["*/conftest.py"]
if str(HERE) not in sys.path:
    sys.path.insert(0, str(HERE))  # `from table import …` in every room, whatever pytest's import mode


@pytest.fixture(scope="session")
def shared_data() -> Path:
    """The folder of real files beside the checkout; nothing of it is part of the project."""
    folder = HERE.parents[1] / "shared" / "data"
    if not folder.is_dir():
        pytest.skip("real files: no folder shared/data beside the checkout")
    return folder


@pytest.fixture(scope="session")
def command() -> Callable[..., subprocess.CompletedProcess[str]]:
    """Run the program as a user does, in a process of its own; returns its exit status and both outputs."""

    def run(*words: object, timeout: float = 120) -> subprocess.CompletedProcess[str]:
        line = [sys.executable, "-m", "bigsvd", *(str(word) for word in words)]
        return subprocess.run(line, capture_output=True, text=True, timeout=timeout, check=False)

    return run
