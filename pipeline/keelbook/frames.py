"""Text columns of frames as codes, so that no text is copied for each row."""

from collections.abc import Sequence
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray


def coded(codes: NDArray[np.integer[Any]], names: Sequence[str]) -> "pd.Categorical[Any]":
    """Return a categorical column from positions in a list of names; -1 is no text."""
    return pd.Categorical.from_codes(codes, dtype=pd.CategoricalDtype(list(names)))


def constant(text: str, count: int) -> "pd.Categorical[Any]":
    """Return a categorical column that holds one text in every row."""
    return coded(np.zeros(count, np.int8), [text])
