"""The docs say what is there: commands, exit codes, folders, and commands that work."""

import re
from pathlib import Path

import pytest

from waveassay.contract import errors
from waveassay.recipe import check_recipe

ROOT = Path(__file__).parents[1]
README = (ROOT / "README.md").read_text(encoding="utf-8")
DEVELOPERS = (ROOT / "DEVELOPERS.md").read_text(encoding="utf-8")


def blocks(text: str, language: str) -> list[str]:
    return re.findall(rf"^```{language}\n(.*?)^```$", text, re.MULTILINE | re.DOTALL)


def test_the_first_two_shell_blocks_are_the_two_commands_of_one_line_each() -> None:
    run, tests = blocks(README, "sh")[:2]
    for block in (run, tests):
        assert len(block.strip().splitlines()) == 1
        assert "-m venv" in block
    assert run.strip().endswith("waveassay run workdir_example")
    assert "pytest" in tests


@pytest.mark.parametrize("command", ["run", "check", "describe", "stages", "recipes", "schema"])
def test_the_readme_names_every_command(command: str) -> None:
    assert f"waveassay {command}" in README


def test_the_readme_lists_the_exit_codes() -> None:
    listed = set(re.findall(r"^\| (\d+) \|", README, re.MULTILINE))
    classes = [c for c in vars(errors).values() if isinstance(c, type)]
    codes = {c.exit_code for c in classes if issubclass(c, errors.WaveassayError)}
    assert {str(code) for code in codes} <= listed


def test_the_readme_recipe_is_sound() -> None:
    (text,) = blocks(README, "yaml")
    checked = check_recipe(text, "README.md")
    assert not checked.errors, [str(problem) for problem in checked.errors]


def test_developers_names_every_room_of_the_house() -> None:
    rooms = [p.name for p in (ROOT / "engine" / "waveassay").iterdir() if p.is_dir()]
    for room in rooms:
        if not room.startswith("__"):
            assert f"{room}/" in DEVELOPERS, room


ALL_CHECKS = """\
import importlib
import pytest
from waveassay.contract.checks import CHECKS

@pytest.mark.parametrize("check", CHECKS, ids=lambda check: check.__name__)
@pytest.mark.parametrize("module", {modules})
def test_stage(module, check):
    check(importlib.import_module(f"my_stages.{{module}}").STAGE)
"""

ALL_STAGES = """\
recipe: all
edition: 1
title: All stages of the guide
purpose: To see that they go together
signals: {eeg: {labels: [E], unit: uV}}
chains:
  one:
    - load: {signals: [eeg]}
    - my.smooth: {length: 80 ms}
    - my.far: {}
    - epoch.consecutive: {length: 4 s}
    - my.line_length: {}
    - export.table
"""


def test_the_stages_of_the_guide_work_as_printed(tmp_path: Path) -> None:
    """The walk of DEVELOPERS.md: its stages and its test, copied out and run."""
    import os
    import subprocess
    import sys

    printed = blocks(DEVELOPERS, "python")
    stages = {
        match[1]: block for block in printed if (match := re.search(r'name="my\.(\w+)"', block))
    }
    assert list(stages) == ["line_length", "smooth", "far"]
    (test,) = (block for block in printed if block not in stages.values())
    (tmp_path / "my_stages").mkdir()
    (tmp_path / "my_stages" / "__init__.py").write_text('"""My stages."""\n')
    for name, stage in stages.items():
        (tmp_path / "my_stages" / f"{name}.py").write_text(stage)
    (tmp_path / "test_line_length.py").write_text(test)
    (tmp_path / "test_all.py").write_text(ALL_CHECKS.format(modules=list(stages)[1:]))
    info = tmp_path / "my_stages-0.1.dist-info"
    info.mkdir()
    (info / "METADATA").write_text("Metadata-Version: 2.1\nName: my-stages\nVersion: 0.1\n")
    (project,) = blocks(DEVELOPERS, "toml")
    group = re.search(r'\[project.entry-points."(.*)"\]\n(.*) = "(.*)"', project)
    assert group
    (info / "entry_points.txt").write_text(f"[{group[1]}]\n{group[2]} = {group[3]}\n")
    (tmp_path / "all.yaml").write_text(ALL_STAGES)

    path = os.pathsep.join(filter(None, [str(tmp_path), os.environ.get("PYTHONPATH", "")]))

    def child(*arguments: object) -> subprocess.CompletedProcess[str]:
        return subprocess.run(
            [sys.executable, "-m", *map(str, arguments)],
            capture_output=True, text=True, cwd=tmp_path,
            env={**os.environ, "PYTHONPATH": path},
        )  # fmt: skip

    done = child("pytest", "-q", "-W", "error", "-p", "no:cacheprovider", tmp_path)
    assert done.returncode == 0, done.stdout + done.stderr
    for name, stage in stages.items():
        shown = child("waveassay", "stages", f"my.{name}").stdout
        assert stage.splitlines()[0].strip('"') in shown
        assert "my-stages 0.1" in shown
    checked = child("waveassay", "check", "all.yaml")
    assert checked.returncode == 0, checked.stdout + checked.stderr
