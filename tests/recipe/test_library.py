"""A recipe is found by path or by name; what is not there is told helpfully."""

from pathlib import Path

import pytest

from waveassay.contract.errors import UsageError
from waveassay.recipe import RecipeError, find, library, read_recipe

pytestmark = pytest.mark.usefixtures("_elsewhere")


@pytest.fixture
def _elsewhere(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)


def test_a_shipped_recipe_is_found_by_its_name() -> None:
    name = library.names()[0]
    text, path = find(name)
    assert text == library.text(name)
    assert Path(path).read_text(encoding="utf-8") == text
    assert read_recipe(name).name == name


def test_a_file_comes_before_a_shipped_name_and_keeps_its_path(tmp_path: Path) -> None:
    name = library.names()[0]
    tmp_path.joinpath(name).write_text("mine", encoding="utf-8")
    assert find(name) == ("mine", name)


def test_a_folder_does_not_hide_a_shipped_name(tmp_path: Path) -> None:
    name = library.names()[0]
    tmp_path.joinpath(name).mkdir()
    assert find(name)[0] == library.text(name)


def test_line_ends_are_kept_as_given(tmp_path: Path) -> None:
    tmp_path.joinpath("a.yaml").write_bytes(b"a: 1\r\nb: 2\r\n")
    assert find("a.yaml")[0] == "a: 1\r\nb: 2\r\n"


def test_a_misspelt_name_gets_the_nearest() -> None:
    name = library.names()[0]
    with pytest.raises(UsageError, match=f"did you mean '{name}'"):
        find(name[:-1])
    with pytest.raises(UsageError, match=f"did you mean '{name}'"):
        library.text(name[:-1])


def test_a_misspelt_path_gets_the_nearest_file_or_the_missing_folder(tmp_path: Path) -> None:
    tmp_path.joinpath("recipe.yaml").write_text("", encoding="utf-8")
    with pytest.raises(UsageError, match=r"no recipe file 'recip\.yaml'; did you mean 'recipe\.ya"):
        find("recip.yaml")
    with pytest.raises(UsageError, match="no folder 'gone'"):
        find("gone/recipe.yaml")


def test_a_folder_is_told_from_a_recipe(tmp_path: Path) -> None:
    folder = tmp_path / "study"
    folder.mkdir()
    with pytest.raises(UsageError, match=r"'study' is a folder, not a recipe$"):
        find("study")
    folder.joinpath("recipe.yaml").write_text("", encoding="utf-8")
    with pytest.raises(UsageError, match=r"did you mean 'study.recipe\.yaml'"):
        find("study")


def test_what_cannot_be_read_is_said(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    tmp_path.joinpath("a.yaml").write_text("a: 1", encoding="utf-8")

    def refuse(self: Path, *args: object, **kwargs: object) -> None:
        raise PermissionError(13, "Permission denied")

    monkeypatch.setattr(Path, "open", refuse)
    with pytest.raises(UsageError, match=r"cannot read recipe 'a\.yaml': Permission denied"):
        find("a.yaml")


def test_no_path_at_all() -> None:
    for argument in ("a\0b", "", "a" * 5000):
        with pytest.raises(UsageError) as caught:
            find(argument)
        assert caught.value.exit_code == 2


def test_bytes_that_are_no_text_are_an_error_of_the_recipe(tmp_path: Path) -> None:
    tmp_path.joinpath("a.yaml").write_bytes(b"recipe: \xff")
    with pytest.raises(RecipeError, match=r"^a\.yaml:1:9: Y101"):
        find("a.yaml")
