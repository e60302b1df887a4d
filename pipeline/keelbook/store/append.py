"""Appending frames to tables: nothing is written that its contract does not allow."""

import duckdb
import pandas as pd

from keelbook.contracts.codes import CodeLists
from keelbook.contracts.tables import Table


def append(
    con: duckdb.DuckDBPyConnection, table: Table, frame: pd.DataFrame, lists: CodeLists | None = None
) -> None:
    """Check a frame against the contract of its table and append it.

    Raises:
        ContractBroken: the frame is not as the contract says.
    """
    table.validate(frame.reset_index(drop=True), lists)
    con.register("_frame", frame)
    con.execute(f'insert into "{table.table}" by name select * from _frame')
    con.unregister("_frame")
