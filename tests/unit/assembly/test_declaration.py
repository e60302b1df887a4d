from pathlib import Path

import pytest

from keelbook.assembly.declaration import Assembly, load_assembly
from keelbook.contracts.parameters import load_parameters
from keelbook.errors import DeclarationError, Problem

CSV_LONG = """title = "Invented"
area = "HV"
currency = "HVK"
reference_year = 2015
period = [1985, 2019]

[[source]]
name = "investment"
file = "sources/investment.csv"
measure = "investment"
price_basis = "current"
unit_mult = 6
frequency = "A"
[source.csv]
delimiter = ";"
[source.long]
time_period = "Year"
value = "Value"
asset = "Asset"
[source.codes.asset]
"Machines" = "N11O"
[source.fixed]
industry = "C"
[source.marks]
missing = { ":" = "O" }
flags = { p = "P" }
"""

EXCEL_WIDE = """
[[source]]
name = "prices"
file = "sources/prices.xlsx"
measure = "investment_price"
price_basis = "source_index"
unit_mult = 0
frequency = "A"
[source.excel]
sheet = "T1"
header_rows = [4, 5]
first_row = 6
[source.wide]
periods = "across"
period_header = 2
asset = "Asset"
[source.wide.headers]
industry = 1
"""

BOTH = CSV_LONG + EXCEL_WIDE


def write(folder: Path, text: str) -> Path:
    (folder / "assembly.toml").write_text(text, encoding="utf-8")
    return folder


def refused(folder: Path, text: str) -> list[Problem]:
    with pytest.raises(DeclarationError) as caught:
        load_assembly(write(folder, text))
    assert caught.value.exit_code == 2
    return list(caught.value.problems)


def line_with(text: str, part: str) -> str:
    lines = [number for number, line in enumerate(text.splitlines(), start=1) if line.startswith(part)]
    return f"line {lines[0]}"


def test_loads_what_is_declared(tmp_path: Path) -> None:
    assembly = load_assembly(write(tmp_path, BOTH))
    assert (assembly.period, assembly.reference_year, assembly.folder) == ((1985, 2019), 2015, tmp_path)
    investment, prices = assembly.sources
    assert investment.csv is not None
    assert (investment.csv.delimiter, investment.csv.encoding, investment.csv.decimal) == (";", "utf-8", ".")
    assert investment.fixed == {"industry": "C"}
    assert investment.marks.missing == {"": "O", ":": "O"}
    assert (investment.columns(), prices.columns()) == (["asset"], ["asset", "industry"])
    assert (assembly.line_of("investment"), assembly.line_of("prices")) == (7, 28)
    assert assembly.lists.codes("area") == ("HV",)
    with pytest.raises(KeyError):
        assembly.line_of("none")


def test_an_empty_cell_is_missing_unless_said_otherwise(tmp_path: Path) -> None:
    def marks(text: str) -> dict[str, str]:
        return load_assembly(write(tmp_path, text)).sources[0].marks.missing

    assert marks(CSV_LONG.replace('missing = { ":" = "O" }', "")) == {"": "O"}
    assert marks(CSV_LONG.replace('":" = "O"', '"" = "M"')) == {"": "M"}


def test_areas_are_those_of_the_sources_too(tmp_path: Path) -> None:
    text = CSV_LONG.replace('frequency = "A"', 'frequency = "A"\narea = "HW"')
    assert load_assembly(write(tmp_path, text)).lists.codes("area") == ("HV", "HW")


def test_rules_of_the_assembly_are_parameters_with_their_line(tmp_path: Path) -> None:
    text = CSV_LONG + '\n[rules.capital.timing]\nvalue = "end"\ncitation = "decision of the accounts unit"\n'
    assembly = load_assembly(write(tmp_path, text))
    (override,) = assembly.rule_overrides
    assert (override.name, override.value, override.file) == ("capital.timing", "end", "assembly.toml")
    assert f"line {override.line}" == line_with(text, "[rules.capital.timing]")
    assert load_parameters(assembly).get("capital", "timing") == override


def test_a_folder_without_an_assembly(tmp_path: Path) -> None:
    with pytest.raises(DeclarationError) as caught:
        load_assembly(tmp_path)
    (problem,) = caught.value.problems
    assert "keelbook new" in problem.remedy


