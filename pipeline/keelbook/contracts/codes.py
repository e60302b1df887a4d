"""The code lists: `rules/codes/<name>.csv`, to which an assembly may add rows of its own."""

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from functools import cached_property, lru_cache
from pathlib import Path
from types import MappingProxyType
from typing import Literal

from keelbook.contracts.loader import Declared, load_csv_rows
from keelbook.errors import DeclarationError, Problem, did_you_mean
from keelbook.locate import folder

DIMS = ("area", "sector", "industry", "asset", "worker_group")
"""The dimensions of every key, in order."""

TOTAL = "_T"
NOT_APPLICABLE = "_Z"

SHIPPED = (
    "obs_status",
    "conf_status",
    "unit_mult",
    "freq",
    "sector",
    "industry",
    "asset",
    "worker_group",
    "transaction",
)
"""The lists of `rules/codes/`. Areas have no shipped list: the assembly declares them."""

Mark = Literal["seen", "second-hand", "from memory", "common practice"]
"""How well a fact is known: read in its source; read in a transcription; recalled; a rule with no source."""


class Code(Declared):
    """One row of a code list."""

    code: str
    name: str
    parent: str | None = None
    partition: str | None = None
    sdmx_code: str | None = None
    citation: str
    status: Mark
    line: int


@dataclass(frozen=True, eq=False)
class CodeLists:
    """Every code list by name ("industry", "obs_status", ...), codes in file order."""

    rows: Mapping[str, tuple[Code, ...]]

    @cached_property
    def _by_code(self) -> dict[str, dict[str, Code]]:
        return {name: {row.code: row for row in rows} for name, rows in self.rows.items()}

    @cached_property
    def _positions(self) -> dict[str, dict[str, int]]:
        return {name: {row.code: at for at, row in enumerate(rows)} for name, rows in self.rows.items()}

    def codes(self, name: str) -> tuple[str, ...]:
        """Return the codes of a list, in file order (`_T` and `_Z` first)."""
        return tuple(self._by_code[name])

    def position(self, name: str, code: str) -> int:
        """Return the place of a code in its list, from 0. Raises KeyError for an unknown code."""
        return self._positions[name][code]

    def has(self, name: str, code: str) -> bool:
        """Return whether the list holds the code."""
        return code in self._by_code[name]

    def name(self, name: str, code: str) -> str:
        """Return what a code stands for. Raises KeyError for an unknown code."""
        return self._by_code[name][code].name

    def parent(self, name: str, code: str) -> str | None:
        """Return the code one level up, or None at the top. Raises KeyError for an unknown code."""
        return self._by_code[name][code].parent

    def partition(self, name: str, code: str) -> str | None:
        """Return the partition of `_T` a worker group belongs to, or None."""
        return self._by_code[name][code].partition


def load_code_lists(assembly_folder: Path | None = None, areas: Iterable[str] = ()) -> CodeLists:
    """Return the shipped lists, with the rows an assembly adds in `rules/codes/<name>.csv` after them.

    Args:
        assembly_folder: the assembly, or None for the shipped lists alone.
        areas: the area codes the assembly declares (its `rules/codes/area.csv` may name them and add more).

    Raises:
        DeclarationError: a row is not as it must be, a code occurs twice, a parent is not in the list, or
            the assembly has a file that is no code list.
    """
    return _lists(assembly_folder, tuple(areas)) if assembly_folder else _shipped(tuple(areas))


@lru_cache(maxsize=8)
def _shipped(areas: tuple[str, ...]) -> CodeLists:
    return _lists(None, areas)


def _lists(assembly_folder: Path | None, areas: tuple[str, ...]) -> CodeLists:
    problems: list[Problem] = []
    rows: dict[str, tuple[Code, ...]] = {"area": ()}
    files: dict[str, list[Path]] = {name: [folder("rules") / "codes" / f"{name}.csv"] for name in SHIPPED}
    files["area"] = []
    extra = assembly_folder / "rules" / "codes" if assembly_folder else None
    for path in sorted(extra.iterdir()) if extra is not None and extra.is_dir() else ():
        if path.stem in files and path.suffix == ".csv":
            files[path.stem].append(path)
        else:
            names = [f"{name}.csv" for name in files]
            problems.append(
                Problem(
                    "not a code list",
                    str(path),
                    found=path.name,
                    expected="one of: " + ", ".join(names),
                    remedy=did_you_mean(path.name, names) or "remove the file",
                )
            )
    for name, paths in files.items():
        given: dict[str, Code] = {}
        for path in paths:
            try:
                found = load_csv_rows(path, Code, key=("code",))
            except DeclarationError as error:
                problems += error.problems
                continue
            parents = {*given, *(row.code for row in found)}
            for row in found:
                problems += _row_problems(path, row, given, parents)
            given |= {row.code: row for row in found if row.code not in given}
        if name == "area":
            for area in areas:
                own = Code(code=area, name=area, citation="declared in assembly.toml", status="seen", line=1)
                given.setdefault(area, own)
        rows[name] = tuple(given.values())
    if problems:
        raise DeclarationError(problems)
    return CodeLists(MappingProxyType(rows))


def _row_problems(path: Path, row: Code, given: Mapping[str, Code], parents: set[str]) -> list[Problem]:
    problems = []
    if row.code in given:
        problems.append(
            Problem(
                f"code '{row.code}' is already in the shipped list",
                str(path),
                f"line {row.line}",
                found=row.code,
                expected="a code of your own",
                remedy="remove the row or choose another code",
            )
        )
    if row.parent is not None and row.parent not in parents:
        problems.append(
            Problem(
                f"unknown parent '{row.parent}'",
                str(path),
                f"line {row.line}",
                found=row.parent,
                expected="a code of this list",
                remedy=did_you_mean(row.parent, parents) or "correct the parent",
            )
        )
    return problems
