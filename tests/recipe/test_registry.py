"""Bundles of stages: a stranger's stage counts like ours, and what fails is named, never fatal."""

import subprocess
import sys
from dataclasses import replace
from importlib.metadata import Distribution, EntryPoint
from pathlib import Path

import pytest

from recipe_stages import READ
from waveassay.contract import Kind
from waveassay.recipe import check_recipe, load_registry
from waveassay.recipe.registry import GROUP

_STAGE = """\
\"\"\"A stage of a stranger's.\"\"\"
from waveassay.contract import Kind, Params, Stage

class P(Params):
    \"\"\"None.\"\"\"

STAGE = Stage(
    "{name}", 1, P, (Kind.SIGNALS,), Kind.SIGNALS, lambda p, given, findings: given,
    run=lambda p, signal: signal,
)
"""


class Bundles:
    """Writes distributions with stages to a folder, as an installer would."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder

    def add(self, dist: str, package: str, modules: dict[str, str], version: str = "1.2") -> None:
        for name, text in modules.items():
            path = self.folder / package / name
            path.parent.mkdir(parents=True, exist_ok=True)
            path.write_text(text, encoding="utf-8")
        info = self.folder / f"{dist}-{version}.dist-info"
        info.mkdir()
        info.joinpath("METADATA").write_text(
            f"Metadata-Version: 2.1\nName: {dist}\nVersion: {version}\n"
        )
        info.joinpath("entry_points.txt").write_text(f"[{GROUP}]\n{dist} = {package}\n")

    def points(self) -> list[EntryPoint]:
        found = []
        for info in sorted(self.folder.glob("*.dist-info")):
            found += [p for p in Distribution.at(info).entry_points if p.group == GROUP]
        return found


@pytest.fixture
def bundles(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Bundles:
    monkeypatch.syspath_prepend(str(tmp_path))
    return Bundles(tmp_path)


def test_a_stranger_is_found_with_its_folders_and_without_its_private_modules(
    bundles: Bundles,
) -> None:
    bundles.add(
        "acme",
        "acme_found",
        {
            "__init__.py": "",
            "one.py": _STAGE.format(name="acme.one"),
            "_help.py": "raise RuntimeError('never imported by the walk')",
            "deep/__init__.py": "",
            "deep/deeper/__init__.py": "",
            "deep/deeper/two.py": _STAGE.format(name="acme.two"),
        },
    )
    registry = load_registry(bundles.points())
    assert list(registry.stages) == ["acme.one", "acme.two"]
    assert registry.owners == {"acme.one": "acme 1.2", "acme.two": "acme 1.2"}
    assert registry.broken == ()
    assert registry.giving([Kind.SIGNALS]) == ["acme.one", "acme.two"]


def test_what_does_not_load_is_named_and_the_rest_is_there(bundles: Bundles) -> None:
    bundles.add(
        "acme",
        "acme_partly",
        {
            "__init__.py": "",
            "bad.py": "import no_such_module_at_all",
            "leaves.py": "raise SystemExit(3)",
            "empty.py": "",
            "kind.py": _STAGE.format(name="acme.kind").replace("(Kind.SIGNALS,)", "Kind.SIGNALS"),
            "name.py": _STAGE.format(name="Not A Name"),
            "reserved.py": _STAGE.format(name="keep"),
            "good.py": _STAGE.format(name="acme.good"),
        },
    )
    bundles.add("broken", "broken_whole", {"__init__.py": "1 / 0"}, version="0.3")
    bundles.folder.joinpath("gone-2.dist-info").mkdir()
    info = bundles.folder / "gone-2.dist-info"
    info.joinpath("METADATA").write_text("Metadata-Version: 2.1\nName: gone\nVersion: 2\n")
    info.joinpath("entry_points.txt").write_text(f"[{GROUP}]\ngone = gone_stages\n")
    registry = load_registry(bundles.points())
    assert list(registry.stages) == ["acme.good"]
    assert [(b.owner, b.module, b.why.split(":")[0]) for b in registry.broken] == [
        ("acme 1.2", "acme_partly.bad", "ModuleNotFoundError"),
        ("acme 1.2", "acme_partly.empty", "the module defines no STAGE"),
        ("acme 1.2", "acme_partly.kind", "stage 'acme.kind'"),
        ("acme 1.2", "acme_partly.leaves", "SystemExit"),
        (
            "acme 1.2",
            "acme_partly.name",
            "'Not A Name' is no stage name; lower case, such as 'family.method'",
        ),
        (
            "acme 1.2",
            "acme_partly.reserved",
            "'keep' is a key of the recipe grammar; name the stage 'family.method'",
        ),
        ("broken 0.3", "broken_whole", "ZeroDivisionError"),
        ("gone 2", "gone_stages", "ModuleNotFoundError"),
    ]
    said = {broken.module: str(broken) for broken in registry.broken}
    assert "acme_partly.kind: stage 'acme.kind': takes is" in said["acme_partly.kind"]
    assert "write takes=(Kind.SIGNALS,)" in said["acme_partly.kind"]
    assert "begin the name of a helper module with '_'" in said["acme_partly.empty"]


def test_a_missed_stage_is_told_together_with_what_did_not_load(bundles: Bundles) -> None:
    bundles.add("acme", "acme_missed", {"__init__.py": "import no_such_module_at_all"})
    registry = load_registry(bundles.points())
    text = "recipe: r\nedition: 1\nsignals: {e: {labels: [E], unit: uV}}\nchains:\n  c: [acme.x]\n"
    (problem,) = check_recipe(text, "r.yaml", registry).problems
    assert str(problem) == (
        "r.yaml:5:7: R104 c: no stage 'acme.x' (acme 1.2 failed to load: acme_missed: "
        "ModuleNotFoundError: No module named 'no_such_module_at_all')"
    )


def test_the_shipped_package_keeps_a_name_that_a_stranger_claims_too(bundles: Bundles) -> None:
    one = {"__init__.py": "", "one.py": _STAGE.format(name="family.one")}
    bundles.add("aaa", "aaa_claims", one)
    bundles.add("waveassay", "ours_claims", one, version="9")
    registry = load_registry(bundles.points())
    assert registry.owners == {"family.one": "waveassay 9"}
    (broken,) = registry.broken
    assert broken.owner == "aaa 1.2"
    assert broken.why == (
        "stage name 'family.one' is also claimed by waveassay 9 (ours_claims.one), which keeps it: "
        "rename yours"
    )
    text = (
        "recipe: r\nedition: 1\nsignals: {e: {labels: [E], unit: uV}}\n"
        "chains:\n  c:\n  - load: {signals: [e]}\n  - family.one\n"
    )
    stages = {"load": READ, **registry.stages}
    checked = check_recipe(text, "r.yaml", replace(registry, stages=stages))
    assert (
        "r.yaml:7:5: W404 c.family.one: this is the stage of waveassay 9; its name is also "
        in str(checked.warnings[0])
    )
    assert not checked.errors


def test_of_two_strangers_with_one_name_neither_has_it(bundles: Bundles) -> None:
    one = {"__init__.py": "", "one.py": _STAGE.format(name="family.twice")}
    bundles.add("aaa", "aaa_twice", one)
    bundles.add("bbb", "bbb_twice", one)
    registry = load_registry(bundles.points())
    assert registry.stages == {}
    assert [b.owner for b in registry.broken] == ["aaa 1.2", "bbb 1.2"]
    assert all(b.why.endswith("so neither has it: rename one") for b in registry.broken)
    assert "aaa 1.2" in registry.unknown("family.twice")
    assert "bbb 1.2" in registry.unknown("family.twice")


def test_a_stranger_whose_spec_fails_is_named_and_nothing_crashes(bundles: Bundles) -> None:
    source = _STAGE.format(name="acme.source").replace("(Kind.SIGNALS,),", "(),")
    source = source.replace("run=lambda p, signal: signal", "needs=lambda p: ('e',)")
    crash = _STAGE.format(name="acme.crash").replace(": given,", ": 1 / 0,")
    wrong = _STAGE.format(name="acme.wrong").replace(": given,", ": 'signals',")
    bundles.add(
        "acme",
        "acme_crash",
        {
            "__init__.py": "",
            "source.py": source,
            "crash.py": crash,
            "wrong.py": wrong,
        },
    )
    registry = load_registry(bundles.points())
    text = (
        "recipe: r\nedition: 1\nsignals: {e: {labels: [E], unit: uV}}\n"
        "chains:\n  c:\n  - acme.source\n  - acme.wrong\n  - {acme.crash: , on: acme.source}\n"
    )
    found = check_recipe(text, "r.yaml", registry).problems
    assert [str(p)[: len("r.yaml:7:5: R310")] for p in found] == [
        "r.yaml:7:5: R310",
        "r.yaml:8:6: R310",
    ]
    assert "acme.wrong of acme 1.2 says that it gives signals" in found[0].message
    assert "acme.crash of acme 1.2 failed" in found[1].message
    assert "ZeroDivisionError" in found[1].message


def test_the_installed_stages_are_read_once_a_process() -> None:
    assert load_registry() is load_registry()
    assert load_registry().owners["load"].startswith("waveassay ")


def test_checking_imports_nothing_heavy() -> None:
    code = """
import sys
from waveassay.recipe import check_recipe, load_registry
load_registry()
check_recipe('''
recipe: r
edition: 1
signals: {e: {labels: [E], unit: uV}}
chains: {c: [{load: {signals: [e]}}, {filter.butterworth: {low_pass: 30 Hz}}]}
''', 'r')
heavy = {'scipy', 'pandas', 'pyarrow', 'matplotlib', 'pint', 'snakemake', 'jsonschema'}
print(sorted(heavy & set(sys.modules)))
"""
    done = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, check=True, timeout=60
    )
    assert done.stdout.strip() == "[]"
