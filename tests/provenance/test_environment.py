"""The environment is complete, the same each time, private, and quick to gather."""

import copy
import getpass
import importlib.metadata
import json
import os
import platform
import re
import subprocess
import sys
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from waveassay.contract.digests import digest, source_digest
from waveassay.provenance.environment import Bundle, environment, environment_id


@pytest.fixture
def bundle(tmp_path: Path) -> Bundle:
    folder = tmp_path / "acme_stages"
    (folder / "filter").mkdir(parents=True)
    (folder / "__init__.py").write_text("")
    (folder / "filter" / "median.py").write_text("STAGE = 1\n")
    return Bundle("acme", "1.2", folder)


def changed(known: dict[str, Any], *path: str, value: object) -> dict[str, Any]:
    other = copy.deepcopy(known)
    place = other
    for name in path[:-1]:
        place = place[name]
    assert place[path[-1]] != value
    place[path[-1]] = value
    return other


def test_it_is_json_and_the_same_each_time(bundle: Bundle) -> None:
    first, second = environment([bundle]), environment([bundle])
    assert json.loads(json.dumps(first, allow_nan=False)) == first
    assert json.dumps(first) == json.dumps(second)
    assert environment_id(first) == environment_id(second)


def test_it_holds_what_the_system_says() -> None:
    known = environment()
    assert known["python"]["version"] == platform.python_version()
    assert known["numerics"]["numpy"] == np.__version__
    assert known["numerics"]["blas"]["name"]
    assert known["machine"]["cores"] == os.cpu_count()
    assert known["machine"]["byte_order"] == sys.byteorder
    assert known["machine"]["processor"]
    assert known["float"]["epsilon"] == np.finfo(np.float64).eps
    assert known["waveassay"]["version"] == importlib.metadata.version("waveassay")


def test_the_lock_holds_every_installed_distribution() -> None:
    known = environment()
    expected = {
        re.sub(r"[-_.]+", "-", d.metadata["Name"]).lower()
        for d in importlib.metadata.distributions()
    }
    assert set(known["lock"]) == expected
    for name in ("numpy", "scipy", "pyarrow", "waveassay"):
        assert known["lock"][name] == importlib.metadata.version(name)
    assert list(known["lock"]) == sorted(known["lock"])
    assert known["lock_digest"] == digest(known["lock"])


def test_the_order_of_bundles_is_irrelevant(bundle: Bundle) -> None:
    other = Bundle("other", "1", bundle.folder)
    one, two = environment([bundle, other]), environment([other, bundle])
    assert json.dumps(one) == json.dumps(two)
    assert one["bundles"]["acme"] == {
        "version": "1.2",
        "source_sha256": source_digest(bundle.folder),
    }


def test_any_change_of_a_bundles_source_changes_its_digest(bundle: Bundle) -> None:
    seen = {source_digest(bundle.folder)}
    stage = bundle.folder / "filter" / "median.py"
    for change in (
        lambda: stage.write_text("STAGE = 2\n"),
        lambda: stage.rename(stage.with_name("mean.py")),
        lambda: (bundle.folder / "new.py").write_text(""),
        lambda: (bundle.folder / "table.npy").write_bytes(b"1"),
    ):
        change()
        seen.add(source_digest(bundle.folder))
    assert len(seen) == 5


def test_what_python_and_editors_leave_does_not_change_it(bundle: Bundle) -> None:
    before = source_digest(bundle.folder)
    (bundle.folder / "__pycache__").mkdir()
    (bundle.folder / "__pycache__" / "median.cpython-311.pyc").write_bytes(b"x")
    (bundle.folder / ".median.py.swp").write_bytes(b"x")
    assert source_digest(bundle.folder) == before


@pytest.mark.parametrize(
    "path",
    [
        ("waveassay", "source_sha256"),
        ("waveassay", "version"),
        ("bundles", "acme", "source_sha256"),
        ("python", "version"),
        ("system", "c_library"),
        ("machine", "processor"),
        ("numerics", "numpy"),
        ("numerics", "blas", "version"),
        ("numerics", "vector_instructions"),
        ("lock_digest",),
    ],
)
def test_the_id_differs_where_a_number_could(bundle: Bundle, path: tuple[str, ...]) -> None:
    known = environment([bundle])
    assert environment_id(changed(known, *path, value="another")) != environment_id(known)


@pytest.mark.parametrize(
    "path",
    [
        ("machine", "cores"),
        ("machine", "cores_usable"),
        ("system", "release"),
        ("system", "distribution"),
        ("other_variables",),
        ("text", "locale"),
    ],
)
def test_the_id_is_the_same_where_no_number_may_change(path: tuple[str, ...]) -> None:
    known = environment()
    assert environment_id(changed(known, *path, value="another")) == environment_id(known)


def test_numeric_variables_count(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.delenv("OPENBLAS_CORETYPE", raising=False)
    before = environment()
    monkeypatch.setenv("OPENBLAS_CORETYPE", "Haswell")
    monkeypatch.setenv("TZ", "Europe/Berlin")
    after = environment()
    assert after["variables"]["OPENBLAS_CORETYPE"] == "Haswell"
    assert after["other_variables"]["TZ"] == "Europe/Berlin"
    assert environment_id(after) != environment_id(before)


@pytest.mark.parametrize(
    "value",
    [
        "/home/anna/zone",
        ":/home/anna/zone",
        "~/zone",
        "a=/home/anna",
        r"C:\Users\anna",
        r"\\s\anna",
    ],
)
def test_a_variable_that_holds_a_path_is_left_out(
    monkeypatch: pytest.MonkeyPatch, value: str
) -> None:
    monkeypatch.setenv("LC_TIME", value)
    known = environment()
    assert known["other_variables"]["LC_TIME"] == "(a path, left out)"


def test_no_path_user_or_host_is_in_it(bundle: Bundle, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(platform, "node", lambda: "ward-7-console")
    texts: list[str] = []

    def walk(value: object) -> None:
        if isinstance(value, dict):
            for key, item in value.items():
                walk(key)
                walk(item)
        elif isinstance(value, list):
            for item in value:
                walk(item)
        elif isinstance(value, str):
            texts.append(value)

    walk(environment([bundle]))
    assert len(texts) > 50
    private = [str(Path.home()), str(bundle.folder), sys.prefix, os.getcwd(), "ward-7-console"]
    for text in texts:
        assert not any(secret in text for secret in private if len(secret) > 1), text
        assert not text.startswith(("/", "~")), text
        assert text != getpass.getuser()


PROBE = """
import sys, time
import numpy
from waveassay.provenance.environment import environment, environment_id
start = time.process_time()
environment_id(environment())
print(time.process_time() - start)
print(*(name for name in ("scipy", "pandas", "matplotlib", "pyarrow") if name in sys.modules))
"""


def test_it_is_quick_and_imports_nothing_heavy() -> None:
    command = [sys.executable, "-c", PROBE]
    used_s, heavy = subprocess.run(
        command, capture_output=True, text=True, check=True
    ).stdout.split("\n")[:2]
    assert heavy == ""
    assert float(used_s) < 0.3
