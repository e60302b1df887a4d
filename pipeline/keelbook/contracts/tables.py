"""The tables of a build: one TOML contract each in `schemas/`, compiled to pandera and to DuckDB."""

from collections.abc import Mapping
from dataclasses import dataclass
from functools import lru_cache
from types import MappingProxyType
from typing import TYPE_CHECKING, Any, Literal

from pydantic import ValidationInfo, field_validator, model_validator

from keelbook.contracts.codes import SHIPPED, CodeLists, load_code_lists
from keelbook.contracts.loader import Declared, fault, load_toml
from keelbook.errors import did_you_mean
from keelbook.locate import folder

if TYPE_CHECKING:
    import numpy as np
    import pandas as pd
    from pandera.pandas import DataFrameSchema

NOT_TABLES = ("measures", "parameters")
"""Files of `schemas/` with a form of their own."""

_INTEGERS = ((2**7, "TINYINT"), (2**15, "SMALLINT"), (2**31, "INTEGER"))
_SQL = {"str": "VARCHAR", "int": "BIGINT", "float": "DOUBLE", "bool": "BOOLEAN"}
_SHOWN = 5


class ContractBroken(RuntimeError):
    """A table we made is not as its contract says: our fault, never the user's."""


class Column(Declared):
    """One column of a table. `single`: seven digits are enough, stored in half the space."""

    type: Literal["str", "int", "float", "bool"]
    nullable: bool = False
    description: str
    allowed_list: str | None = None
    minimum: float | None = None
    maximum: float | None = None
    single: bool = False

    @field_validator("allowed_list")
    @classmethod
    def _known_list(cls, name: str | None) -> str | None:
        if name is not None and name not in SHIPPED:
            raise fault(
                f"unknown code list '{name}'",
                found=name,
                expected="one of: " + ", ".join(SHIPPED),
                remedy=did_you_mean(name, SHIPPED),
            )
        return name

    @model_validator(mode="after")
    def _range(self) -> "Column":
        if (self.minimum is not None or self.maximum is not None) and self.type not in ("int", "float"):
            raise fault(
                "a range on a column that holds no numbers",
                found=self.type,
                expected="int or float",
                remedy="remove minimum and maximum",
            )
        return self

    @property
    def sql(self) -> str:
        """Return the DuckDB type: the narrowest that holds the declared range."""
        if self.type == "int" and self.minimum is not None and self.maximum is not None:
            for limit, name in _INTEGERS:
                if -limit <= self.minimum and self.maximum < limit:
                    return name
        return "FLOAT" if self.single else _SQL[self.type]


class _File(Declared):
    table: str
    description: str
    key: tuple[str, ...]
    column: dict[str, Column]

    @field_validator("table")
    @classmethod
    def _as_file(cls, table: str, info: ValidationInfo) -> str:
        stem = (info.context or {})["stem"]
        if table != stem:
            raise fault(
                "the table is not called as its file",
                found=table,
                expected=stem,
                remedy="rename the file or the table",
            )
        return table

    @model_validator(mode="after")
    def _key_is_columns(self) -> "_File":
        for name in self.key:
            if name not in self.column:
                raise fault(
                    f"key column '{name}' is not declared",
                    at=("key",),
                    found=name,
                    expected="one of: " + ", ".join(self.column),
                    remedy=did_you_mean(name, self.column),
                )
            if self.column[name].nullable:
                raise fault(
                    f"key column '{name}' is nullable",
                    at=("column", name),
                    found="nullable = true",
                    expected="a key is never null",
                    remedy="remove nullable",
                )
        return self


