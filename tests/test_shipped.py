from __future__ import annotations

from pathlib import Path

import pytest

from benchkit import shipped
from benchkit.errors import FileError
from benchkit.procedure.file import load_procedure
from benchkit.procedure.plan import make_plan
from benchkit.stage.design import load_design


def names(place: Path) -> list[str]:
    return sorted(file.stem for file in place.glob("*.toml"))


def test_what_is_shipped_is_found_by_name() -> None:
    assert "first-power-on" in names(shipped.folder())
    for name in names(shipped.folder()):
        assert shipped.find_procedure(name).stem == name
    for name in names(shipped.folder() / "designs"):
        assert shipped.find_design(name).stem == name


@pytest.mark.parametrize("procedure", names(shipped.folder()))
@pytest.mark.parametrize("design", names(shipped.folder() / "designs"))
def test_each_procedure_fits_each_design(procedure: str, design: str) -> None:
    plan = make_plan(load_procedure(shipped.find_procedure(procedure)), load_design(shipped.find_design(design)))
    assert len(plan) > 10


def test_a_path_is_taken_as_it_is(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    mine = tmp_path / "mine.toml"
    mine.write_text("")
    assert shipped.find_design(str(mine)) == mine
    monkeypatch.chdir(tmp_path)
    assert shipped.find_design("mine.toml") == Path("mine.toml")
    (tmp_path / "plain").write_text("")
    assert shipped.find_procedure("plain") == Path("plain")


@pytest.mark.parametrize("name", ["none.toml", "a/b", "../x.toml"])
def test_a_path_that_is_not_there(name: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)
    with pytest.raises(FileError, match="no such file") as caught:
        shipped.find_design(name)
    assert caught.value.file == name


def test_a_name_that_nothing_has_lists_those_that_are(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)
    with pytest.raises(FileError, match=r"no design of that name.*breadboard, tern-40"):
        shipped.find_design("stern")
    with pytest.raises(FileError, match=r"no procedure of that name.*first-power-on"):
        shipped.find_procedure("tern-40")


def test_a_shipped_name_goes_before_a_file_of_that_name(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)
    (tmp_path / "tern-40").write_text("")
    assert shipped.find_design("tern-40").parent == shipped.folder() / "designs"


def test_an_installed_package_has_its_own_folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    package = tmp_path / "benchkit"
    (package / "_procedures").mkdir(parents=True)
    monkeypatch.setattr(shipped, "__file__", str(package / "shipped.py"))
    assert shipped.folder() == package / "_procedures"
    (package / "_procedures").rmdir()
    assert shipped.folder() == tmp_path / "procedures"
