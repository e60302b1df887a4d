from pathlib import Path
from typing import Literal

import pytest
from pydantic import Field, model_validator

from keelbook.contracts.loader import Declared, fault, load_csv_rows, load_toml
from keelbook.errors import DeclarationError, Problem


class Part(Declared):
    size: int = Field(ge=1)
    kind: Literal["round", "square"] = "round"


class Whole(Declared):
    name: str
    parts: tuple[Part, ...] = ()
    by_name: dict[str, Part] = Field(default_factory=dict)
    low: float = 0
    high: float = 1

    @model_validator(mode="after")
    def _ordered(self) -> "Whole":
        if self.low > self.high:
            raise fault(
                "low is above high", at=("low",), found=f"{self.low:g}", expected=f"up to {self.high:g}"
            )
        return self


class Row(Declared):
    code: str
    rate: float | None = None
    note: str = ""
    line: int


def refused(tmp_path: Path, text: str) -> list[Problem]:
    path = tmp_path / "whole.toml"
    path.write_text(text, encoding="utf-8")
    with pytest.raises(DeclarationError) as caught:
        load_toml(path, Whole)
    assert all(problem.file == str(path) for problem in caught.value.problems)
    return list(caught.value.problems)


def refused_rows(tmp_path: Path, text: str) -> list[Problem]:
    path = tmp_path / "rows.csv"
    path.write_text(text, encoding="utf-8")
    with pytest.raises(DeclarationError) as caught:
        load_csv_rows(path, Row, key=("code",))
    assert all(problem.file == str(path) for problem in caught.value.problems)
    return list(caught.value.problems)


def test_loads_lists_as_tuples_and_whole_numbers_as_floats(tmp_path: Path) -> None:
    path = tmp_path / "whole.toml"
    path.write_text('name = "x"\nhigh = 2\nparts = [{ size = 1 }]\n', encoding="utf-8")
    whole = load_toml(path, Whole)
    assert whole.parts == (Part(size=1),)
    assert isinstance(whole.high, float)


def test_byte_order_mark_is_accepted(tmp_path: Path) -> None:
    path = tmp_path / "whole.toml"
    path.write_bytes(b'\xef\xbb\xbfname = "x"\n')
    assert load_toml(path, Whole).name == "x"


def test_unknown_key_names_line_valid_names_and_the_nearest(tmp_path: Path) -> None:
    (problem,) = refused(tmp_path, 'name = "x"\n\n[[parts]]\nsize = 1\nknd = "round"\n')
    assert problem.place == "line 5"
    assert problem.what == "unknown key 'knd'"
    assert problem.expected == "one of: size, kind"
    assert problem.remedy == "did you mean 'kind'?"


def test_unknown_key_below_a_free_name(tmp_path: Path) -> None:
    (problem,) = refused(tmp_path, 'name = "x"\n[by_name.a]\nsize = 1\nsiz = 1\n')
    assert (problem.place, problem.remedy) == ("line 4", "did you mean 'size'?")


def test_unknown_value_names_the_nearest(tmp_path: Path) -> None:
    (problem,) = refused(
        tmp_path, 'name = "x"\nparts = [\n  { size = 1 },\n  { size = 1, kind = "sqare" },\n]\n'
    )
    assert problem.place == "line 4"
    assert problem.expected == "one of: round, square"
    assert problem.remedy == "did you mean 'square'?"


def test_missing_key_is_placed_at_its_table(tmp_path: Path) -> None:
    (problem,) = refused(tmp_path, 'name = "x"\n[by_name.a]\nkind = "round"\n')
    assert (problem.what, problem.place) == ("'by_name.a.size' is missing", "line 2")


def test_a_text_is_not_a_number(tmp_path: Path) -> None:
    (problem,) = refused(tmp_path, 'name = "x"\nlow = "0"\n')
    assert (problem.place, problem.found, problem.expected) == ("line 2", "'0'", "a valid number")


@pytest.mark.parametrize("number", ["nan", "inf"])
def test_a_number_is_finite(tmp_path: Path, number: str) -> None:
    (problem,) = refused(tmp_path, f'name = "x"\nlow = {number}\n')
    assert (problem.place, problem.expected) == ("line 2", "a finite number")


