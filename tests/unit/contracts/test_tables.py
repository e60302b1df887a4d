import re
from pathlib import Path
from typing import Any

import duckdb
import numpy as np
import pandas as pd
import pytest

from keelbook import findings
from keelbook.contracts import tables
from keelbook.contracts.codes import DIMS, load_code_lists
from keelbook.contracts.tables import ContractBroken, Table, load_tables
from keelbook.errors import DeclarationError

KINDS: dict[str, Any] = {"str": "x", "int": 1, "float": 0.5, "bool": True}


def figures(**changes: Any) -> pd.DataFrame:
    columns: dict[str, Any] = {
        "series_id": np.array([0, 0, 1], dtype="int32"),
        "period": np.array([2015, 2016, 2015], dtype="int16"),
        "value": [1.0, np.nan, -3.0],
        "obs_status": np.array([0, 9, 0], dtype="int8"),
        "conf_status": np.zeros(3, dtype="int8"),
        "imputed_part": [0.0, 1.0, 0.5],
        "assumed_part": [0.0, 0.0, 0.5],
    }
    return pd.DataFrame(columns | changes)


def one_row(table: Table) -> pd.DataFrame:
    lists = load_code_lists()
    row = {}
    for name, column in table.column.items():
        coded = column.allowed_list is not None and column.type == "str"
        row[name] = [lists.codes(column.allowed_list or "")[0] if coded else KINDS[column.type]]
    return pd.DataFrame(row)


def broken(table: str, frame: pd.DataFrame) -> str:
    with pytest.raises(ContractBroken) as caught:
        load_tables()[table].validate(frame)
    return str(caught.value)


def test_one_column_name_means_one_quantity_everywhere() -> None:
    seen: dict[str, tuple[Any, ...]] = {}
    for table in load_tables().values():
        for name, column in table.column.items():
            meaning = (column.type, column.description, column.minimum, column.maximum)
            assert seen.setdefault(name, meaning) == meaning, (table.table, name)


@pytest.mark.parametrize("name", sorted(load_tables()))
def test_every_contract_accepts_a_row_and_makes_its_table(name: str) -> None:
    table = load_tables()[name]
    frame = one_row(table)
    table.validate(frame)
    with duckdb.connect() as con:
        con.execute(table.create_sql())
        con.register("frame", frame)
        con.execute(f'INSERT INTO "{name}" SELECT * FROM frame')
        assert con.execute(f'SELECT count(*) FROM "{name}"').fetchone() == (1,)


def test_tables_hold_findings_as_they_are_made() -> None:
    assert list(load_tables()["finding"].column) == ["finding_id", *findings.COLUMNS]
    frame = findings.frame([{"rule": "sign", "severity": "stop", "message": "below zero"}])
    frame.insert(0, "finding_id", np.arange(len(frame)))
    load_tables()["finding"].validate(frame)


def test_series_holds_every_dimension() -> None:
    assert set(DIMS) <= set(load_tables()["series"].column)


def test_sql_types_are_the_narrowest_of_the_range() -> None:
    statement = load_tables()["figure"].create_sql()
    for part in ('"period" SMALLINT NOT NULL', '"value" DOUBLE,', '"obs_status" TINYINT NOT NULL'):
        assert part in statement
    assert '"cell_id" BIGINT' in load_tables()["observation"].create_sql()


def test_a_table_as_it_must_be_passes() -> None:
    load_tables()["figure"].validate(figures())
    load_tables()["figure"].validate(figures().iloc[:0])
    load_tables()["figure"].validate(figures().iloc[:0].astype(object))


def test_missing_and_extra_columns() -> None:
    assert "columns are" in broken("figure", figures().drop(columns="value"))
    assert "columns are" in broken("figure", figures(extra=1.0))


@pytest.mark.parametrize(
    ("changes", "said"),
    [
        ({"value": np.array([1.0, None, 2.0], dtype=object)}, "column value: not type float but object"),
        ({"value": [1, 2, 3]}, "column value: not type float but int64"),
        ({"series_id": [0.0, 0.0, 1.0]}, "column series_id: not type int but float64"),
        (
            {"obs_status": np.array([0, 99, 0], dtype="int8")},
            "column obs_status: not in the list obs_status in 1 rows",
        ),
        (
            {"imputed_part": [0.0, 1.5, 0.0]},
            "column imputed_part: not from 0.0 to 1.0 in 1 rows, first rows [1]: [1.5]",
        ),
    ],
)
def test_a_broken_column_is_named_with_its_rows(changes: dict[str, Any], said: str) -> None:
    message = broken("figure", figures(**changes))
    assert message.startswith("table figure, ")
    assert said in message


