"""A real Slurm of one node: the same bytes, a job killed, a run cancelled, a queue that stands.

It installs packages, so it runs only when asked: ``WAVEASSAY_SLURM=1 pytest tests/cluster``.
"""

import os
import signal
import subprocess
from collections.abc import Iterator
from importlib.util import find_spec
from pathlib import Path

import pytest

from cluster_runs import profile, slurm_profile, start, wait_until, working_directory
from running import command, only_run
from waveassay.contract.errors import MachineError, UsageError
from waveassay.execute.run import run_recipe
from waveassay.execute.snakemake import slurm
from waveassay.execute.snakemake.cluster import ClusterRunner
from waveassay.execute.snakemake.profile import read_profile
from waveassay.plan.jobs import JobLength
from waveassay.plan.recordings import find_recordings
from waveassay.provenance.manifest import read_manifest
from waveassay.recipe import check_recipe

if os.environ.get("WAVEASSAY_SLURM") != "1":
    pytest.skip(
        "it installs Slurm on this machine; ask for it with WAVEASSAY_SLURM=1",
        allow_module_level=True,
    )
HERE = Path(__file__).parent
FIGURES = """\
    - export.figure: {show: spectrogram}
    - spectrum.average: {}
    - export.figure: {show: spectrum}
"""


@pytest.fixture(scope="module", autouse=True)
def _cluster(tmp_path_factory: pytest.TempPathFactory) -> Iterator[None]:
    """Bring up Slurm, or say why not."""
    if find_spec("snakemake_executor_plugin_slurm") is None:
        pytest.skip("Snakemake's executor for Slurm is missing: pip install '.[slurm]'")
    folder = tmp_path_factory.mktemp("slurm")
    up = ["bash", str(HERE / "slurm_up.sh"), str(folder)]
    done = subprocess.run(up, stdout=subprocess.PIPE, stderr=subprocess.STDOUT, text=True)
    if done.returncode == 77:
        pytest.skip(done.stdout.strip().splitlines()[-1])
    assert done.returncode == 0, done.stdout
    yield
    subprocess.run(["bash", str(HERE / "slurm_down.sh"), str(folder)], check=True)


@pytest.fixture(scope="module")
def made(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Write 40 short recordings; `$`, a space and a brace stand in the path.

    Without figures all of it would be one job.
    """
    folder = working_directory(tmp_path_factory.mktemp("made") / "a $HOME {x}", 40, 120)
    with (folder / "recipe.yaml").open("a") as recipe:
        recipe.write(FIGURES)
    return folder


@pytest.fixture(scope="module")
def here(made: Path) -> str:
    """Return the results digest of a run on this machine."""
    done = command("run", made, "--into", made / "here")
    assert done.returncode == 0, done.stderr
    return results_digest(made / "here")


def results_digest(into: Path) -> str:
    return read_manifest(only_run(into)).results_digest


def queue(state: str = "all") -> list[str]:
    """Return the numbers of jobs that are pending, running, completing (or of one state)."""
    states = [] if state == "all" else [f"--states={state}"]
    asked = ["squeue", "--noheader", "--format=%i", *states]
    return subprocess.run(asked, capture_output=True, text=True, check=True).stdout.split()


def test_tables_are_those_of_a_run_on_this_machine(made: Path, here: str) -> None:
    done = command("run", made, "--into", made / "there", "--cluster", slurm_profile(made / "p1"))
    assert done.returncode == 0, done.stderr
    assert results_digest(made / "there") == here
    assert "120 tasks computed" in done.stdout
    assert len(done.stderr.splitlines()) == 2, "the jobs' own words reached the terminal"


def test_a_long_recording_is_cut_up_over_jobs_that_need_each_other(tmp_path: Path) -> None:
    working = working_directory(tmp_path / "w", 1, 1200)
    recipe = check_recipe((working / "recipe.yaml").read_text(), "recipe.yaml").recipe
    assert recipe is not None
    found = find_recordings([working / "recordings"])
    cluster = slurm.checked(read_profile(slurm_profile(tmp_path / "profile")))
    outcome = run_recipe(
        recipe,
        found,
        tmp_path / "there",
        store_folder=None,
        workers=8,
        runner=ClusterRunner(cluster, 600, print),
        job_length=JobLength(0.3, 0.3),
    )
    assert command("run", working, "--into", tmp_path / "here").returncode == 0
    assert outcome.results_digest == results_digest(tmp_path / "here")


def test_killed_and_cut_off_the_run_goes_on_and_leaves_no_job_behind(made: Path, here: str) -> None:
    cluster = slurm_profile(made / "p2", retries=0)
    into = made / "cut"
    run = start(made, into, cluster)
    wait_until(lambda: bool(queue("RUNNING")))
    subprocess.run(["scancel", queue("RUNNING")[0]], check=True)
    told, _ = run.communicate(timeout=150)
    assert run.returncode == 3
    assert "CANCELLED: somebody cancelled it" in told
    assert "Run again" in told
    for number, code in ((signal.SIGINT, 130), (signal.SIGKILL, -signal.SIGKILL)):
        run = start(made, into, cluster)
        wait_until(lambda: bool(queue("RUNNING")))
        run.send_signal(number)
        _, errors = run.communicate(timeout=40)
        assert run.returncode == code, errors
        assert "Traceback" not in errors
        wait_until(lambda: not queue(), 70)
    done = command("run", made, "--into", into, "--cluster", cluster)
    assert done.returncode == 0, done.stderr
    assert " 0 taken from the store" not in done.stdout
    newest = max((into / "runs").glob("cluster-*"))
    assert read_manifest(newest).results_digest == here


def test_what_slurm_refuses_is_told_once_in_its_words(made: Path) -> None:
    cluster = slurm_profile(made / "p4", mem_mb=900_000_000, retries=0)
    done = command("run", made, "--into", made / "refused", "--cluster", cluster)
    assert done.returncode == 6
    assert "the cluster refused a job: sbatch: error: Memory specification" in done.stderr
    assert str(cluster) in done.stderr
    assert "Traceback" not in done.stderr


def test_sacct_without_accounts_is_refused_and_never_chosen(tmp_path: Path) -> None:
    shipped = read_profile(slurm_profile(tmp_path / "shipped"))
    assert slurm.checked(shipped).status_command == "squeue"
    text = shipped.file.read_text() + "slurm-status-command: sacct\n"
    with pytest.raises(UsageError, match="keeps no accounts"):
        slurm.checked(read_profile(profile(tmp_path / "sacct", text)))


def test_a_queue_that_stands_is_told_and_ends_the_run_in_time(
    made: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("waveassay.execute.snakemake.cluster._FIRST_WORD_S", 3.0)
    cluster = slurm.checked(read_profile(slurm_profile(tmp_path / "profile")))
    recipe = check_recipe((made / "recipe.yaml").read_text(), "recipe.yaml").recipe
    assert recipe is not None
    node = os.uname().nodename.split(".")[0]
    drain = ["scontrol", "update", f"nodename={node}", "state=drain", "reason=test"]
    subprocess.run(drain, check=True)
    told: list[str] = []
    try:
        with pytest.raises(MachineError, match="no job began or ended on the cluster"):
            run_recipe(
                recipe,
                find_recordings([made / "recordings"])[:1],
                tmp_path,
                store_folder=None,
                workers=2,
                runner=ClusterRunner(cluster, 8, told.append),
            )
    finally:
        undrain = ["scontrol", "update", f"nodename={node}", "state=resume"]
        subprocess.run(undrain, check=True)
    assert not queue()
    assert "wait or run (waiting for: " in told[0]