@dataclass(frozen=True, eq=False)
class Table:
    """The contract of one table: its key (column names, may be none) and its columns in order."""

    table: str
    description: str
    key: tuple[str, ...]
    column: Mapping[str, Column]

    def create_sql(self) -> str:
        """Return the CREATE TABLE statement. No primary key: keys are checked by `validate`, far faster."""
        columns = ", ".join(
            f'"{name}" {column.sql}{"" if column.nullable else " NOT NULL"}'
            for name, column in self.column.items()
        )
        return f'CREATE TABLE "{self.table}" ({columns})'

    def validate(self, frame: "pd.DataFrame", lists: CodeLists | None = None) -> None:
        """Check a frame against the contract: columns, types, nulls, ranges, code lists, and the key.

        Every check is vectorised and exact; categories are checked by their categories in use.

        Args:
            frame: the table to be, columns in the order of the contract.
            lists: the code lists of the assembly; None for the shipped ones.

        Raises:
            ContractBroken: the first fault, with table, column and the first offending rows.
        """
        from pandera.errors import SchemaError

        lists = lists or load_code_lists()
        if list(frame.columns) != list(self.column):
            raise ContractBroken(
                f"table {self.table}: columns are {list(frame.columns)}, expected {list(self.column)}"
            )
        try:
            _schema(self, lists).validate(frame, inplace=True)
        except SchemaError as error:
            name = error.schema.name
            raise ContractBroken(_broken(self.table, frame, self.column[name], lists, error)) from None
        self._check_key(frame)

    def _check_key(self, frame: "pd.DataFrame") -> None:
        if not self.key or len(frame) < 2:
            return
        import numpy as np

        combined = _combined_codes(frame, self.key)
        size = int(combined.max()) + 1
        if size <= 4 * len(frame):
            repeated = np.bincount(combined, minlength=size) > 1
            if not repeated.any():
                return
            rows = np.flatnonzero(repeated[combined])
        else:
            order = np.argsort(combined, kind="stable")
            same = np.flatnonzero(np.diff(combined[order]) == 0)
            if not len(same):
                return
            rows = np.union1d(order[same], order[same + 1])
        shown = frame.iloc[rows[:_SHOWN]][list(self.key)].to_dict("records")
        raise ContractBroken(
            f"table {self.table}: key {', '.join(self.key)} not unique in {len(rows)} rows, first rows "
            f"{rows[:_SHOWN].tolist()}: {shown}"
        )


@lru_cache(maxsize=1)
def load_tables() -> Mapping[str, Table]:
    """Return table name -> contract, for every file of `schemas/` that describes a table.

    Raises:
        DeclarationError: a file is not as it must be.
    """
    paths = sorted(path for path in folder("schemas").glob("*.toml") if path.stem not in NOT_TABLES)
    files = [load_toml(path, _File, {"stem": path.stem}) for path in paths]
    return MappingProxyType(
        {one.table: Table(one.table, one.description, one.key, MappingProxyType(one.column)) for one in files}
    )


@lru_cache(maxsize=64)
def _schema(table: Table, lists: CodeLists) -> "DataFrameSchema":
    import pandera.pandas as pa

    columns = {
        name: pa.Column(None, checks=_checks(column, lists), nullable=column.nullable, required=True)
        for name, column in table.column.items()
    }
    return pa.DataFrameSchema(columns, strict=True, name=table.table)


def _checks(column: Column, lists: CodeLists) -> list[Any]:
    import pandera.pandas as pa

    def holds_type(values: "pd.Series[Any]") -> bool:
        return _is_type(values, column.type)

    def holds_range(values: "pd.Series[Any]") -> bool:
        return _outside(values, column).size == 0

    def holds_list(values: "pd.Series[Any]") -> bool:
        return _unlisted(values, column, lists).size == 0

    checks = [pa.Check(holds_type, name=f"type {column.type}", ignore_na=False)]
    if column.minimum is not None or column.maximum is not None:
        checks.append(
            pa.Check(holds_range, name=f"from {column.minimum} to {column.maximum}", ignore_na=False)
        )
    if column.allowed_list is not None:
        checks.append(pa.Check(holds_list, name=f"in the list {column.allowed_list}", ignore_na=False))
    return checks