CSV_FAULTS = [
    # what is replaced, by what, start of the line to be named, what is said, start of the remedy
    ("title =", "titel = 1\ntitle =", "titel", "unknown key 'titel'", "did you mean 'title'?"),
    ("delimiter =", "delimeter =", "delimeter", "unknown key 'delimeter'", "did you mean 'delimiter'?"),
    ('"investment"\nprice', '"investmnt"\nprice', "measure", "unknown measure", "did you mean 'investment'?"),
    (
        '"current"',
        '"source_index"',
        "price_basis",
        "price basis 'source_index' is not one of investment",
        "corr",
    ),
    ('"current"', '"curent"', "price_basis", "is not as it must be", "did you mean 'current'?"),
    (
        'price_basis = "current"',
        "",
        "[[source]]",
        "price basis '_Z' is not one of investment",
        "correct price",
    ),
    ("= 2015", "= 2025", "period", "the reference year is outside the period", "correct reference_year"),
    ("[1985, 2019]", "[2019, 1985]", "period", "the period is reversed", "period = [1985, 2019]"),
    ('"sources/', '"../sources/', "file", "the file is not inside the assembly", "put the file"),
    ('"sources/', '"/sources/', "file", "the file is not inside the assembly", "put the file"),
    ('"sources/', '"C:/sources/', "file", "the file is not inside the assembly", "put the file"),
    ('"sources/', '"sources\\\\', "file", "the file is not inside the assembly", "put the file"),
    ('"N11O"', '"N1134"', '"Machines"', "unknown asset 'N1134'", "did you mean 'N11"),
    ('industry = "C"', 'industry = "c"', "industry", "unknown industry 'c'", "did you mean 'C'?"),
    ('industry = "C"', 'industri = "C"', "industri", "unknown key 'industri'", "did you mean 'industry'?"),
    ('industry = "C"', 'asset = "N112"', 'asset = "N112"', "'asset' is given twice", "remove one"),
    ('industry = "C"', 'worker_group = "SAL"', "worker_group", "no dimension 'worker_group'", "remove it"),
    ("[source.codes.asset]", "[source.codes.sector]", '"Machines"', "unknown sector 'N11O'", ""),
    (
        "[source.fixed]",
        '[source.codes.sector]\nx = "S1"\n[source.fixed]',
        "[source.codes.sector]",
        "no labels",
        "",
    ),
    ('":" = "O"', '":" = "OO"', "missing", "unknown observation status 'OO'", "did you mean 'O'?"),
    ('p = "P"', 'p = "X"', "flags", "unknown observation status 'X'", "use a code of CL_OBS_STATUS"),
    ('p = "P"', '"1" = "P"', "flags", "the flag '1' is not made of letters", "a mark that stands alone"),
    (
        "unit_mult = 6",
        "unit_mult = 16",
        "unit_mult",
        "unknown unit_mult 16",
        "3 for thousands, 6 for millions",
    ),
    ("unit_mult = 6", "", "[[source]]", "'source.0.unit_mult' is missing", "add 'unit_mult'"),
    ("unit_mult = 6", 'unit_mult = "6"', "unit_mult", "is not as it must be", "correct 'unit_mult'"),
    ('"A"', '"M"', "frequency", "'source.0.frequency' is not as it must be", ""),
    ('"A"', '"A"\nannual_rate = true', "annual_rate", "annual_rate is for sub-annual figures", "remove"),
    (
        'delimiter = ";"',
        'encoding = "cp1225"',
        "encoding",
        "unknown encoding 'cp1225'",
        "did you mean 'cp1252'?",
    ),
    (
        'delimiter = ";"',
        'thousands = "."',
        "thousands",
        "the thousands mark is the decimal mark",
        "correct one",
    ),
    ('delimiter = ";"', 'delimiter = ";;"', "delimiter", "is not as it must be", "correct 'delimiter'"),
    ('asset = "Asset"', 'asset = "Value"', "value", "the column 'Value' has two roles", "correct one"),
    ('[source.csv]\ndelimiter = ";"', "", "[[source]]", "source 'investment' has no file format", "add one"),
    ('measure = "investment"', "", "[[source]]", "source 'investment' has no measure", "add measure"),
    (
        'asset = "Asset"',
        'asset = "Asset"\nmeasure = "M"',
        'measure = "inv',
        "gives its measure twice",
        "remove",
    ),
]


