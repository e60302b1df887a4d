"""The commands on the assembled demo, as a user starts them."""

import json
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest
from click.testing import CliRunner

from keelbook.cli.main import main
from keelbook.contracts.parameters import load_parameters
from keelbook.contracts.retirement import load_retirement
from keelbook.methods.profiles import AGE_PRICE_FORMS, EFFICIENCY_FORMS
from keelbook.methods.retirement import RETIREMENT
from keelbook.outputs.catalogue import TITLES
from keelbook.stages.catalogue import FORMULAS

Run = Callable[..., "subprocess.CompletedProcess[str]"]

CORPORATIONS = ("--area", "XV", "--sector", "S11")


def ask(*arguments: object) -> str:
    """Run a command that must succeed and return what it prints on standard output."""
    result = CliRunner().invoke(main, [str(a) for a in arguments])
    assert result.exit_code == 0, result.stderr
    return result.stdout


def reply(*arguments: object) -> Any:
    return json.loads(ask(*arguments, "--json"))


def cells(figure: dict[str, Any]) -> list[dict[str, Any]]:
    """Return every source cell below a traced figure."""
    out = []
    for term in figure["terms"]:
        if "cell" in term:
            out.append(term["cell"])
        if "figure" in term:
            out.extend(cells(term["figure"]))
    return out


def test_help_names_every_command_and_exit_code() -> None:
    text = ask("--help")
    for name in ("new", "assemble", "screen", "trace", "verify", "decompose", "methods"):
        assert f"  {name} " in text
        assert "Usage: " in ask(name, "--help")
    for code in range(6):
        assert f"{code} " in text