def test_a_null_where_none_may_be() -> None:
    frame = figures()[["series_id", "period", "value"]]
    assert "column value: null in 1 rows, first rows [1]: [nan]" in broken("withheld_figure", frame)


@pytest.mark.parametrize("factor", [1, 10**8])
def test_a_repeated_key_is_found_in_dense_and_in_sparse_numbers(factor: int) -> None:
    frame = figures(period=np.array([2015, 2015, 2015], dtype="int16"))
    frame["series_id"] = frame["series_id"].astype("int64") * factor
    message = broken("figure", frame)
    assert "key series_id, period not unique in 2 rows, first rows [0, 1]" in message


@pytest.mark.parametrize("dtype", ["str", "category"])
def test_keys_and_lists_of_text_and_categories(dtype: str) -> None:
    table = load_tables()["decomposition"]
    frame = pd.concat([one_row(table)] * 2, ignore_index=True)
    frame["time_period"] = ["2015", "2016"]
    for name in ("area", "sector", "industry", "time_period", "form"):
        frame[name] = frame[name].astype(dtype)
    table.validate(frame)
    twice = frame.assign(time_period=pd.Series(["2015", "2015"], dtype=dtype))
    assert "not unique in 2 rows" in broken("decomposition", twice)
    unknown = frame.assign(industry=pd.Series(["C", "CC"], dtype=dtype))
    assert "column industry: not in the list industry in 1 rows, first rows [1]: ['CC']" in broken(
        "decomposition", unknown
    )


def test_unused_categories_do_not_matter() -> None:
    table = load_tables()["code"]
    frame = one_row(table).assign(code=pd.Categorical(["a"], categories=["a", "b"]))
    table.validate(frame)


def test_codes_an_assembly_adds_are_known(tmp_path: Path) -> None:
    (tmp_path / "rules" / "codes").mkdir(parents=True)
    (tmp_path / "rules" / "codes" / "industry.csv").write_text(
        "code,name,parent,citation,status\nC10,Food,C,x,seen\n", encoding="utf-8"
    )
    table = load_tables()["decomposition"]
    frame = one_row(table).assign(industry=["C10"])
    table.validate(frame, load_code_lists(tmp_path))
    assert "not in the list industry" in broken("decomposition", frame)


def test_many_key_columns_do_not_overflow() -> None:
    count = 2000
    frame = pd.DataFrame({f"k{at}": np.arange(count, dtype="int64") * 10**4 for at in range(9)})
    combined = tables._combined_codes(frame, tuple(frame.columns))
    assert len(np.unique(combined)) == count
    assert combined.min() >= 0


@pytest.mark.parametrize(
    ("change", "line", "what"),
    [
        (('key = ["code"]', 'key = ["cod"]'), 3, "key column 'cod' is not declared"),
        (('type = "str"', 'type = "text"'), 5, "'column.code.type' is not as it must be"),
        (
            ('description = "Code"', 'allowed_list = "obs_stat"\ndescription = "Code"'),
            6,
            "unknown code list 'obs_stat'",
        ),
        (
            ('description = "Code"', 'minimum = 0\ndescription = "Code"'),
            4,
            "a range on a column that holds no numbers",
        ),
        (
            ('description = "Code"', 'nullable = true\ndescription = "Code"'),
            4,
            "key column 'code' is nullable",
        ),
        (('table = "sample"', 'table = "other"'), 1, "the table is not called as its file"),
    ],
)
def test_a_faulty_contract_is_refused(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, change: tuple[str, str], line: int, what: str
) -> None:
    head = 'table = "sample"\ndescription = "x"\nkey = ["code"]\n'
    text = head + '[column.code]\ntype = "str"\ndescription = "Code"\n'
    (tmp_path / "sample.toml").write_text(text.replace(*change), encoding="utf-8")
    monkeypatch.setattr(tables, "folder", lambda kind: tmp_path)
    with pytest.raises(DeclarationError, match=re.escape(what)) as caught:
        load_tables.__wrapped__()
    (problem,) = caught.value.problems
    assert problem.place == f"line {line}"