@pytest.mark.parametrize(("old", "new", "at", "what", "remedy"), CSV_FAULTS)
def test_a_fault_of_a_csv_source(tmp_path: Path, old: str, new: str, at: str, what: str, remedy: str) -> None:
    assert old in CSV_LONG
    text = CSV_LONG.replace(old, new)
    problem = refused(tmp_path, text)[0]
    assert problem.place == line_with(text, at)
    assert what in problem.what
    assert problem.remedy.startswith(remedy)
    assert problem.file == str(tmp_path / "assembly.toml")


WIDE_FAULTS = [
    ("period_header = 2", "period_header = 3", "period_header", "there is no such header row", "from 1 to 2"),
    ("industry = 1", "industry = 3", "industry", "there is no such header row", "from 1 to 2"),
    ("period_header = 2", "", "periods", "periods across without 'period_header'", "period_header"),
    (
        "period_header = 2",
        'period_header = 2\nperiod_column = "Y"',
        "period_column",
        "contradicts",
        "period_header",
    ),
    ('"across"', '"down"', "periods", "periods down without 'period_column'", "period_column"),
    ('"across"', '"sideways"', "periods", "is not as it must be", "one of: across, down"),
    ("[4, 5]", "[4, 6]", "header_rows", "do not follow each other", "consecutive rows"),
    ("[4, 5]", "[5, 4]", "header_rows", "do not follow each other", "consecutive rows"),
    ("[4, 5]", "[]", "header_rows", "no header row", "one row or more"),
    ("first_row = 6", "first_row = 5", "first_row", "the first row lies in the header", "a row after 5"),
    ("first_row = 6", "first_row = 6\nlast_row = 5", "last_row", "before the first", "6 or more"),
    ("industry = 1", "asset = 1", "[[source]]", "'asset' is given twice", "one way"),
    ("industry = 1", "worker_group = 1", "[[source]]", "no dimension 'worker_group'", "no worker_group"),
]


@pytest.mark.parametrize(("old", "new", "at", "what", "expected"), WIDE_FAULTS)
def test_a_fault_of_a_wide_workbook(
    tmp_path: Path, old: str, new: str, at: str, what: str, expected: str
) -> None:
    assert old in EXCEL_WIDE
    head = CSV_LONG[: CSV_LONG.index("[[source]]")].rstrip("\n") + "\n"
    text = head + EXCEL_WIDE.replace(old, new)
    problem = refused(tmp_path, text)[0]
    assert problem.place == line_with(text, at)
    assert what in problem.what
    assert problem.expected.startswith(expected)


def test_two_formats_and_two_layouts(tmp_path: Path) -> None:
    text = CSV_LONG + (
        '[source.excel]\nsheet = "S"\nheader_rows = [1]\nfirst_row = 2\n'
        '[source.wide]\nperiods = "down"\nperiod_column = "Year"\n'
    )
    assert [(problem.place, problem.found) for problem in refused(tmp_path, text)] == [
        (line_with(text, "[source.excel]"), "csv and excel"),
        (line_with(text, "[source.wide]"), "long and wide"),
    ]


def test_a_delivered_measure_that_needs_a_dimension(tmp_path: Path) -> None:
    text = CSV_LONG.replace('measure = "investment"', 'measure = "user_cost"').replace(
        'asset = "Asset"\n', ""
    )
    text = text.replace('[source.codes.asset]\n"Machines" = "N11O"\n', "")
    (problem,) = refused(tmp_path, text)
    assert problem.what == "user_cost needs the dimension 'asset'"


def test_measures_of_a_column_are_checked_one_by_one(tmp_path: Path) -> None:
    text = CSV_LONG.replace('measure = "investment"\n', "").replace('asset = "Asset"', 'measure = "Code"')
    text = text.replace('[source.codes.asset]\n"Machines" = "N11O"', "[source.codes.measure]\n{}")
    good = text.replace("{}", '"B.1g" = "value_added"\n"D.1" = "compensation_of_employees"')
    assert load_assembly(write(tmp_path, good)).sources[0].measures() == [
        "value_added",
        "compensation_of_employees",
    ]
    unknown = text.replace("{}", '"B.1g" = "value_add"')
    (problem,) = refused(tmp_path, unknown)
    assert (problem.place, problem.remedy) == (line_with(unknown, '"B.1g"'), "did you mean 'value_added'?")
    (problem,) = refused(tmp_path, text.replace("{}", '"EMP" = "hours_worked"'))
    assert problem.what == "price basis 'current' is not one of hours_worked"


