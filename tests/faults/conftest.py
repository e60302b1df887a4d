"""A published demo that a test may spoil, and the check that a refused run leaves it untouched."""

import hashlib
import os
import shutil
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import pytest
from click.testing import CliRunner

from keelbook.cli.main import main


@dataclass(frozen=True)
class Refusal:
    """How a refused command ended: its code and what it printed."""

    code: int
    text: str
    shown: str


@pytest.fixture
def published(demo_build: Path, tmp_path: Path) -> Path:
    """Return a copy of the assembled demo: assembly, sources and published build."""
    return Path(shutil.copytree(demo_build, tmp_path / "demo", symlinks=True))


def snapshot(build: Path) -> dict[str, str]:
    """Return what readers of a build folder see: where the links point, and the hash of every published file."""
    out = {name: os.readlink(build / name) for name in ("current", "panel.duckdb", "evidence.duckdb")}
    for path in sorted((build / out["current"]).iterdir()):
        out[path.name + " hash"] = hashlib.sha256(path.read_bytes()).hexdigest()
    return out


@pytest.fixture
def refused(published: Path) -> Callable[..., Refusal]:
    """Return a runner of a command that must be refused, without a traceback and with the build untouched."""
    before = snapshot(published / "build")

    def run(*arguments: object) -> Refusal:
        result = CliRunner().invoke(main, [str(a) for a in arguments])
        assert result.exit_code != 0, result.stdout
        assert "Traceback" not in result.output
        assert snapshot(published / "build") == before
        assert not list((published / "build").glob(".work-*"))
        return Refusal(result.exit_code, result.stderr, result.stdout)

    return run
