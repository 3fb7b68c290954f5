"""Arrays and facts in one file: what is written is read, and equal content is equal bytes."""

import hashlib
from pathlib import Path
from tempfile import TemporaryDirectory
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as arrays_of

from waveassay.execute.arrays import (
    ArrayFile,
    Group,
    coded,
    group_writer,
    save_groups,
    texts_to_arrays,
)

NAMES = st.text(st.characters(codec="utf-8"), max_size=6)
KINDS = st.sampled_from(["<f8", "<f4", "<i8", "|u1", "|b1", "<U5"])
ARRAYS = arrays_of.arrays(KINDS, arrays_of.array_shapes(min_dims=0, max_dims=3, min_side=0))
GROUPS = st.dictionaries(
    NAMES,
    st.builds(Group, st.dictionaries(NAMES, ARRAYS, max_size=4), st.none() | st.integers()),
    max_size=4,
)


@settings(max_examples=60)
@given(GROUPS, st.dictionaries(NAMES, st.integers()))
def test_what_is_written_is_read(
    tmp_path_factory: pytest.TempPathFactory, groups: dict[str, Group], facts: dict[str, Any]
) -> None:
    folder = tmp_path_factory.mktemp("arrays")
    save_groups(folder / "one", groups, facts)
    save_groups(folder / "two", groups, facts)
    assert (folder / "one").read_bytes() == (folder / "two").read_bytes()
    file = ArrayFile(folder / "one")
    assert file.facts == facts
    assert sorted(file) == sorted(groups)
    for name, group in groups.items():
        found = file.group(name)
        assert found.facts == group.facts
        assert sorted(found.arrays) == sorted(group.arrays)
        for key, array in group.arrays.items():
            assert found.arrays[key].dtype == array.dtype
            assert found.arrays[key].shape == array.shape
            np.testing.assert_array_equal(found.arrays[key], array)


def test_signals_alike_share_a_layout(tmp_path: Path) -> None:
    arrays = {f"column {k}": np.zeros(8) for k in range(20)}
    groups = {str(n): Group(arrays) for n in range(100)}
    save_groups(tmp_path / "file", groups)
    content = sum(array.nbytes for array in arrays.values()) * len(groups)
    assert (tmp_path / "file").stat().st_size < content + 100 * len(groups)


def test_arrays_that_are_not_contiguous_are_written_as_they_are_seen(tmp_path: Path) -> None:
    array = np.arange(24.0).reshape(4, 6).T[::2]
    save_groups(tmp_path / "file", {"a": Group({"x": array})})
    np.testing.assert_array_equal(ArrayFile(tmp_path / "file").group("a").arrays["x"], array)


def test_a_group_is_read_without_the_others(tmp_path: Path) -> None:
    groups = {name: Group({"x": np.full(500, float(place))}) for place, name in enumerate("abc")}
    save_groups(tmp_path / "file", groups)
    data = bytearray((tmp_path / "file").read_bytes())
    data[100:4000] = bytes(3900)  # most of the first group
    (tmp_path / "file").write_bytes(data)
    file = ArrayFile(tmp_path / "file")
    np.testing.assert_array_equal(file.group("b").arrays["x"], np.ones(500))
    assert not np.array_equal(file.group("c").arrays["x"], np.zeros(500))


@given(st.integers(0, 300), st.integers(0, 300), st.sampled_from(["<f4", "<f8"]))
def test_a_part_of_an_array_is_what_stands_there(first: int, count: int, kind: str) -> None:
    with TemporaryDirectory() as folder:
        path = Path(folder) / "file"
        arrays = {"before": np.ones(3), "x": np.arange(200).astype(kind)}
        save_groups(path, {"a": Group({"x": np.zeros(9)}), "b": Group(arrays, "fact")})
        file, out = ArrayFile(path), np.empty(count, kind)
        assert file.facts_of("b") == "fact"
        if first + count > 200:
            with pytest.raises(ValueError, match="x of b is 200 numbers"):
                file.fill(out, "b", "x", first)
            return
        file.fill(out, "b", "x", first)
        np.testing.assert_array_equal(out, arrays["x"][first : first + count])


def test_a_part_is_refused_where_the_file_ends_or_the_kind_is_another(tmp_path: Path) -> None:
    save_groups(tmp_path / "file", {"a": Group({"x": np.ones(100)})})
    file = ArrayFile(tmp_path / "file")
    with pytest.raises(ValueError, match="of kind <f8"):
        file.fill(np.empty(100, np.float32), "a", "x", 0)
    (tmp_path / "file").write_bytes(bytes(700))
    with pytest.raises(ValueError, match="the file ends within x of a"):
        file.fill(np.empty(100), "a", "x", 0)


def test_a_writer_knows_the_digest_of_what_it_wrote(tmp_path: Path) -> None:
    with group_writer(tmp_path / "file") as writer:
        writer.add("a", Group({"x": np.arange(3.0), "y": np.zeros(0)}, {"fact": 1}))
        writer.add("b", Group({"x": np.arange(64.0)}))
        writer.end(None)
    assert writer.sha256 == hashlib.sha256((tmp_path / "file").read_bytes()).hexdigest()


def test_python_objects_are_refused(tmp_path: Path) -> None:
    with pytest.raises(ValueError, match="array x holds Python objects"):
        save_groups(tmp_path / "file", {"a": Group({"x": np.array([None])})})


@given(st.lists(st.text(st.characters(codec="utf-8", exclude_characters="\0"))))
def test_texts_come_back(texts: list[str]) -> None:
    arrays = texts_to_arrays("name", texts)
    assert [str(arrays["name.texts"][code]) for code in arrays["name.codes"]] == texts
    known, codes = coded(texts)
    assert [known[code] for code in codes] == texts
    assert len(set(known)) == len(known)
