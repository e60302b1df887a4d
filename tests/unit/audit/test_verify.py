import duckdb
import pytest

from keelbook.audit.verify import verify
from keelbook.errors import NotReproduced
from keelbook.store.generations import LOG, PANEL, write_manifest


def test_a_sound_build_says_how_much_was_checked(hidden_build):
    report = verify(hidden_build, 2)
    assert report["files"] == 3
    assert report["measures"] > 20
    assert report["figures"] >= 2 * report["measures"]


def test_the_same_build_gives_the_same_sample(hidden_build):
    assert verify(hidden_build, 1) == verify(hidden_build, 1)


def test_a_changed_file_is_named(hidden_build, copy_build):
    folder = copy_build(hidden_build)
    with (folder / LOG).open("a", encoding="utf-8") as log:
        log.write("{}\n")
    with pytest.raises(NotReproduced) as caught:
        verify(folder, 1)
    assert [p.file for p in caught.value.problems] == [str(folder / LOG)]


def test_every_figure_that_differs_is_named_even_if_the_hashes_were_rewritten(hidden_build, copy_build):
    folder = copy_build(hidden_build)
    with duckdb.connect(str(folder / PANEL)) as con:
        con.execute(
            "update figure set value = value * 1.001 where series_id in (select series_id from series "
            "where measure in ('net_stock', 'gross_stock') and price_basis = 'year_end')"
        )
    write_manifest(folder)
    with pytest.raises(NotReproduced) as caught:
        verify(folder, 2)
    named = {p.place.split("[")[0] for p in caught.value.problems}
    assert named == {"net_stock", "gross_stock"}
