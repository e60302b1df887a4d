"""The report page: its tables hold the figures of the panel, it stands alone, and nothing from a source steers it."""

import re
import shutil
import subprocess
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass, field
from html.parser import HTMLParser
from pathlib import Path

import duckdb
import pytest

from keelbook.audit.reading import Build
from keelbook.outputs.decomposition import averages
from keelbook.outputs.report import FINDINGS, write_report

HOSTILE = "</title><script>alert(1)</script><img src=x onerror=alert(2)>\"'&\x1b[2J"


@dataclass
class Page(HTMLParser):
    """The tags of a page, its text, and its tables: caption -> row label -> column -> (figure, as written)."""

    tags: list[str] = field(default_factory=list)
    text: list[str] = field(default_factory=list)
    tables: dict[str, dict[str, dict[str, tuple[float, str]]]] = field(default_factory=dict)

    def __post_init__(self) -> None:
        super().__init__()
        self._inside: list[str] = []
        self._columns: list[str] = []
        self._caption = self._row = ""
        self._cell = -1
        self._figure: float | None = None

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append(tag)
        held = dict(attrs)
        if tag == "table":
            self._columns, self._caption = [], ""
        elif tag == "th" and held.get("scope") == "col":
            self._columns.append("")
        elif tag == "tr":
            self._cell = 0
        elif tag == "td":
            self._cell += 1
        elif tag == "data":
            self._figure = float(held["value"] or "")
        if tag not in ("meta", "img", "br"):
            self._inside.append(tag)
        if tag == "th":
            self._scope = held.get("scope")

    def handle_endtag(self, tag: str) -> None:
        while self._inside and self._inside.pop() != tag:
            pass

    def handle_data(self, data: str) -> None:
        where = self._inside[-1] if self._inside else ""
        if where not in ("style",):
            self.text.append(data)
        if where == "caption":
            self._caption = data
            self.tables[data] = {}
        elif where == "th" and self._scope == "col":
            self._columns[-1] += data
        elif where == "th" and self._caption:
            self._row = data
            self.tables[self._caption][data] = {}
        elif where == "data" and self._figure is not None:
            self.tables[self._caption][self._row][self._columns[self._cell]] = (self._figure, data)


def read(path: Path) -> Page:
    page = Page()
    page.feed(path.read_text(encoding="utf-8"))
    return page


def table(page: Page, *words: str) -> dict[str, dict[str, tuple[float, str]]]:
    """Return the one table whose caption has all the words."""
    (found,) = [caption for caption in page.tables if all(word in caption for word in words)]
    return page.tables[found]


def columns(
    rows: Mapping[str, Mapping[str, tuple[float, str]]],
) -> dict[str, dict[str, float]]:
    """Return column -> row label -> figure."""
    out: dict[str, dict[str, float]] = {}
    for label, cells in rows.items():
        for column, (figure, _) in cells.items():
            out.setdefault(column, {})[label] = figure
    return out


@pytest.fixture(scope="module")
def demo_page(demo_build: Path, tmp_path_factory: pytest.TempPathFactory) -> Page:
    out = tmp_path_factory.mktemp("report") / "report.html"
    write_report(demo_build, out)
    return read(out)


@pytest.fixture
def spoilt(demo_build: Path, tmp_path: Path) -> Iterator[tuple[Path, duckdb.DuckDBPyConnection]]:
    """Yield a copy of the panel file alone, and a connection that may change it."""
    path = tmp_path / "panel.duckdb"
    shutil.copy(demo_build / "build" / "panel.duckdb", path)
    with duckdb.connect(str(path)) as con:
        yield path, con


def published(panel: duckdb.DuckDBPyConnection, condition: str) -> dict[tuple[str, str], float]:
    """Return (asset or method, period) -> figure of the panel."""
    area = panel.execute("select min(area) from series").fetchall()[0][0]
    rows = panel.execute(
        "select case when asset = '_Z' then method else asset end, time_period, value from panel "
        f"where area = ? and sector = 'S1' and value is not null and {condition}",
        [area],
    ).fetchall()
    assert rows
    return {(name, period): value for name, period, value in rows}


