"""Which files a path, a glob, a directory or a list stands for."""

from __future__ import annotations

from pathlib import Path

import pytest

from drumlin.errors import SourceError
from drumlin.tables.paths import find_files, is_path, natural_order


def make(folder: Path, *names: str) -> None:
    for name in names:
        path = folder / name
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_bytes(b"x")


def shown(found: list) -> list[str]:
    return [Path(entry.shown).name for entry in found]


def test_digits_sort_as_numbers(tmp_path: Path) -> None:
    make(tmp_path, "s10.parquet", "s9.parquet", "s100.parquet", "s09b.parquet")
    assert shown(find_files(tmp_path)) == ["s9.parquet", "s09b.parquet", "s10.parquet", "s100.parquet"]
    listed = [tmp_path / name for name in ("s100.parquet", "s9.parquet", "s10.parquet")]
    assert shown(find_files(listed)) == ["s9.parquet", "s10.parquet", "s100.parquet"]


def test_natural_order_compares_words_with_numbers() -> None:
    assert sorted(["a", "1", "a1", "", "1a"], key=natural_order) == ["", "1", "1a", "a", "a1"]


def test_a_directory_is_searched_below_and_hidden_files_are_left(tmp_path: Path) -> None:
    make(tmp_path, "a.parquet", "deep/er/b.pq", "_SUCCESS", ".c.parquet", "_temp/d.parquet", "notes.txt")
    assert shown(find_files(str(tmp_path))) == ["a.parquet", "b.pq"]


def test_a_glob_may_go_deep_and_match_directories(tmp_path: Path) -> None:
    make(tmp_path, "day=1/x.parquet", "day=2/x.parquet", "day=2/_x.parquet", "other/x.parquet")
    assert len(find_files(str(tmp_path / "**" / "*.parquet"))) == 3
    by_folder = find_files(str(tmp_path / "day=*"))
    assert [entry.partition for entry in by_folder] == [(("day", "1"),), (("day", "2"),)]


def test_folders_above_the_named_place_make_no_columns(tmp_path: Path) -> None:
    make(tmp_path, "year=2026/day=1/x.parquet")
    assert find_files(tmp_path / "year=2026" / "day=1")[0].partition == ()
    assert find_files(tmp_path / "year=2026" / "day=1" / "x.parquet")[0].partition == ()
    assert find_files(tmp_path / "year=2026")[0].partition == (("day", "1"),)


def test_coded_folder_names_are_decoded(tmp_path: Path) -> None:
    make(tmp_path, "kind=long%20tube/x.parquet", "kind=__HIVE_DEFAULT_PARTITION__/x.parquet")
    assert [entry.partition for entry in find_files(tmp_path)] == [(("kind", None),), (("kind", "long tube"),)]


def test_a_file_whose_name_looks_like_a_glob_is_taken_as_it_is(tmp_path: Path) -> None:
    make(tmp_path, "a[1].parquet", "a1.parquet")
    assert shown(find_files(str(tmp_path / "a[1].parquet"))) == ["a[1].parquet"]


def test_uris_work_with_globs(tmp_path: Path) -> None:
    make(tmp_path, "p/a1.parquet", "p/a2.parquet", "p/q/a3.parquet")
    assert shown(find_files(f"file://{tmp_path}/p")) == ["a1.parquet", "a2.parquet", "a3.parquet"]
    assert shown(find_files(f"file://{tmp_path}/p/a*.parquet")) == ["a1.parquet", "a2.parquet"]
    assert shown(find_files(f"file://{tmp_path}/p/**/a[!1].parquet")) == ["a2.parquet", "a3.parquet"]


@pytest.mark.parametrize(
    ("name", "text"),
    [
        ("scan.parquet", "does not exist. Did you mean 'scans.parquet'?"),
        ("*.pq", "No Parquet file matches"),
        ("empty", "holds no Parquet files"),
        ("", "no Parquet files"),
    ],
)
def test_nothing_found_is_named(tmp_path: Path, name: str, text: str) -> None:
    (tmp_path / "data" / "empty").mkdir(parents=True)
    make(tmp_path / "data", "scans.parquet.txt")
    if name == "scan.parquet":
        make(tmp_path / "data", "scans.parquet")
    with pytest.raises(SourceError) as caught:
        find_files(str(tmp_path / "data" / name))
    assert text in str(caught.value) and str(tmp_path) in str(caught.value)


def test_an_empty_path_and_a_repeated_file_are_refused(tmp_path: Path) -> None:
    make(tmp_path, "a.parquet")
    with pytest.raises(SourceError, match="path is empty"):
        find_files("")
    with pytest.raises(SourceError, match="named twice"):
        find_files([tmp_path / "a.parquet", tmp_path])


def test_only_paths_are_paths() -> None:
    assert is_path("a") and is_path(Path("a")) and is_path(["a", Path("b")])
    assert not is_path([]) and not is_path([1.0]) and not is_path(b"a")
