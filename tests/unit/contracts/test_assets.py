import re
from pathlib import Path

import pytest

from keelbook.contracts.assets import REFERENCE_TABLES, load_asset_rules, load_reference_rates
from keelbook.contracts.codes import load_code_lists
from keelbook.errors import DeclarationError, Problem

HEADER = (
    "asset,industry,efficiency,rate,life,declining_balance_rate,gross_life,b,retirement,discount_rate,"
    "citation,status"
)


def office(tmp_path: Path, *rows: str, header: str = HEADER) -> Path:
    (tmp_path / "rules").mkdir()
    text = "\n".join([header, *(f"{row},office,seen" for row in rows), ""])
    (tmp_path / "rules" / "assets.csv").write_text(text, encoding="utf-8")
    return tmp_path


def refused(tmp_path: Path, *rows: str, header: str = HEADER) -> list[Problem]:
    folder = office(tmp_path, *rows, header=header)
    with pytest.raises(DeclarationError) as caught:
        load_asset_rules(folder)
    assert {problem.file for problem in caught.value.problems} == {str(folder / "rules" / "assets.csv")}
    return list(caught.value.problems)


def test_every_fixed_asset_has_a_rule() -> None:
    rules = load_asset_rules()
    for code in load_code_lists().codes("asset"):
        if code.startswith("N11"):
            assert (code, "_T") in {(rule.asset, rule.industry) for rule in rules.all()}


def test_assets_that_do_not_depreciate_have_none() -> None:
    assert load_asset_rules().resolve("N211", "C") is None
    assert load_asset_rules().resolve("_T", "C") is None


def test_the_most_specific_rule_is_taken() -> None:
    rules = load_asset_rules()
    manufacturing, other = rules.resolve("N112", "C"), rules.resolve("N112", "F")
    assert manufacturing is not None
    assert other is not None
    assert (manufacturing.industry, other.industry) == ("C", "_T")
    assert manufacturing.rate != other.rate


def test_an_asset_takes_the_rule_of_its_parent(tmp_path: Path) -> None:
    folder = office(tmp_path, "N1131,H,cohort_geometric,0.2,,,,,,")
    (folder / "rules" / "codes").mkdir()
    (folder / "rules" / "codes" / "asset.csv").write_text(
        "code,name,parent,citation,status\nN1131X,Bicycles,N1131,office,seen\n", encoding="utf-8"
    )
    rules = load_asset_rules(folder)
    with_industry = rules.resolve("N1131X", "H")
    assert with_industry is not None
    assert (with_industry.asset, with_industry.industry, with_industry.file) == (
        "N1131",
        "H",
        "rules/assets.csv",
    )
    above = rules.resolve("N1131X", "C")
    assert above is not None
    assert above.asset == "N113"


def test_an_offices_rows_replace_all_shipped_rows_of_the_asset(tmp_path: Path) -> None:
    rules = load_asset_rules(office(tmp_path, "N112,_T,cohort_geometric,0.02,,,,,,"))
    rule = rules.resolve("N112", "C")
    assert rule is not None
    assert (rule.rate, rule.file, rule.line) == (0.02, "rules/assets.csv", 2)
    assert rules.resolve("N1131", "C") == load_asset_rules().resolve("N1131", "C")


def test_a_rate_may_follow_from_life_and_declining_balance_rate(tmp_path: Path) -> None:
    rules = load_asset_rules(office(tmp_path, "N112,_T,cohort_geometric,,33,0.91,,,simultaneous,"))
    rule = rules.resolve("N112", "C")
    assert rule is not None
    assert rule.rate == pytest.approx(0.91 / 33, rel=1e-15)
    assert (rule.life, rule.gross_life) == (None, 33)


def test_parameters_of_a_rule_say_where_they_are_set() -> None:
    rule = load_asset_rules().resolve("N11O", "C")
    assert rule is not None
    given = {parameter.name: parameter for parameter in rule.parameters()}
    assert set(given) == {
        "asset.efficiency",
        "asset.life",
        "asset.b",
        "asset.discount_rate",
        "asset.retirement",
        "asset.retirement.distribution",
    }
    life = given["asset.life"]
    assert (life.value, life.file, life.line) == (rule.life, "keelbook/rules/assets.csv", rule.line)
    assert life.citation.endswith("[from memory]")


