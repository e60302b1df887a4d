"""Every file of `schemas/` and `rules/` is read by a loader; a file that none reads would change nothing."""

from pathlib import Path

from keelbook.contracts.assets import REFERENCE_TABLES, load_asset_rules, load_reference_rates
from keelbook.contracts.codes import SHIPPED, load_code_lists
from keelbook.contracts.measures import load_measures
from keelbook.contracts.parameters import declared_parameters, load_parameters
from keelbook.contracts.retirement import load_retirement
from keelbook.contracts.screening_rules import load_screening_rules
from keelbook.contracts.tables import NOT_TABLES, load_tables
from keelbook.locate import folder


def files(kind: Path) -> set[str]:
    return {path.relative_to(kind).as_posix() for path in kind.rglob("*") if path.is_file()}


def test_every_schema_loads_and_none_is_stray() -> None:
    read = {f"{name}.toml" for name in (*load_tables(), *NOT_TABLES)}
    assert load_measures()
    assert declared_parameters()
    assert files(folder("schemas")) == read


def test_every_rule_file_loads_and_none_is_stray() -> None:
    parameters = {Path(parameter.file).name for parameter in load_parameters().all()}
    codes = {f"codes/{name}.csv" for name in SHIPPED if load_code_lists().codes(name)}
    references = {f"{name}.csv" for name in REFERENCE_TABLES if load_reference_rates(name)}
    assert load_asset_rules().all()
    assert load_retirement()
    assert load_screening_rules()
    assert files(folder("rules")) == parameters | codes | references | {
        "assets.csv",
        "retirement.csv",
        "screening.toml",
    }
