"""Which files a user means, and what they are called."""

from pathlib import Path

import pytest

from waveassay.contract.errors import UsageError
from waveassay.plan.recordings import find_recordings


def touch(folder: Path, *names: str) -> None:
    for name in names:
        (folder / name).parent.mkdir(parents=True, exist_ok=True)
        (folder / name).touch()


def test_a_recording_is_named_by_its_path_below_the_folder_given(tmp_path: Path) -> None:
    touch(tmp_path, "site1/p03.edf", "site1/p04.EDF", "site2/p03.bdf", "site2/notes.txt")
    assert [f.name for f in find_recordings([tmp_path])] == ["site1/p03", "site1/p04", "site2/p03"]


def test_hidden_files_and_folders_are_left_out(tmp_path: Path) -> None:
    touch(tmp_path, "a.edf", ".b.edf", ".trash/c.edf")
    assert [f.name for f in find_recordings([tmp_path])] == ["a"]


def test_a_file_is_taken_whatever_its_suffix_and_once(tmp_path: Path) -> None:
    touch(tmp_path, "a.rec")
    assert [f.name for f in find_recordings([tmp_path / "a.rec", tmp_path / "a.rec"])] == ["a"]


def test_order_of_arguments_does_not_matter(tmp_path: Path) -> None:
    touch(tmp_path, "a.edf", "b.edf")
    paths = [tmp_path / "b.edf", tmp_path / "a.edf"]
    assert find_recordings(paths) == find_recordings(paths[::-1])


def test_two_recordings_of_one_name_stop_everything(tmp_path: Path) -> None:
    touch(tmp_path, "x/a.edf", "y/a.edf")
    with pytest.raises(UsageError, match=r"named 'a'.*x/a\.edf.*y/a\.edf"):
        find_recordings([tmp_path / "x", tmp_path / "y"])
    touch(tmp_path, "z/a.edf", "z/a.bdf")
    with pytest.raises(UsageError, match="named 'a'"):
        find_recordings([tmp_path / "z"])


def test_what_is_not_there_is_said(tmp_path: Path) -> None:
    with pytest.raises(UsageError, match=r"nothing\.edf: there is no such file"):
        find_recordings([tmp_path / "nothing.edf"])
    with pytest.raises(UsageError, match="no recording in this folder"):
        find_recordings([tmp_path])
    with pytest.raises(UsageError, match="No recording was named"):
        find_recordings([])