@pytest.mark.parametrize(
    ("row", "what", "expected"),
    [
        (
            "N112,_T,cohort_geometric,0.03,33,,,,,",
            "both a life and a rate",
            "rate, or life and declining_balance",
        ),
        (
            "N112,_T,cohort_geometric,,,,,,,",
            "cohort_geometric without a rate",
            "rate, or life and declining_balance",
        ),
        ("N112,_T,cohort_geometric,0.03,,0.91,33,,simultaneous,", "contradict each other", "0.0276"),
        ("N112,_T,cohort_geometric,0.03,,0.91,,,,", "without the life it goes with", "gross_life"),
        ("N112,_T,cohort_geometric,0.03,,,,0.5,,", "'b' contradicts cohort_geometric", "one of: rate, life"),
        (
            "N112,_T,cohort_geometric,0.03,,,,,,0.04",
            "'discount_rate' contradicts cohort_geometric",
            "one of: rate",
        ),
        (
            "N112,_T,cohort_geometric,0.03,,,40,,,",
            "a life for the gross stock and a retirement",
            "a name of rules/retirement.csv",
        ),
        (
            "N112,_T,cohort_geometric,0.03,,,,,simultaneous,",
            "a life for the gross stock and a retirement",
            "an empty",
        ),
        (
            "N112,_T,hyperbolic,0.03,20,,,0.5,simultaneous,0.04",
            "'rate' contradicts hyperbolic",
            "one of: life, b",
        ),
        ("N112,_T,hyperbolic,,,,,0.5,simultaneous,0.04", "hyperbolic without 'life'", "life"),
        ("N112,_T,hyperbolic,,20,,,0.5,simultaneous,", "hyperbolic without 'discount_rate'", "discount_rate"),
        ("N112,_T,hyperbolic,,20,,,0.5,,0.04", "hyperbolic without 'retirement'", "retirement"),
        (
            "N112,_T,hyperbolic,,20,,,1.5,simultaneous,0.04",
            "'b' is not as it must be",
            "less than or equal to 1",
        ),
        (
            "N112,_T,hyperbolic,,0,,,0.5,simultaneous,0.04",
            "'life' is not as it must be",
            "greater than or equal to 1",
        ),
        ("N112,_T,cohort_geometric,0.1,,,0.4,,simultaneous,", "'gross_life' is not as it must be", "greater"),
        ("N112,_T,cohort_geometric,,3,3.5,,,simultaneous,", "is no rate", "at most 1"),
        ("N112,_T,cohort_geometric,0,,,,,,", "'rate' is not as it must be", "greater than 0"),
        ("N112,_T,cohort_geometric,1.2,,,,,,", "'rate' is not as it must be", "less than or equal to 1"),
        (
            "N112,_T,hyperbolical,,20,,,0.5,simultaneous,0.04",
            "'efficiency' is not as it must be",
            "one of: cohort",
        ),
        (
            "N112,_T,linear,,20,,,,simultanous,0.04",
            "unknown retirement 'simultanous'",
            "one of: simultaneous",
        ),
        ("N112,_T,linear,,20,,,,simultaneous,-1", "'discount_rate' is not as it must be", "greater than -1"),
        ("N112,_T,,0.03,,,,,,", "either an efficiency or an age_price", "one of the two"),
        ("N1129,_T,cohort_geometric,0.03,,,,,,", "unknown asset 'N1129'", "a code of the list asset"),
        ("N112,CC,cohort_geometric,0.03,,,,,,", "unknown industry 'CC'", "a code of the list industry"),
        ("N112,_Z,cohort_geometric,0.03,,,,,,", "unknown industry '_Z'", "a code of the list industry"),
    ],
)
def test_a_contradiction_is_refused_with_its_line(tmp_path: Path, row: str, what: str, expected: str) -> None:
    (problem,) = refused(tmp_path, "N111,_T,cohort_geometric,0.01,,,,,,", row)
    assert problem.place == "line 3"
    assert what in problem.what
    assert problem.expected.startswith(expected)
    assert problem.remedy


PRICES = HEADER.replace("efficiency", "efficiency,age_price")