def test_a_name_twice(tmp_path: Path) -> None:
    text = BOTH.replace('name = "prices"', 'name = "investment"')
    (problem,) = refused(tmp_path, text)
    assert (problem.place, problem.found) == ("line 29", "investment")


def test_no_source(tmp_path: Path) -> None:
    text = CSV_LONG[: CSV_LONG.index("[[source]]")] + "source = []\n"
    (problem,) = refused(tmp_path, text)
    assert (problem.place, problem.what) == ("line 7", "no source")


def test_a_link_out_of_the_folder(tmp_path: Path) -> None:
    outside = tmp_path / "outside"
    outside.mkdir()
    folder = tmp_path / "assembly"
    folder.mkdir()
    (folder / "sources").symlink_to(outside)
    (problem,) = refused(folder, CSV_LONG)
    assert problem.what == "the file is not inside the assembly"


def test_a_rule_of_the_assembly_is_checked_like_a_rule_file(tmp_path: Path) -> None:
    text = CSV_LONG + (
        '[rules.capital.timing]\nvalue = "middle"\ncitation = "x"\n'
        '[rules.capital.timng]\nvalue = "mid"\ncitation = ""\n'
        '[rules.captal.timing]\nvalue = "mid"\ncitation = "x"\n'
    )
    assert [(problem.place, problem.remedy) for problem in refused(tmp_path, text)] == [
        (line_with(text, 'value = "middle"'), "did you mean 'mid'?"),
        (line_with(text, "[rules.capital.timng]"), "did you mean 'timing'?"),
        (line_with(text, "[rules.captal"), "did you mean 'capital'?"),
    ]


def test_everything_wrong_in_every_file_at_once(tmp_path: Path) -> None:
    codes = tmp_path / "rules" / "codes"
    codes.mkdir(parents=True)
    (codes / "asset.csv").write_text("code,name,citation,status\nN11,Again,x,seen\n", encoding="utf-8")
    (tmp_path / "rules" / "capital.toml").write_text(
        '[timng]\nvalue = "mid"\ncitation = "x"\n', encoding="utf-8"
    )
    (tmp_path / "rules" / "assets.csv").write_text(
        "asset,industry,efficiency,rate,life,citation,status\nN112,_T,cohort_geometric,0.1,10,x,seen\n",
        encoding="utf-8",
    )
    (tmp_path / "rules" / "screening.toml").write_text("[[rul]]\n", encoding="utf-8")
    (tmp_path / "rules" / "asset.csv").write_text("", encoding="utf-8")
    text = CSV_LONG.replace('"Machines" = "N11O"', '"Machines" = "N1134"').replace("title", "titel")
    named = {Path(problem.file).relative_to(tmp_path).as_posix() for problem in refused(tmp_path, text)}
    assert named == {
        "assembly.toml",
        "rules/capital.toml",
        "rules/assets.csv",
        "rules/screening.toml",
        "rules/asset.csv",
        "rules/codes/asset.csv",
    }


def test_corrections_and_acceptances_are_checked_with_all_else(tmp_path: Path) -> None:
    (tmp_path / "corrections.toml").write_text("[[corection]]\n", encoding="utf-8")
    (tmp_path / "acceptances.toml").write_text("[[acceptance]]\nrule = 1\n", encoding="utf-8")
    (tmp_path / "acceptance.toml").write_text("", encoding="utf-8")
    (tmp_path / "notes.toml").write_text("", encoding="utf-8")
    named = {Path(problem.file).name for problem in refused(tmp_path, CSV_LONG)}
    assert named == {"corrections.toml", "acceptances.toml", "acceptance.toml"}


def test_the_demo_is_declared_without_fault() -> None:
    demo = Path(__file__).parents[3] / "fixtures" / "demo"
    assembly = load_assembly(demo)
    assert isinstance(assembly, Assembly)
    assert len(assembly.sources) == len({source.name for source in assembly.sources})