@pytest.mark.parametrize(("industry", "words"), [("_T", "Total, all industries"), ("C", "C Manufacturing")])
def test_the_stock_table_holds_the_panel(
    demo_page: Page, panel: duckdb.DuckDBPyConnection, industry: str, words: str
) -> None:
    shown = {
        ("_T" if name == "Total" else name.split()[0], year): figure
        for name, held in columns(table(demo_page, "Net capital stock", words)).items()
        for year, figure in held.items()
    }
    condition = f"measure = 'net_stock' and price_basis = 'constant' and chosen and industry = '{industry}'"
    assert shown == published(panel, condition)


def test_what_is_written_is_the_figure_rounded(demo_page: Page) -> None:
    rows = table(demo_page, "Net capital stock", "Total, all industries")
    for cells in rows.values():
        for figure, written in cells.values():
            assert abs(float(written.replace(",", "")) - figure) <= 0.5
    for cells in table(demo_page, "Labour share", "Total, all industries").values():
        for figure, written in cells.values():
            assert abs(float(written) - 100 * figure) <= 0.005 + 1e-12


@pytest.mark.parametrize(("industry", "words"), [("_T", "Total, all industries"), ("C", "C Manufacturing")])
def test_the_share_table_holds_every_method_and_marks_the_one_used(
    demo_page: Page, panel: duckdb.DuckDBPyConnection, industry: str, words: str
) -> None:
    found = columns(table(demo_page, "Labour share", words))
    shown = {
        (name.removesuffix(" (used)").replace(" ", "_"), year): figure
        for name, held in found.items()
        for year, figure in held.items()
    }
    condition = f"measure = 'labour_share' and industry = '{industry}'"
    assert shown == published(panel, condition)
    used = {name.removesuffix(" (used)").replace(" ", "_") for name in found if name.endswith("(used)")}
    assert used == {method for method, _ in published(panel, f"{condition} and chosen")}


@pytest.mark.parametrize(
    ("column", "measure"),
    [
        ("Capital", "capital_contribution"),
        ("Labour", "labour_contribution"),
        ("Residual", "residual_growth"),
        ("Output", "output_growth"),
    ],
)
def test_the_growth_table_holds_the_panel(
    demo_page: Page, panel: duckdb.DuckDBPyConnection, column: str, measure: str
) -> None:
    shown = columns(table(demo_page, "Growth and its sources", "C Manufacturing"))[column]
    stored = published(panel, f"measure = '{measure}' and chosen and industry = 'C'")
    assert shown == {year: value for (_, year), value in stored.items()}


def test_the_means_by_industry_are_those_that_decompose_prints(demo_page: Page, demo_build: Path) -> None:
    with Build(demo_build) as build:
        rows = [row for row in averages(build) if (row["area"], row["sector"]) == (build.facts["area"], "S1")]
    shown = table(demo_page, "Mean growth by industry")
    assert len(shown) == len(rows)
    by_code = {"_T" if name.startswith("Total") else name.split()[0]: cells for name, cells in shown.items()}
    for row in rows:
        cells = by_code[row["industry"]]
        assert cells["Output"][0] == pytest.approx(row["output_growth"], rel=1e-12)
        assert cells["Capital"][0] == pytest.approx(row["capital_contribution"], rel=1e-12)
        assert cells["Residual"][0] == pytest.approx(row["residual_growth"], rel=1e-12)


def test_the_level_table_holds_the_panel(demo_page: Page, panel: duckdb.DuckDBPyConnection) -> None:
    shown = columns(table(demo_page, "Level of the residual"))["Total, all industries"]
    stored = published(panel, "measure = 'residual_level' and chosen and industry = '_T'")
    assert shown == {year: value for (_, year), value in stored.items()}


def test_the_basis_table_holds_the_panel_and_sums_to_one(
    demo_page: Page, panel: duckdb.DuckDBPyConnection
) -> None:
    rows = table(demo_page, "What the stock rests on", "Total, all assets")
    stored = panel.execute(
        "select time_period, observed_part, imputed_part, assumed_part from panel where measure = 'net_stock' "
        "and price_basis = 'constant' and chosen and industry = '_T' and asset = '_T' and sector = 'S1' "
        "and area = (select min(area) from series)"
    ).fetchall()
    assert {year: [figure for figure, _ in cells.values()] for year, cells in rows.items()} == {
        year: parts for year, *parts in stored
    }
    for cells in rows.values():
        assert sum(figure for figure, _ in cells.values()) == pytest.approx(1, abs=1e-6)