@pytest.mark.parametrize(
    ("row", "what"),
    [
        ("N112,_T,linear,straight_line,,20,,,,simultaneous,0.04", "either an efficiency or an age_price"),
        ("N112,_T,,straight,,20,,,,simultaneous,0.04", "'age_price' is not as it must be"),
        ("N112,_T,,straight_line,,20,,,,simultaneous,", "straight_line without 'discount_rate'"),
        ("N112,_T,,straight_line,,20,2,,,simultaneous,0.04", "'declining_balance_rate' contradicts"),
        ("N112,_T,,declining_balance,,20,,,,simultaneous,0.04", "without 'declining_balance_rate'"),
        ("N112,_T,,straight_line,,20,,,,simultaneous,-0.2", "these parameters give no profile"),
    ],
)
def test_a_price_by_age_is_checked_like_an_efficiency(tmp_path: Path, row: str, what: str) -> None:
    (problem,) = refused(tmp_path, row, header=PRICES)
    assert problem.place == "line 2"
    assert what in problem.what
    assert problem.remedy


def test_the_nearest_retirement_is_named(tmp_path: Path) -> None:
    (problem,) = refused(tmp_path, "N112,_T,linear,,20,,,,winfrey_s4,0.04")
    assert problem.remedy == "did you mean 'winfrey_s3'?"


def test_a_rule_records_its_retirement_pattern(tmp_path: Path) -> None:
    folder = office(tmp_path, "N112,_T,linear,,20,,,,truncated_normal,0.04", "N113,_T,linear,,9,,,,ours,0.04")
    (folder / "rules" / "retirement.csv").write_text(
        "name,distribution,sd,low,high,citation,status\nours,truncated_normal,0.3,0,2,survey 2019,seen\n",
        encoding="utf-8",
    )
    rules = load_asset_rules(folder)
    for asset, sd, file in (
        ("N112", 0.5, "keelbook/rules/retirement.csv"),
        ("N113", 0.3, "rules/retirement.csv"),
    ):
        rule = rules.resolve(asset, "C")
        assert rule is not None
        given = {parameter.name: parameter for parameter in rule.parameters()}
        assert given["asset.retirement.distribution"].value == "truncated_normal"
        assert {name for name in given if name.startswith("asset.retirement.")} == {
            f"asset.retirement.{name}" for name in ("distribution", "sd", "low", "high")
        }
        assert (given["asset.retirement.sd"].value, given["asset.retirement.sd"].file) == (sd, file)
    assert given["asset.retirement.sd"].line == 2
    assert given["asset.retirement.sd"].citation == "survey 2019 [seen]"
    assert given["asset.retirement"].file == "rules/assets.csv"


def test_faults_of_assets_and_of_retirement_are_told_together(tmp_path: Path) -> None:
    """A pattern that could not be read is not called unknown."""
    folder = office(tmp_path, "N112,_T,linear,,20,,,,ours,0.04", "N113,_T,linear,,0,,,,ours,0.04")
    (folder / "rules" / "retirement.csv").write_text(
        "name,distribution,sd,citation,status\nours,winfrey_moment,0.6,survey,seen\n", encoding="utf-8"
    )
    with pytest.raises(DeclarationError) as caught:
        load_asset_rules(folder)
    assert [(Path(p.file).name, p.place) for p in caught.value.problems] == [
        ("retirement.csv", "line 2"),
        ("assets.csv", "line 3"),
    ]


def test_all_faults_of_all_rows_at_once(tmp_path: Path) -> None:
    problems = refused(
        tmp_path,
        "N112,_T,cohort_geometric,0.03,33,,,0.5,,",
        "N1131,_T,cohort_geometric,0.2,,,,,,",
        "N1131,_T,cohort_geometric,0.3,,,,,,",
    )
    assert [problem.place for problem in problems] == ["line 2", "line 2", "line 4"]


def test_published_tables_hold_every_row() -> None:
    counts = {name: len(load_reference_rates(name)) for name in REFERENCE_TABLES}
    assert counts == {"bea_1997": 34, "bea_structures": 31, "bea_intellectual_property": 21}
    assert {row.status for row in load_reference_rates("bea_1997")} == {"seen"}
    assert {row.status for row in load_reference_rates("bea_structures")} == {"second-hand"}


