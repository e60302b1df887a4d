"""Builds that several folders of unit tests look at; being here also makes `small_blocks` importable."""

import shutil
from collections.abc import Callable
from pathlib import Path

import pytest
from small_blocks import HIDDEN_RAW, HIDDEN_YEAR

from keelbook.assembly.new import write_new
from keelbook.assembly.run import assemble


@pytest.fixture(scope="session")
def first_build(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Return the first assembly of `keelbook new`, assembled: one area, industries C and G, two assets."""
    folder = tmp_path_factory.mktemp("first") / "assembly"
    write_new(folder)
    assemble(folder)
    return folder


@pytest.fixture(scope="session")
def hidden_build(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Return an assembled first assembly in which one source cell is confidential."""
    folder = tmp_path_factory.mktemp("hidden") / "assembly"
    write_new(folder)
    source = folder / "sources" / "investment.csv"
    title, head, *rows = source.read_text(encoding="utf-8").splitlines()
    cell = f"Manufacturing,Machinery,{HIDDEN_YEAR},"
    marked = [f"{cell}{HIDDEN_RAW},C" if row.startswith(cell) else f"{row},F" for row in rows]
    source.write_text("\n".join([title, f"{head},conf", *marked]) + "\n", encoding="utf-8")
    declaration = folder / "assembly.toml"
    text = declaration.read_text(encoding="utf-8")
    declared = text.replace('asset = "asset"\n', 'asset = "asset"\nconf_status = "conf"\n', 1)
    declaration.write_text(declared, encoding="utf-8")
    assemble(folder)
    return folder


@pytest.fixture
def copy_build(tmp_path: Path) -> Callable[[Path], Path]:
    """Return a copier of the current generation of an assembly, for tests that spoil it."""

    def copy(assembly: Path) -> Path:
        target = tmp_path / "copy"
        shutil.copytree((assembly / "build" / "current").resolve(), target)
        return target

    return copy
