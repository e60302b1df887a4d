from pathlib import Path

import pytest

from keelbook.contracts.retirement import load_retirement
from keelbook.errors import DeclarationError
from keelbook.methods.retirement import RETIREMENT

HEADER = "name,distribution,half_width,sd,low,high,shape,exponent,citation,status"


def office(tmp_path: Path, *rows: str) -> Path:
    (tmp_path / "rules").mkdir()
    text = "\n".join([HEADER, *(f"{row},office,seen" for row in rows), ""])
    (tmp_path / "rules" / "retirement.csv").write_text(text, encoding="utf-8")
    return tmp_path


def test_every_distribution_has_a_shipped_pattern() -> None:
    assert {pattern.distribution for pattern in load_retirement().values()} == set(RETIREMENT)


def test_an_office_changes_and_adds_patterns(tmp_path: Path) -> None:
    patterns = load_retirement(office(tmp_path, "gamma,gamma,,,,3,4,", "ours,winfrey,,,,,,5"))
    assert dict(patterns["gamma"].shape) == {"shape": 4, "high": 3}
    assert (patterns["ours"].file, patterns["ours"].line) == ("rules/retirement.csv", 3)
    assert patterns["winfrey_s3"] == load_retirement()["winfrey_s3"]
    assert dict(load_retirement()["gamma"].shape) == {"shape": 9, "high": 3}


@pytest.mark.parametrize(
    ("row", "what", "expected"),
    [
        ("x,weibul,,,,3,1.7,", "unknown distribution 'weibul'", "one of: simultaneous"),
        ("x,weibull,,,,,1.7,", "weibull without 'high'", "high"),
        ("x,linear,0.3,,,,,", "'half_width' contradicts linear", "no parameters"),
        ("x,winfrey_moment,,0.7,,,,", "winfrey_moment cannot have these parameters", "sd is 0.7"),
        ("x,gamma,,,,3,20000,", "gamma cannot have these parameters", "the relative standard deviation"),
        ("x,truncated_normal,,0,0,2,,", "'sd' is not as it must be", "greater than"),
        ("x,truncated_normal,,0.5,1,2,,", "'low' is not as it must be", "less than 1"),
        ("x,truncated_normal,,0.5,0,1,,", "'high' is not as it must be", "greater than 1"),
        ("x,delayed_linear,1.5,,,,,", "'half_width' is not as it must be", "less than or equal to 1"),
        ("x,weibull,,,,3,0.1,", "'shape' is not as it must be", "greater than or equal to 0.5"),
        ("x,winfrey,,,,,,-1", "'exponent' is not as it must be", "greater than or equal to 0"),
        ("linear2,linear,,,,,,", "the same key twice", "one row"),
    ],
)
def test_a_faulty_pattern_is_refused_with_its_line(
    tmp_path: Path, row: str, what: str, expected: str
) -> None:
    folder = office(tmp_path, "linear2,linear,,,,,,", row)
    with pytest.raises(DeclarationError) as caught:
        load_retirement(folder)
    (problem,) = caught.value.problems
    assert problem.place == "line 3"
    assert what in problem.what
    assert problem.expected.startswith(expected)
    assert problem.remedy


def test_all_faults_of_a_file_at_once(tmp_path: Path) -> None:
    folder = office(tmp_path, "a,linear,0.3,,,,,2", "b,winfrei,,,,,,2", "c,gamma,,,,0.5,0.1,")
    with pytest.raises(DeclarationError) as caught:
        load_retirement(folder)
    assert [p.place for p in caught.value.problems] == ["line 2", "line 2", "line 3", "line 4", "line 4"]
    assert caught.value.problems[2].remedy == "did you mean 'winfrey'?"