def test_exceptions_of_the_published_tables_are_the_known_ones() -> None:
    odd = {row.asset for name in REFERENCE_TABLES for row in load_reference_rates(name) if row.exception}
    assert odd == {
        "Other commercial buildings",
        "Multimerchandise shopping",
        "Food and beverage establishments",
    }


def test_shipped_rules_repeat_the_rows_they_name() -> None:
    named = re.compile(r"rules/(\w+)\.csv, row '([^']+)'")
    without_row = []
    for rule in load_asset_rules().all():
        match = named.match(rule.citation)
        if match is None:
            without_row.append((rule.asset, rule.efficiency))
            continue
        rows = {
            f"{row.asset}, {row.period}".removesuffix(", "): row
            for row in load_reference_rates(match.group(1))
        }
        row = rows[match.group(2)]
        assert (rule.rate, rule.declining_balance_rate, rule.gross_life, rule.status) == (
            row.rate,
            row.declining_balance_rate,
            row.life,
            row.status,
        )
    geometric = [asset for asset, efficiency in without_row if efficiency == "cohort_geometric"]
    assert geometric == ["N11", "N111", "N116"]


IN_TIME = (
    "asset,industry,first_year,applies_to,efficiency,rate,life,b,retirement,discount_rate,"
    "initial_stock,initial_growth,capital_output_ratio,citation,status"
)


def test_rows_that_hold_from_a_year_on_are_in_the_rule_of_the_asset(tmp_path: Path) -> None:
    rows = ("N112,_T,1995,stock,cohort_geometric,0.05,,,,,,,", "N112,_T,,,cohort_geometric,0.03,,,,,zero,,")
    rule = load_asset_rules(office(tmp_path, *rows, header=IN_TIME)).resolve("N112", "C")
    assert rule is not None
    given = {parameter.name: (parameter.value, parameter.line) for parameter in rule.parameters()}
    assert given == {
        "asset.efficiency": ("cohort_geometric", 3),
        "asset.rate": (0.03, 3),
        "asset.initial_stock": ("zero", 3),
        "asset.applies_to": ("stock", 2),
        "asset.efficiency@1995": ("cohort_geometric", 2),
        "asset.rate@1995": (0.05, 2),
    }


@pytest.mark.parametrize(
    ("rows", "what"),
    [
        (["N112,_T,1995,,cohort_geometric,0.05,,,,,,,"], "no row holds before the first year"),
        (["N112,_T,,stock,cohort_geometric,0.05,,,,,,,"], "applies_to without first_year"),
        (
            [
                "N112,_T,,,cohort_geometric,0.05,,,,,,,",
                "N112,_T,1990,stock,cohort_geometric,0.05,,,,,,,",
                "N112,_T,1995,,cohort_geometric,0.06,,,,,,,",
            ],
            "some rows apply to vintages and some to the stock",
        ),
        (
            [
                "N112,_T,,,hyperbolic,,20,0.5,simultaneous,0.04,,,",
                "N112,_T,1990,stock,cohort_geometric,0.05,,,,,,,",
            ],
            "needs a rate",
        ),
        (
            [
                "N112,_T,,,cohort_geometric,0.05,,,,,,,",
                "N112,_T,1990,,cohort_geometric,0.06,,,,,zero,,",
            ],
            "'initial_stock' in a row that holds from 1990",
        ),
        (
            ["N112,_T,,,cohort_geometric,0.05,,,,,,,", "N112,_T,1990,,cohort_geometric,0,,,,,,,"],
            "rate",
        ),
        (["N112,_T,,,cohort_geometric,0.05,,,,,capital_output_ratio,,"], "without the ratio"),
        (["N112,_T,,,cohort_geometric,0.05,,,,,zero,,2.5"], "'capital_output_ratio' contradicts"),
        (["N112,_T,,,cohort_geometric,0.05,,,,,steady_state,0.02,"], "'initial_growth' contradicts"),
        (["N112,_T,,,cohort_geometric,0.05,,,,,backcast_growth,-0.05,"], "growth plus depreciation is not"),
        (["N112,_T,,,cohort_geometric,0.05,,,,,nothing,,"], "initial_stock"),
    ],
)
def test_starts_and_years_that_do_not_go_together(tmp_path: Path, rows: list[str], what: str) -> None:
    (problem,) = refused(tmp_path, *rows, header=IN_TIME)
    assert what in problem.what
    assert problem.place.startswith("line ")