def test_the_page_says_what_it_is_how_it_was_made_and_what_to_mind(
    demo_page: Page, panel: duckdb.DuckDBPyConnection
) -> None:
    text = " ".join(demo_page.text)
    title, build = panel.execute("select title, build_id from build").fetchall()[0]
    assert title in text
    assert build in text
    for name, citation in panel.execute(
        "select name, citation from parameter where starts_with(name, 'capital.')"
    ).fetchall():
        assert name in text
        assert citation in text
    assert "keelbook/rules/capital.toml, line" in text
    for caution in ("declared methods", "Confidentiality law", "sign-off"):
        assert caution in text


def test_the_page_stands_alone(demo_build: Path, tmp_path: Path) -> None:
    out = tmp_path / "report.html"
    write_report(demo_build, out)
    text = out.read_text(encoding="utf-8")
    assert not re.search(r"https?://|\bsrc=|url\(|@import|<script|<link|<iframe|javascript:|\bon\w+=", text)
    assert "default-src 'none'" in text
    ids = re.findall(r'\bid="([^"]+)"', text)
    assert len(ids) == len(set(ids))
    for named in re.findall(r'aria-labelledby="([^"]+)"', text):
        assert set(named.split()) <= set(ids)
    assert text.count("<svg ") == text.count('role="img"') == text.count("<desc ")


def test_the_same_build_gives_the_same_page(demo_build: Path, tmp_path: Path) -> None:
    for name in ("a.html", "b.html"):
        write_report(demo_build, tmp_path / name)
    assert (tmp_path / "a.html").read_bytes() == (tmp_path / "b.html").read_bytes()
    assert sorted(path.name for path in tmp_path.iterdir()) == ["a.html", "b.html"]


def test_text_from_sources_is_text(
    spoilt: tuple[Path, duckdb.DuckDBPyConnection], demo_page: Page, tmp_path: Path
) -> None:
    path, con = spoilt
    con.execute("update build set title = ?", [HOSTILE])
    con.execute("update parameter set citation = ?, setting = ?", [HOSTILE, HOSTILE])
    con.execute("update code set name = ? where list in ('industry', 'asset', 'area', 'sector')", [HOSTILE])
    con.execute("update formula set equation = ?", [HOSTILE])
    _add_finding(con, "warn", HOSTILE)
    con.close()
    out = tmp_path / "report.html"
    write_report(path, out)
    page = read(out)
    assert not {"script", "img"} & set(page.tags)
    assert set(page.tags) == set(demo_page.tags)
    assert "\x1b" not in out.read_text(encoding="utf-8")
    assert any("<script>alert(1)</script>" in text for text in page.text)


def _add_finding(con: duckdb.DuckDBPyConnection, severity: str, message: str, **more: str) -> None:
    (number,) = con.execute("select coalesce(max(finding_id), -1) + 1 from finding").fetchall()[0]
    columns = con.execute(
        "select column_name, data_type from information_schema.columns where table_name = 'finding'"
    ).fetchall()
    row = {
        **{name: "" if kind == "VARCHAR" else None for name, kind in columns},
        **{"finding_id": number, "rule": "sign", "severity": severity, "message": message, "level": 1},
        **{"file": "sources/a.csv", "row": 7, "column": 3, "measure": "investment", "remedy": "ask"},
        **more,
    }
    names = ", ".join(f'"{name}"' for name in row)
    con.execute(f"insert into finding ({names}) values ({', '.join('?' * len(row))})", list(row.values()))


def test_findings_are_counted_and_the_gravest_come_first(
    spoilt: tuple[Path, duckdb.DuckDBPyConnection], tmp_path: Path
) -> None:
    path, con = spoilt
    con.execute("delete from finding")
    for number in range(FINDINGS):
        _add_finding(con, "note", f"a small thing, {number}")
    accepted = {"accepted_by": "A. Person", "accepted_on": "2024-03-01", "accepted_reason": "it is so"}
    _add_finding(con, "warn", "a greater thing", **accepted)
    con.close()
    out = tmp_path / "report.html"
    write_report(path, out)
    text = " ".join(" ".join(read(out).text).split())
    assert f"0 stop, 1 warn, {FINDINGS} note in the whole build" in text
    assert f"The first {FINDINGS} are shown, gravest first; 1 more" in text
    assert text.index("a greater thing") < text.index("a small thing, 0")
    assert f"a small thing, {FINDINGS - 2}" in text
    assert f"a small thing, {FINDINGS - 1}" not in text
    assert "sources/a.csv, line 7, column 3" in text
    assert "accepted by A. Person on 2024-03-01: it is so" in text


