"""The published panel as a report reads it: series by measure and key. The evidence file is never opened."""

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from types import TracebackType
from typing import Any

from keelbook.audit.reading import panel_path
from keelbook.store.connect import open_read

FACTS = (
    "build_id", "title", "area", "currency", "reference_year", "first_year", "last_year", "version",
    "source_hash", "rules_hash", "code_hash",
)  # fmt: skip


@dataclass(frozen=True)
class Published:
    """One series of the panel, aligned with `Panel.years`; None where the panel has no figure."""

    industry: str
    asset: str
    measure: str
    method: str
    unit: str
    unit_mult: int
    chosen: bool
    values: Sequence[float | None]
    statuses: Sequence[str]
    observed: Sequence[float | None]
    imputed: Sequence[float | None]
    assumed: Sequence[float | None]


class Panel:
    """A published panel, open for reading."""

    def __init__(self, place: Path) -> None:
        self.path = panel_path(place)
        self._con = open_read(self.path)
        row = self.rows(f"select {', '.join(FACTS)} from build")[0]
        self.facts: dict[str, Any] = dict(zip(FACTS, row, strict=True))
        self.years = range(self.facts["first_year"] - 1, self.facts["last_year"] + 1)
        self.names: dict[str, dict[str, str]] = {}
        for name, code, words in self.rows("select list, code, name from code order by list, position"):
            self.names.setdefault(name, {})[code] = words

    def __enter__(self) -> "Panel":
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self._con.close()

    def rows(self, sql: str, parameters: Sequence[Any] = ()) -> list[tuple[Any, ...]]:
        """Return the rows of a query on the panel file."""
        return self._con.execute(sql, list(parameters)).fetchall()

    def codes(self, column: str) -> list[str]:
        """Return the codes of `area` or `sector` that have series, in the order of their list."""
        used = {code for (code,) in self.rows(f"select distinct {column} from series")}
        return [code for code in self.names[column] if code in used]

    def series(self, area: str, sector: str, measure: str, price_basis: str) -> list[Published]:
        """Return the yearly series of a measure over all workers, in order of industry, asset and method."""
        rows = self.rows(
            """
            select s.series_id, s.industry, s.asset, s.measure, s.method, s.unit, s.unit_mult, s.chosen,
                   f.period, f.value, o.code, 1 - f.imputed_part::double - f.assumed_part::double,
                   f.imputed_part::double, f.assumed_part::double
            from series s join figure f using (series_id)
            join code o on o.list = 'obs_status' and o.position = f.obs_status
            where s.area = ? and s.sector = ? and s.measure = ? and s.price_basis = ?
              and s.worker_group in ('_T', '_Z') and f.period between ? and ?
            order by s.series_id, f.period
            """,
            (area, sector, measure, price_basis, self.years[0], self.years[-1]),
        )
        found: dict[int, tuple[tuple[Any, ...], dict[int, tuple[Any, ...]]]] = {}
        for row in rows:
            found.setdefault(row[0], (row[1:8], {}))[1][row[8]] = row[9:]
        out = []
        for head, figures in found.values():
            none = (None, "", None, None, None)
            columns = list(zip(*(figures.get(year, none) for year in self.years), strict=True))
            out.append(Published(*head, *columns))
        industry, asset = list(self.names["industry"]), list(self.names["asset"])
        return sorted(out, key=lambda s: (industry.index(s.industry), asset.index(s.asset), s.method))
