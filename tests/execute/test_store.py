"""The store: whole results or none, found by key, checked when read."""

import hashlib
import subprocess
import sys
from pathlib import Path

import pytest

from waveassay.contract import SignalError
from waveassay.execute.store import MissingArtefactError, Store

KEY, OTHER = "ab" + "0" * 62, "cd" + "0" * 62


def put(store: Store, text: str = "number") -> None:
    with store.writing(KEY, "environment-1") as folder:
        (folder / "value.txt").write_text(text)


def test_a_result_is_found_again_with_its_environment(tmp_path: Path) -> None:
    store = Store(tmp_path)
    assert not store.has(KEY)
    put(store)
    assert store.has(KEY)
    artefact = store.read(KEY)
    assert artefact.path("value.txt").read_text() == "number"
    assert store.facts(KEY) == (artefact.digest, "environment-1")


def test_the_digest_is_of_the_content_alone(tmp_path: Path) -> None:
    stores = [Store(tmp_path / name) for name in ("one", "two", "three")]
    for store, text in zip(stores, ("same", "same", "other"), strict=True):
        put(store, text)
    digests = [store.read(KEY).digest for store in stores]
    assert digests[0] == digests[1] != digests[2]


def test_a_digest_that_is_told_spares_reading_the_file_and_must_be_its(tmp_path: Path) -> None:
    store, known = Store(tmp_path), dict[str, str]()
    with store.writing(KEY, "e", known) as folder:
        (folder / "value.txt").write_text("number")
        (folder / "other.txt").write_text("other")
        known["value.txt"] = hashlib.sha256(b"number").hexdigest()
    told = store.read(KEY).files
    assert told == {
        "other.txt": hashlib.sha256(b"other").hexdigest(),
        "value.txt": known["value.txt"],
    }
    with store.writing(OTHER, "e", {"value.txt": hashlib.sha256(b"wrong").hexdigest()}) as folder:
        (folder / "value.txt").write_text("number")
    with pytest.raises(SignalError, match="was changed or lost"):
        store.read(OTHER)


def test_a_result_tells_what_it_rests_on_and_holds_what_is_asked_for(tmp_path: Path) -> None:
    store = Store(tmp_path)
    rests_on = {"cd" + "0" * 62: ("a digest", "environment-0")}
    with store.writing(KEY, "environment-1", rests_on=rests_on) as folder:
        (folder / "value.txt").write_text("number")
        (folder / "other.txt").write_text("other")
    artefact = store.read(KEY, ["value.txt"])
    assert artefact.rests_on == rests_on
    assert artefact.made == store.facts(KEY) == (artefact.digest, "environment-1")
    assert artefact.contents == {"value.txt": b"number"}
    assert store.read(KEY).contents == {}


@pytest.mark.parametrize("name", ["value.txt", "other.txt"])
def test_a_changed_file_is_found_whether_it_is_asked_for_or_not(tmp_path: Path, name: str) -> None:
    store = Store(tmp_path)
    with store.writing(KEY, "e") as folder:
        (folder / "value.txt").write_text("number")
        (folder / "other.txt").write_text("other")
    store.read(KEY).path(name).write_text("!")
    with pytest.raises(SignalError, match=f"{name}: a stored result was changed"):
        store.read(KEY, ["value.txt"])
    assert not store.has(KEY)


def test_work_that_fails_leaves_nothing(tmp_path: Path) -> None:
    store = Store(tmp_path)
    with pytest.raises(SignalError), store.writing(KEY, "e") as folder:  # noqa: PT012
        (folder / "value.txt").write_text("half")
        raise SignalError("the step failed")
    assert not store.has(KEY)
    assert not [path for path in tmp_path.rglob("*") if path.is_file()]


def test_what_is_not_there_is_missing(tmp_path: Path) -> None:
    with pytest.raises(MissingArtefactError):
        Store(tmp_path).read(KEY)


def test_the_second_of_two_writers_does_no_harm(tmp_path: Path) -> None:
    store = Store(tmp_path)
    with store.writing(KEY, "e") as folder:
        (folder / "value.txt").write_text("late")
        put(store, "early")
    assert store.read(KEY).path("value.txt").read_text() == "early"


def leave_half_written(root: Path) -> None:
    """Kill a process while it writes a result."""
    code = (
        "import os, sys; from pathlib import Path; from waveassay.execute.store import Store\n"
        f"with Store(Path(sys.argv[1])).writing({KEY!r}, 'e'): os.kill(os.getpid(), 9)"
    )
    subprocess.run([sys.executable, "-c", code, str(root)], check=False)
    assert len(list(root.rglob(".part-*"))) == 1


def test_what_the_dead_left_is_swept(tmp_path: Path) -> None:
    leave_half_written(tmp_path)
    with Store(tmp_path).in_use():
        assert not list(tmp_path.rglob(".part-*"))


def test_nothing_is_swept_while_another_run_shares_the_store(tmp_path: Path) -> None:
    with Store(tmp_path).in_use():
        leave_half_written(tmp_path)
        with Store(tmp_path).in_use():  # the second of two: it waits for nobody
            assert len(list(tmp_path.rglob(".part-*"))) == 1
