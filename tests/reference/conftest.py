"""Reads the published figures of fixtures/reference; a missing file or column is an error, never a skip."""

import csv
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
from numpy.typing import NDArray

ROOT = Path(__file__).resolve().parents[2]


@pytest.fixture
def rows() -> Callable[[str], list[dict[str, str]]]:
    """Return a reader: file name -> rows as text."""

    def read(name: str) -> list[dict[str, str]]:
        with (ROOT / "fixtures" / "reference" / name).open(encoding="utf-8", newline="") as file:
            return list(csv.DictReader(file))

    return read


@pytest.fixture
def figures(rows: Callable[[str], list[dict[str, str]]]) -> Callable[[str], dict[str, NDArray[np.float64]]]:
    """Return a reader: file name -> column -> figures, with NaN where the source prints none or a text."""

    def number(text: str) -> float:
        try:
            return float(text)
        except ValueError:
            return float("nan")

    def read(name: str) -> dict[str, NDArray[np.float64]]:
        table = rows(name)
        return {column: np.array([number(row[column]) for row in table]) for column in table[0]}

    return read