def test_everything_wrong_is_told_at_once_in_line_order(tmp_path: Path) -> None:
    problems = refused(
        tmp_path, 'nam = "x"\nlow = 3\nhigh = 2\n[[parts]]\nsize = 0\n[by_name.a]\nkind = "oval"\nsize = 1\n'
    )
    assert [problem.place for problem in problems] == ["line 1", "line 1", "line 5", "line 7"]


def test_an_unknown_key_does_not_hide_a_contradiction(tmp_path: Path) -> None:
    problems = refused(tmp_path, 'name = "x"\nlo = 1\nlow = 3\nhigh = 2\n')
    assert [(problem.place, problem.what) for problem in problems] == [
        ("line 2", "unknown key 'lo'"),
        ("line 3", "low is above high"),
    ]


@pytest.mark.parametrize(
    ("text", "line"),
    [
        ('name = "x"\nlow = \n', "line 2"),
        ('name = "x"\n[parts\n', "line 2"),
        ('name = "x"\nname = "y"\n', "line 2"),
    ],
)
def test_not_toml_names_the_line(tmp_path: Path, text: str, line: str) -> None:
    (problem,) = refused(tmp_path, text)
    assert (problem.place, problem.expected) == (line, "valid TOML")


def test_not_utf8_names_line_and_byte(tmp_path: Path) -> None:
    path = tmp_path / "whole.toml"
    path.write_bytes(b'# fine\nname = "\xe4"\n')
    with pytest.raises(DeclarationError) as caught:
        load_toml(path, Whole)
    (problem,) = caught.value.problems
    assert (problem.place, problem.found) == ("line 2", "byte 0xe4")


def test_file_that_is_not_there(tmp_path: Path) -> None:
    with pytest.raises(DeclarationError, match="file not found"):
        load_toml(tmp_path / "none.toml", Whole)


def test_rows_know_their_line_across_quoted_newlines_and_blank_lines(tmp_path: Path) -> None:
    path = tmp_path / "rows.csv"
    path.write_text('code,rate,note\na,0.5,"two\nlines"\n\nb,,\n', encoding="utf-8")
    rows = load_csv_rows(path, Row, key=("code",))
    assert [(row.code, row.rate, row.note, row.line) for row in rows] == [
        ("a", 0.5, "two\nlines", 2),
        ("b", None, "", 5),
    ]


def test_an_optional_column_may_be_absent(tmp_path: Path) -> None:
    path = tmp_path / "rows.csv"
    path.write_text("code\na\n", encoding="utf-8")
    assert load_csv_rows(path, Row)[0].rate is None


def test_duplicate_key_names_both_lines(tmp_path: Path) -> None:
    (problem,) = refused_rows(tmp_path, "code,rate\na,1\nb,1\na,2\n")
    assert (problem.place, problem.found) == ("line 4", "code a")
    assert "line 2" in problem.expected


def test_columns_unknown_missing_and_twice(tmp_path: Path) -> None:
    problems = refused_rows(tmp_path, "rat,note,note\n1,,\n")
    assert [problem.what for problem in problems] == [
        "unknown column 'rat'",
        "column 'note' twice",
        "column 'code' is missing",
    ]
    assert problems[0].remedy == "did you mean 'rate'?"
    assert {problem.place for problem in problems} == {"line 1"}


def test_bad_cells_and_row_lengths_all_at_once(tmp_path: Path) -> None:
    problems = refused_rows(tmp_path, "code,rate\na,x\nb,1,2\n,1\n")
    assert [problem.place for problem in problems] == ["line 2", "line 3", "line 4"]
    assert problems[2].what == "'code' is missing"


def test_an_open_quotation_mark(tmp_path: Path) -> None:
    (problem,) = refused_rows(tmp_path, 'code,note\na,"open\n')
    assert "not readable as CSV" in problem.what


def test_an_empty_rule_file(tmp_path: Path) -> None:
    (problem,) = refused_rows(tmp_path, "")
    assert problem.what == "column 'code' is missing"
