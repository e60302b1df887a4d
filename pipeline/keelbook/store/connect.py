"""DuckDB connections of a build: no network, no foreign files beyond those named, nothing on standard output."""

from collections.abc import Iterable
from pathlib import Path

import duckdb

MEMORY = "1GB"
"""What one database may keep in memory while it is written; larger does not make it faster."""


def open_new(path: Path, readable: Iterable[Path] = ()) -> duckdb.DuckDBPyConnection:
    """Open a database for writing; only the named files may be read from it, and that cannot be changed later."""
    con = duckdb.connect(str(path))
    con.execute("set enable_progress_bar = false")
    con.execute(f"set memory_limit = '{MEMORY}'")
    con.execute("set preserve_insertion_order = true")
    con.execute("set autoinstall_known_extensions = false")
    con.execute("set autoload_known_extensions = false")
    allowed = [str(one) for one in readable]
    con.execute(f"set allowed_paths = [{', '.join(_quoted(one) for one in allowed)}]")
    con.execute("set enable_external_access = false")
    con.execute("set lock_configuration = true")
    return con


def open_read(path: Path) -> duckdb.DuckDBPyConnection:
    """Open a published database read-only."""
    return duckdb.connect(
        str(path), read_only=True, config={"enable_external_access": "false", "lock_configuration": "true"}
    )


def _quoted(text: str) -> str:
    return "'" + text.replace("'", "''") + "'"
