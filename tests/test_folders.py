"""Result folders: whole or not at all."""

from __future__ import annotations

import json
from pathlib import Path

import pytest
from command_line import contents

from gapfit.errors import InputError
from gapfit.folders import ResultFolder
from gapfit.storage import RUN_FORMAT, write_json, write_text


def make_run(path: Path, **files: str) -> None:
    """One run that writes some texts."""
    place = ResultFolder(path)
    with place.open():
        for name, text in files.items():
            write_text(place.building / name.replace("__", "/"), text)
        (place.fits / "a.npz").write_bytes(b"fit")
        write_json(
            place.building / "run.json", {"format": RUN_FORMAT, "files": [*place.written(), "run.json"]}
        )
        place.finish()


def test_a_run_replaces_the_last_one_and_leaves_nothing_beside_it(tmp_path):
    make_run(tmp_path / "out", gaps="1", posterior__1_3="a")
    make_run(tmp_path / "out", gaps="2", posterior__2_3="b")
    found = contents(tmp_path)
    assert set(found) == {"out", "out/gaps", "out/posterior", "out/posterior/2_3", "out/run.json"}
    assert found["out/gaps"] == b"2"
    assert json.loads(found["out/run.json"])["files"] == ["gaps", "posterior/2_3", "run.json"]


def test_files_of_the_user_are_carried_over(tmp_path):
    out = tmp_path / "out"
    make_run(out, gaps="1", posterior__1_3="a")
    (out / "notes").mkdir()
    (out / "notes/cooldown.txt").write_text("mine")
    (out / "posterior/mine.nc").write_text("mine")
    (out / "link").symlink_to(out / "notes/cooldown.txt")
    make_run(out, gaps="2")
    assert (out / "notes/cooldown.txt").read_text() == (out / "posterior/mine.nc").read_text() == "mine"
    assert (out / "link").is_symlink()
    assert (out / "gaps").read_text() == "2"
    assert not (out / "posterior/1_3").exists()
    make_run(out, gaps="3")
    assert (out / "notes/cooldown.txt").read_text() == "mine"


def test_a_file_of_the_user_gives_way_to_a_new_result_of_that_name(tmp_path):
    make_run(tmp_path / "out", gaps="1")
    (tmp_path / "out/series").write_text("mine")
    make_run(tmp_path / "out", gaps="2", series="new")
    assert (tmp_path / "out/series").read_text() == "new"


def half_way(path: Path, with_fit: bool) -> None:
    place = ResultFolder(path)
    with place.open():
        write_text(place.building / "gaps", "half")
        if with_fit:
            (place.fits / "a.npz").write_bytes(b"fit")
        raise KeyboardInterrupt


def stopped(path: Path, with_fit: bool) -> None:
    with pytest.raises(KeyboardInterrupt):
        half_way(path, with_fit)


def test_a_stopped_run_keeps_its_fits_and_the_old_results(tmp_path):
    out = tmp_path / "out"
    make_run(out, gaps="1")
    before = contents(out)
    stopped(out, with_fit=True)
    assert contents(out) == before
    place = ResultFolder(out)
    with place.open():
        assert [entry.name for entry in place.building.rglob("*")] == ["fits", "a.npz"]
        write_json(place.building / "run.json", {"format": RUN_FORMAT, "files": place.written()})
        place.finish()
    assert [entry.name for entry in tmp_path.iterdir()] == ["out"]


def test_a_stopped_run_without_fits_leaves_nothing(tmp_path):
    stopped(tmp_path / "out", with_fit=False)
    assert list(tmp_path.iterdir()) == []


def test_a_stop_while_results_change_places_loses_nothing(tmp_path):
    make_run(tmp_path / "out", gaps="1")
    (tmp_path / "out").rename(tmp_path / ".out.old")
    ResultFolder(tmp_path / "out")
    assert (tmp_path / "out/gaps").read_text() == "1"
    assert [entry.name for entry in tmp_path.iterdir()] == ["out"]


@pytest.mark.parametrize(
    "files",
    [
        {"thesis.tex": "x"},
        {"run.json": "{}"},
        {"run.json": "no JSON", "thesis.tex": "x"},
        {"run.json": '{"format": "another program"}'},
        {"run.json": "[1]"},
    ],
)
def test_other_folders_are_refused_and_left_alone(tmp_path, files):
    out = tmp_path / "out"
    out.mkdir()
    for name, text in files.items():
        (out / name).write_text(text)
    before = contents(tmp_path)
    with pytest.raises(InputError, match="no results of gapfit; name a new or empty folder"):
        ResultFolder(out)
    assert contents(tmp_path) == before


def test_an_empty_folder_will_do(tmp_path):
    (tmp_path / "out").mkdir()
    make_run(tmp_path / "out", gaps="1")
    assert (tmp_path / "out/gaps").read_text() == "1"


def test_places_that_cannot_be(tmp_path):
    (tmp_path / "file").write_text("x")
    with pytest.raises(InputError, match="is a file; name a folder"):
        ResultFolder(tmp_path / "file")
    with pytest.raises(InputError, match="cannot be made"), ResultFolder(tmp_path / "file/out").open():
        pass
