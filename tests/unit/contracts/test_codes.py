from pathlib import Path

import pytest

from keelbook.contracts.codes import DIMS, SHIPPED, load_code_lists
from keelbook.errors import DeclarationError


def assembly_with(tmp_path: Path, name: str, text: str) -> Path:
    codes = tmp_path / "rules" / "codes"
    codes.mkdir(parents=True)
    (codes / name).write_text(text, encoding="utf-8")
    return tmp_path


def test_every_list_is_there_with_total_and_not_applicable_first() -> None:
    lists = load_code_lists()
    assert set(lists.rows) == {*SHIPPED, "area"}
    for dim in ("industry", "asset", "worker_group"):
        assert lists.codes(dim)[:2] == ("_T", "_Z")


@pytest.mark.parametrize(
    ("name", "count"), [("obs_status", 20), ("conf_status", 11), ("unit_mult", 31), ("freq", 34)]
)
def test_sdmx_lists_are_complete(name: str, count: int) -> None:
    assert len(load_code_lists().codes(name)) == count


def test_normal_and_free_are_the_first_codes() -> None:
    lists = load_code_lists()
    assert (lists.position("obs_status", "A"), lists.position("conf_status", "F")) == (0, 0)


def test_names_and_parents() -> None:
    lists = load_code_lists()
    assert lists.name("industry", "C") == "Manufacturing"
    assert lists.parent("asset", "N11321") == "N1132"
    assert lists.partition("worker_group", "SAL") == lists.partition("worker_group", "SELF") == "status"
    assert lists.has("asset", "N211")
    assert not lists.has("asset", "N999")


@pytest.mark.parametrize("name", ["sector", "industry", "asset", "worker_group"])
def test_parents_lead_to_the_top(name: str) -> None:
    lists = load_code_lists()
    for code in lists.codes(name):
        seen = [code]
        while (parent := lists.parent(name, seen[-1])) is not None:
            assert parent not in seen
            seen.append(parent)


def test_areas_are_those_declared() -> None:
    lists = load_code_lists(areas=["HV", "HW"])
    assert lists.codes("area") == ("HV", "HW")
    assert "area" in DIMS


def test_an_assembly_adds_codes_after_the_shipped(tmp_path: Path) -> None:
    text = "code,name,parent,citation,status\nC10,Food products,C,national classification,seen\n"
    lists = load_code_lists(assembly_with(tmp_path, "industry.csv", text))
    assert lists.codes("industry")[-1] == "C10"
    assert lists.parent("industry", "C10") == "C"
    assert lists.codes("industry")[:-1] == load_code_lists().codes("industry")


def test_an_assembly_names_its_areas(tmp_path: Path) -> None:
    text = "code,name,citation,status\nHV,Havel Islands (invented),office,seen\n"
    lists = load_code_lists(assembly_with(tmp_path, "area.csv", text), ["HV", "HW"])
    assert lists.codes("area") == ("HV", "HW")
    assert lists.name("area", "HV") == "Havel Islands (invented)"


def test_faults_of_an_added_list(tmp_path: Path) -> None:
    text = "code,name,parent,citation,status\nC,Ours,,x,seen\nC11,Drinks,CC,x,seen\nC12,Tobacco,C,x,sen\n"
    folder = assembly_with(tmp_path, "industry.csv", text)
    (folder / "rules" / "codes" / "industri.csv").write_text(text, encoding="utf-8")
    with pytest.raises(DeclarationError) as caught:
        load_code_lists(folder)
    bad_status, stray = sorted(caught.value.problems, key=lambda problem: problem.place, reverse=True)
    assert (bad_status.place, bad_status.remedy) == ("line 4", "did you mean 'seen'?")
    assert stray.remedy == "did you mean 'industry.csv'?"
    (folder / "rules" / "codes" / "industri.csv").unlink()
    (folder / "rules" / "codes" / "industry.csv").write_text(
        text.replace(",sen\n", ",seen\n"), encoding="utf-8"
    )
    with pytest.raises(DeclarationError) as caught:
        load_code_lists(folder)
    assert [(problem.place, problem.what) for problem in caught.value.problems] == [
        ("line 2", "code 'C' is already in the shipped list"),
        ("line 3", "unknown parent 'CC'"),
    ]
