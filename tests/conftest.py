"""The demo, assembled once for all tests that look at a build, and copies of it that a test may spoil."""

import shutil
from collections.abc import Callable
from pathlib import Path

import pytest

from keelbook.assembly.run import Report, assemble

ROOT = Path(__file__).resolve().parents[1]


@pytest.fixture(scope="session")
def root() -> Path:
    """Return the folder of the checkout."""
    return ROOT


@pytest.fixture(scope="session")
def copy_fixture() -> Callable[[str, Path], Path]:
    """Return a copier: name in fixtures/, new folder -> the folder, with its sources and without a build."""

    def copy(name: str, target: Path) -> Path:
        shutil.copytree(ROOT / "fixtures" / name, target, ignore=shutil.ignore_patterns("build", "build-*"))
        return target

    return copy


@pytest.fixture(scope="session")
def demo_report(
    tmp_path_factory: pytest.TempPathFactory, copy_fixture: Callable[[str, Path], Path]
) -> Report:
    """Return what assembling a copy of the demo reported."""
    return assemble(copy_fixture("demo", tmp_path_factory.mktemp("demo") / "demo"))


@pytest.fixture(scope="session")
def demo_build(demo_report: Report) -> Path:
    """Return the assembled copy of the demo: an assembly folder with its `build`. Tests only read it."""
    return demo_report.assembly.folder
