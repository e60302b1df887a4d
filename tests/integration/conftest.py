"""Open connections to the assembled demo, and the command line as a user starts it."""

import os
import subprocess
import sys
from collections.abc import Callable, Iterator
from pathlib import Path

import duckdb
import pytest

from keelbook.store.connect import open_read


@pytest.fixture(scope="session")
def panel(demo_build: Path) -> Iterator[duckdb.DuckDBPyConnection]:
    """Return the panel file of the demo, read-only."""
    with open_read(demo_build / "build" / "panel.duckdb") as con:
        yield con


@pytest.fixture(scope="session")
def evidence(demo_build: Path) -> Iterator[duckdb.DuckDBPyConnection]:
    """Return the evidence file of the demo, read-only."""
    with open_read(demo_build / "build" / "evidence.duckdb") as con:
        yield con


@pytest.fixture(scope="session")
def keelbook() -> Callable[..., "subprocess.CompletedProcess[str]"]:
    """Return a function that runs `keelbook` in a process of its own."""

    def run(*arguments: object, **environment: str) -> "subprocess.CompletedProcess[str]":
        code = "import sys; from keelbook.cli.main import main; sys.argv[0] = 'keelbook'; main()"
        return subprocess.run(
            [sys.executable, "-c", code, *map(str, arguments)],
            capture_output=True,
            text=True,
            check=False,
            env={**os.environ, **environment},
        )

    return run