def _is_type(values: "pd.Series[Any]", kind: str) -> bool:
    import pandas as pd

    dtype: Any = values.dtype
    if pd.api.types.is_object_dtype(dtype) and not len(values):  # an empty query result has no types
        return True
    if kind == "str":
        if isinstance(dtype, pd.CategoricalDtype):
            return len(dtype.categories) == 0 or pd.api.types.infer_dtype(dtype.categories) == "string"
        return isinstance(dtype, pd.StringDtype)
    if kind == "bool":
        return bool(pd.api.types.is_bool_dtype(dtype))
    if kind == "int":
        return bool(pd.api.types.is_integer_dtype(dtype))
    return bool(pd.api.types.is_float_dtype(dtype))


def _outside(values: "pd.Series[Any]", column: Column) -> "np.ndarray[Any, Any]":
    """Rows outside the range; missing values are left to the null check."""
    import numpy as np

    bad = np.zeros(len(values), dtype=bool)
    if column.minimum is not None:
        bad |= (values < column.minimum).fillna(False).to_numpy(dtype=bool)
    if column.maximum is not None:
        bad |= (values > column.maximum).fillna(False).to_numpy(dtype=bool)
    return np.flatnonzero(bad)


def _unlisted(values: "pd.Series[Any]", column: Column, lists: CodeLists) -> "np.ndarray[Any, Any]":
    """Rows whose code is not in the list; an integer is a position in it."""
    import numpy as np
    import pandas as pd

    allowed = lists.codes(column.allowed_list or "")
    if column.type == "int":
        bad = (values < 0) | (values >= len(allowed))
        return np.flatnonzero(bad.fillna(False).to_numpy(dtype=bool))
    if isinstance(values.dtype, pd.CategoricalDtype):
        known = np.append(np.isin(values.cat.categories.to_numpy(dtype=object), allowed), True)
        return np.flatnonzero(~known[values.cat.codes.to_numpy()])
    return np.flatnonzero(~values.isin(allowed).to_numpy() & values.notna().to_numpy())


def _combined_codes(frame: "pd.DataFrame", key: tuple[str, ...]) -> "np.ndarray[Any, Any]":
    """One non-negative integer a row, equal where and only where the key is equal."""
    import numpy as np
    import pandas as pd

    combined = np.zeros(len(frame), dtype=np.int64)
    size = 1
    for name in key:
        values = frame[name]
        if isinstance(values.dtype, pd.CategoricalDtype):
            codes = values.cat.codes.to_numpy(dtype=np.int64)
            width = len(values.cat.categories)
        elif pd.api.types.is_integer_dtype(values.dtype):
            codes = values.to_numpy(dtype=np.int64)
            codes = codes - codes.min()
            width = int(codes.max()) + 1
        else:
            codes, uniques = pd.factorize(values)
            width = len(uniques)
        if size * width >= 2**62:
            distinct, combined = np.unique(combined, return_inverse=True)
            size = len(distinct)
        combined = combined * width + codes
        size *= width
    return combined


def _broken(table: str, frame: "pd.DataFrame", column: Column, lists: CodeLists, error: Any) -> str:
    """Say which check failed and in which rows; pandera's own list of cases is slow and repeats itself."""
    import numpy as np

    name = error.schema.name
    values = frame[name]
    what = "null" if error.reason_code.name == "SERIES_CONTAINS_NULLS" else f"not {error.check.name}"
    if what == "null":
        rows = np.flatnonzero(values.isna().to_numpy())
    elif what.startswith("not from"):
        rows = _outside(values, column)
    elif what.startswith("not in the list"):
        rows = _unlisted(values, column, lists)
    else:
        return f"table {table}, column {name}: {what} but {values.dtype}"
    shown = values.iloc[rows[:_SHOWN]].tolist()
    first = rows[:_SHOWN].tolist()
    return f"table {table}, column {name}: {what} in {len(rows)} rows, first rows {first}: {shown}"