def test_a_withheld_figure_is_a_gap_and_its_stack_is_not_drawn(
    spoilt: tuple[Path, duckdb.DuckDBPyConnection], tmp_path: Path
) -> None:
    path, con = spoilt
    (number,) = con.execute(
        "select series_id from series where measure = 'net_stock' and price_basis = 'constant' and chosen "
        "and industry = '_T' and asset = 'N112' and sector = 'S1' order by area limit 1"
    ).fetchall()[0]
    con.execute(
        "update figure set value = null, obs_status = (select position from code where list = 'obs_status' "
        "and code = 'Q') where series_id = ? and period = 2000",
        [number],
    )
    con.close()
    out = tmp_path / "report.html"
    write_report(path, out)
    page = read(out)
    held = columns(table(page, "Net capital stock", "Total, all industries"))
    (name,) = [name for name in held if name.startswith("N112")]
    assert "2000" not in held[name]
    assert "2001" in held[name]
    text = " ".join(page.text)
    assert "lines, not stacked" in text
    assert "Q missing value; suppressed" in text


def test_the_evidence_file_is_not_opened(demo_build: Path, tmp_path: Path) -> None:
    shutil.copy(demo_build / "build" / "panel.duckdb", tmp_path / "panel.duckdb")
    (tmp_path / "evidence.duckdb").write_text("not a database", encoding="utf-8")
    out = tmp_path / "report.html"
    write_report(tmp_path, out)
    assert out.stat().st_size > 10_000


def test_areas_are_sections_and_the_others_are_named(
    spoilt: tuple[Path, duckdb.DuckDBPyConnection], tmp_path: Path
) -> None:
    path, con = spoilt
    area = con.execute("select min(area) from series").fetchall()[0][0]
    (last,) = con.execute("select max(position) from code where list = 'area'").fetchall()[0]
    con.execute("insert into code values ('area', ?, 'ZZ', 'Another')", [last + 1])
    con.execute(
        "create temp table more as select * replace ('ZZ' as area) from series "
        "where area = ? and measure = 'net_stock' and price_basis = 'constant'",
        [area],
    )
    con.execute("insert into figure select * replace (series_id + 100000 as series_id) from figure join "
                "(select series_id from more) using (series_id)")  # fmt: skip
    con.execute("insert into series select * replace (series_id + 100000 as series_id) from more")
    con.close()
    first, both = tmp_path / "first.html", tmp_path / "both.html"
    assert list(write_report(path, first).areas) == [area]
    assert "ZZ" in " ".join(read(first).text)
    assert list(write_report(path, both, ["ZZ", area]).areas) == ["ZZ", area]
    text = " ".join(" ".join(read(both).text).split())
    assert "ZZ Another" in text
    assert "Not computed in this build." in text


def test_the_command_writes_the_page_and_says_so(
    keelbook: Callable[..., "subprocess.CompletedProcess[str]"], demo_build: Path, tmp_path: Path
) -> None:
    out = tmp_path / "report.html"
    done = keelbook("report", demo_build, "--out", out)
    assert (done.returncode, done.stderr) == (0, "")
    assert done.stdout.startswith(f"wrote {out}")
    assert out.read_text(encoding="utf-8").startswith("<!doctype html>")


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (["--area", "QQ"], "the panel has no area 'QQ'"),
        (["--sector", "S99"], "the panel has no sector 'S99'"),
        (["--out", "panel.duckdb"], "the report cannot be written there"),
        (["--out", "absent/report.html"], "the report cannot be written there"),
    ],
)
def test_what_cannot_be_shown_or_written_is_refused(
    keelbook: Callable[..., "subprocess.CompletedProcess[str]"],
    demo_build: Path,
    tmp_path: Path,
    arguments: list[str],
    words: str,
) -> None:
    given = [tmp_path / a if a.endswith((".html", ".duckdb")) else a for a in arguments]
    out = [] if "--out" in arguments else ["--out", tmp_path / "report.html"]
    done = keelbook("report", demo_build, *out, *given)
    assert done.returncode == 2
    assert words in done.stderr
    assert list(tmp_path.iterdir()) == []