def test_help_imports_none_of_the_heavy_libraries() -> None:
    code = (
        "import sys\n"
        "from keelbook.cli.main import main\n"
        "try:\n    main(['--help'])\nexcept SystemExit as end:\n    assert end.code == 0\n"
        "heavy = {'pandas', 'numpy', 'duckdb', 'pandera', 'pydantic', 'openpyxl', 'scipy'}\n"
        "print(sorted(heavy & set(sys.modules)), file=sys.stderr)\n"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert "Usage: " in done.stdout
    assert done.stderr.strip() == "[]"


def test_a_cell_with_a_superscript_is_traced_to_its_address_and_raw_text(demo_build: Path) -> None:
    """Y12 reads 1032.9 with a footnote 1 behind it, which common readers take for 1032.91."""
    found = reply(
        "trace", demo_build, "investment", *CORPORATIONS, "--industry", "C", "--asset", "N112", "--price-basis",
        "current", "--year", "2006",
    )  # fmt: skip
    assert found["stored"] == found["recomputed"] == 1032.9
    cell = cells(found)[0]
    assert (cell["file"], cell["sheet"]) == ("sources/capital_formation.xlsx", "T1 Investment")
    assert (cell["address"], cell["row"], cell["column"]) == ("Y12", 12, 25)
    assert cell["raw"] == "1032.9^1"
    assert len(cell["sha256"]) == 64
    text = ask(
        "trace", demo_build, "investment", *CORPORATIONS, "--industry", "C", "--asset", "N112", "--price-basis",
        "current", "--year", "2006",
    )  # fmt: skip
    assert "sources/capital_formation.xlsx, sheet 'T1 Investment', Y12: \"1032.9^1\"" in text


def test_a_figure_of_the_cp1252_file_is_traced_to_its_line(demo_build: Path) -> None:
    path = demo_build / "sources" / "income_account.csv"
    lines = path.read_text(encoding="cp1252").splitlines()
    line = next(
        n
        for n, text in enumerate(lines, 1)
        if text.startswith("2015;Kapital") and ";Verarb" in text and ";B.1g;" in text
    )
    raw = lines[line - 1].split(";")[4]
    found = reply(
        "trace",
        demo_build,
        "value_added",
        *CORPORATIONS,
        "--industry",
        "C",
        "--price-basis",
        "current",
        "--year",
        2015,
    )
    assert found["stored"] == float(raw.replace(".", "").replace(",", "."))
    (cell,) = cells(found)
    assert (cell["file"], cell["sheet"]) == ("sources/income_account.csv", "")
    assert (cell["row"], cell["column"], cell["raw"]) == (line, 5, raw)


def test_a_year_of_hours_is_traced_to_its_four_quarters(demo_build: Path) -> None:
    path = demo_build / "sources" / "hours_quarterly.csv"
    lines = path.read_text(encoding="utf-8-sig").splitlines()
    wanted = [f"2019-Q{q},S14,M,self-employed," for q in range(1, 5)]
    at = [next(n for n, text in enumerate(lines, 1) if text.startswith(start)) for start in wanted]
    raw = [lines[n - 1].rsplit(",", 1)[1] for n in at]
    assert all(text.endswith("p") for text in raw)
    found = reply(
        "trace",
        demo_build,
        "hours_worked",
        "--area",
        "XV",
        "--sector",
        "S14",
        "--industry",
        "M",
        "--worker-group",
        "SELF",
        "--year",
        2019,
    )
    # Thousand hours in four quarters are million hours of a year.
    assert found["stored"] == pytest.approx(sum(int(text[:-1]) for text in raw) / 1000, rel=1e-12)
    assert [term["time_period"] for term in found["terms"]] == [f"2019-Q{q}" for q in range(1, 5)]
    assert [(c["row"], c["column"], c["raw"], c["obs_status"]) for c in cells(found)] == [
        (n, 5, text, "P") for n, text in zip(at, raw, strict=True)
    ]


def test_a_stock_is_traced_through_every_level_to_cells(demo_build: Path) -> None:
    found = reply(
        "trace",
        demo_build,
        "net_stock",
        *CORPORATIONS,
        "--industry",
        "J",
        "--asset",
        "N1132",
        "--year",
        2015,
        "--depth",
        6,
    )
    assert found["citation"]
    names = {p["name"]: p for p in found["parameters"]}
    assert names["asset.rate"]["value"] == 0.3119
    assert names["asset.rate"]["file"].endswith("rules/assets.csv")
    assert "bea_1997.csv" in names["asset.rate"]["citation"]
    total = sum(term["contribution"] for term in found["terms"] if term["role"] != "growth")
    assert total == pytest.approx(found["stored"], rel=1e-12)
    below = cells(found)
    # 31 years of investment and of the branch's own price, from two sheets.
    assert {cell["sheet"] for cell in below} == {"T1 Investment", "T3 Prices by branch"}
    assert len({(c["sheet"], c["address"]) for c in below if c["sheet"] == "T1 Investment"}) == 31


def test_trace_lists_the_choices_when_several_figures_fit(demo_build: Path) -> None:
    result = CliRunner().invoke(
        main, ["trace", str(demo_build), "user_cost", *CORPORATIONS, "--industry", "J", "--year", "2015"]
    )
    assert result.exit_code == 2
    assert "6 series of user_cost fit" in result.stderr
    assert "add one of --asset" in result.stderr


def test_trace_names_the_nearest_measure(demo_build: Path) -> None:
    result = CliRunner().invoke(main, ["trace", str(demo_build), "net_stok", "--year", "2015"])
    assert result.exit_code == 2
    assert "net_stock" in result.stderr


def test_decompose_prints_what_is_stored(demo_build: Path) -> None:
    text = ask("decompose", demo_build)
    assert text.splitlines()[0].startswith("Vorrelund and Wendermark (invented countries)")
    for word in (
        "output",
        "capital",
        "labour",
        "residual",
        "labour-aug.",
        "capital-aug.",
        "level",
        "deepening",
    ):
        assert word in text
    rows = reply("decompose", demo_build)
    shown = [(row["area"], row["sector"], row["industry"]) for row in rows["averages"]]
    assert shown[:14] == [("XV", "S1", code) for code in ("_T", *"ACDFGHJLMOPQ")] + [("XV", "S11", "_T")]
    assert shown[-9:] == [("XW", "S1", code) for code in ("_T", *"ACDFGHJM")]
    whole = rows["averages"][0]
    assert (whole["first"], whole["last"]) == (1987, 2019)
    parts = whole["capital_contribution"] + whole["labour_contribution"] + whole["residual_growth"]
    assert whole["output_growth"] == pytest.approx(parts, rel=1e-10)
    assert [row["time_period"] for row in rows["yearly"]["rows"]][-1] == "2019"


def test_decompose_over_chosen_years_and_in_the_other_form(demo_build: Path) -> None:
    rows = reply(
        "decompose",
        demo_build,
        *CORPORATIONS,
        "--industry",
        "J",
        "--form",
        "discrete",
        "--from",
        2001,
        "--to",
        2010,
    )
    assert {(row["first"], row["last"]) for row in rows["averages"]} == {(2001, 2010)}
    mine = [row for row in rows["yearly"]["rows"] if 2001 <= int(row["time_period"]) <= 2010]
    of_j = next(row for row in rows["averages"] if row["industry"] == "J")
    assert of_j["output_growth"] == pytest.approx(sum(r["output_growth"] for r in mine) / 10, rel=1e-10)


def test_verify_reperforms_a_figure_of_every_form(demo_build: Path) -> None:
    result = reply("verify", demo_build, "--figures", 1)
    assert result["files"] == 3
    assert result["measures"] > 40
    assert result["figures"] > 80
    assert "all as stored" in ask("verify", demo_build, "--figures", 1)


def test_screen_reads_and_writes_nothing(copy_fixture: Callable[[str, Path], Path], tmp_path: Path) -> None:
    folder = copy_fixture("demo", tmp_path / "demo")
    before = sorted(folder.rglob("*"))
    result = reply("screen", folder)
    assert sum(row["cells"] for row in result["sources"]) == 19114
    assert {row["rule"] for row in result["findings"]} == {
        "coverage", "growth_jump", "hours_per_person", "series_break", "sign_income"
    }  # fmt: skip
    assert "[warn sign_income]" in ask("screen", folder)
    assert sorted(folder.rglob("*")) == before


def test_methods_lists_every_method_with_its_source() -> None:
    rows = reply("methods")
    assert all(row["name"] and row["equation"] and row["citation"] for row in rows)
    names = {kind: {row["name"] for row in rows if row["kind"] == kind} for kind in TITLES}
    assert names["formula"] == set(FORMULAS)
    assert names["efficiency"] == {"cohort_geometric", *EFFICIENCY_FORMS}
    assert names["age_price"] == set(AGE_PRICE_FORMS)
    assert names["distribution"] == set(RETIREMENT)
    assert names["retirement"] == set(load_retirement())
    assert names["choice"] == {parameter.name for parameter in load_parameters().all()}
    by_name = {(row["kind"], row["name"]): row for row in rows}
    assert by_name["formula", "net_stock_of_vintages"]["inputs"]
    assert by_name["efficiency", "hyperbolic"]["equation"].startswith("(L - a) / (L - b a) for a < L")
    assert set(by_name["distribution", "weibull"]["parameters"]) == {"shape", "high"}
    assert "its cuts leave out 5.00%" in by_name["retirement", "truncated_normal"]["equation"]
    assert by_name["choice", "capital.timing"]["parameters"] == {
        "may be": "choice of start, mid, end",
        "is": "mid",
    }
    text = ask("methods")
    for row in rows:
        assert row["name"] in text
        assert row["citation"] in text


def test_a_new_assembly_assembles_as_it_stands(tmp_path: Path, keelbook: Run) -> None:
    folder = tmp_path / "first"
    written = reply("new", folder)
    assert str(folder / "assembly.toml") in written
    done = keelbook("assemble", folder, "--strict")
    assert done.returncode == 0, done.stderr
    assert "0 stop, 0 warn" in done.stdout
    assert len(done.stdout.splitlines()) <= 25
    assert "Growth " in done.stdout
    assert done.stderr.startswith("reading ")
    found = reply("trace", folder, "net_stock", "--year", 2015, "--depth", 2)
    assert found["stored"] == pytest.approx(found["recomputed"], rel=1e-12)


def test_new_says_in_words_what_it_wrote(tmp_path: Path) -> None:
    text = ask("new", tmp_path / "second")
    assert f"next: keelbook assemble {tmp_path / 'second'}" in text


def test_version(keelbook: Run) -> None:
    assert keelbook("--version").stdout.startswith("keelbook ")


@pytest.mark.parametrize("place", ["build", "build/panel.duckdb", "."])
def test_a_place_may_be_an_assembly_a_build_folder_or_a_file(place: str, demo_build: Path) -> None:
    found = reply(
        "trace", demo_build / place, "labour_share", "--area", "XW", "--industry", "_T", "--year", 2015
    )
    assert found["formula"] == "labour_share"


def test_errors_are_json_too_when_asked_for(tmp_path: Path) -> None:
    result = CliRunner().invoke(main, ["decompose", str(tmp_path), "--json"])
    assert result.exit_code == 2
    answer = json.loads(result.stdout)
    assert answer["error"] == "DeclarationError"
    assert answer["problems"][0]["remedy"].startswith("run: keelbook assemble")


def test_output_off_a_terminal_has_no_colour_and_no_bar(keelbook: Run, demo_build: Path) -> None:
    done = keelbook("decompose", demo_build)
    assert done.returncode == 0
    assert "\x1b" not in done.stdout + done.stderr
    assert "\r" not in done.stdout + done.stderr
