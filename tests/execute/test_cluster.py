"""Runs through a Snakemake profile, with jobs as programs of their own on this machine.

`tests/cluster` does the same with a real Slurm.
"""

import json
import os
import signal
from importlib.util import find_spec
from pathlib import Path

import pytest

from cluster_runs import local_profile, profile, start, wait_until, working_directory
from running import command, only_run
from waveassay.contract.errors import UsageError
from waveassay.execute.results import machine_problem
from waveassay.execute.snakemake.profile import Profile, read_profile
from waveassay.execute.snakemake.traces import Traces
from waveassay.plan.jobs import CLUSTER, LOCAL, group_into_jobs
from waveassay.plan.tasks import Task
from waveassay.provenance.manifest import read_manifest


@pytest.fixture(scope="module")
def made(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return working_directory(tmp_path_factory.mktemp("made") / "a $HOME {x}", 6, 60)


@pytest.fixture(scope="module")
def warm(made: Path) -> str:
    """Return the results digest of a run with long-lived workers."""
    done = command("run", made, "--into", made / "warm")
    assert done.returncode == 0, done.stderr
    return results_digest(made / "warm")


def results_digest(into: Path) -> str:
    return read_manifest(only_run(into)).results_digest


def at_work(into: Path) -> list[int]:
    """Return the processes that do a job of a run."""
    found = []
    for folder in Path("/proc").glob("[0-9]*"):
        try:
            words = (folder / "cmdline").read_bytes().split(b"\0")
            if b"waveassay.execute.work" in words and (folder / "cwd").readlink().is_relative_to(
                into
            ):
                found.append(int(folder.name))
        except OSError:  # it has ended meanwhile
            continue
    return found


def test_a_profile_gives_the_same_bytes_and_jobs_keep_off_the_screen(made: Path, warm: str) -> None:
    cluster = local_profile(made / "local")
    done = command("run", made, "--into", made / "cold", "--cluster", cluster)
    assert done.returncode == 0, done.stderr
    assert results_digest(made / "cold") == warm
    assert [line.split()[0] for line in done.stderr.splitlines()] == ["Recipe", "Cluster:"]


@pytest.mark.skipif(not Path("/proc/self/cwd").exists(), reason="it looks for processes in /proc")
def test_a_job_that_is_killed_is_tried_again_when_the_profile_says_so(
    made: Path, warm: str
) -> None:
    into = (made / "killed").resolve()
    run = start(made, into, local_profile(made / "retry"))
    wait_until(lambda: bool(at_work(into)))
    os.kill(at_work(into)[0], signal.SIGKILL)
    told, errors = run.communicate(timeout=120)
    assert run.returncode == 0, errors + told
    assert results_digest(into) == warm


@pytest.mark.skipif(not Path("/proc/self/cwd").exists(), reason="it looks for processes in /proc")
def test_without_another_try_its_recordings_fail_by_name_and_ctrl_c_ends_all(
    made: Path, warm: str
) -> None:
    into = (made / "cut").resolve()
    cluster = local_profile(made / "once", retries=0)
    run = start(made, into, cluster)
    wait_until(lambda: bool(at_work(into)))
    os.kill(at_work(into)[0], signal.SIGKILL)
    told, errors = run.communicate(timeout=120)
    assert run.returncode == 3, errors + told
    assert "the cluster ended the job. Run again." in told
    run = start(made, into, cluster)
    wait_until(lambda: bool(at_work(into)))
    run.send_signal(signal.SIGINT)
    _, errors = run.communicate(timeout=60)
    assert run.returncode == 130, errors
    assert not at_work(into)
    assert command("run", made, "--into", into, "--cluster", cluster).returncode == 0
    newest = max((into / "runs").glob("cluster-*"))
    assert read_manifest(newest).results_digest == warm


@pytest.mark.parametrize(
    ("text", "told"),
    [
        (None, "there is no such folder"),
        ("", "it names no executor"),
        ("executor: [", "this is not YAML"),
        ("executor: nowhere", "pip install 'snakemake-executor-plugin-nowhere'"),
        ("executor: dryrun", "computes nothing"),
        ("executor: local\nfrobnicate: 3", "unrecognized arguments: --frobnicate=3"),
        ("executor: local\njobs: many", "--jobs"),
        ("executor: local\ndefault-storage-provider: s3", "ordinary files"),
    ],
)
def test_a_profile_that_cannot_work_is_named_with_what_is_wrong(
    tmp_path: Path, text: str | None, told: str
) -> None:
    folder = tmp_path / "profile" if text is None else profile(tmp_path / "profile", text)
    with pytest.raises(UsageError) as raised:
        read_profile(folder)
    assert told in str(raised.value)
    assert str(folder) in str(raised.value)


def test_a_folder_without_a_profile_names_one_to_copy(made: Path, tmp_path: Path) -> None:
    done = command("run", made, "--into", tmp_path / "out", "--cluster", tmp_path)
    assert done.returncode == 2
    assert "Traceback" not in done.stderr
    assert not (tmp_path / "out").exists()
    example = Path(done.stderr.split("Copy ")[1].split(" and edit")[0])
    assert "executor: slurm" in (example / "config.yaml").read_text()


def test_slurm_without_its_plugin_or_without_sbatch_says_what_to_do(
    made: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setenv("PATH", str(tmp_path))
    done = command("run", made, "--into", tmp_path / "out", "--cluster", "slurm")
    if find_spec("snakemake_executor_plugin_slurm") is None:
        assert done.returncode == 2
        assert "pip install 'waveassay[slurm]'" in done.stderr
    else:
        assert done.returncode == 6
        assert "There is no sbatch on this machine" in done.stderr


def test_the_profile_for_slurm_asks_for_memory_time_and_another_try(tmp_path: Path) -> None:
    known = read_profile(local_profile(tmp_path))
    assert known.is_local
    assert known.latency_wait_s >= 30
    text = known.file.read_text()
    assert all(word in text for word in ("mem_mb: ", "runtime: ", "retries: 1"))


def test_results_that_cannot_be_seen_here_are_a_fault_of_the_disk(tmp_path: Path) -> None:
    for name in ("outcomes", "tasks"):
        (tmp_path / name).mkdir()
    (tmp_path / "plan.json").write_text(json.dumps({"store": str(tmp_path / "store")}))
    (tmp_path / "tasks" / "a.json").write_text(json.dumps({"tasks": [["p01", "f" * 64]]}))
    known = Profile(tmp_path / "config.yaml", "slurm", 10, latency_wait_s=0)
    told = Traces(tmp_path, known).missing("a") or ""
    assert "every node sees" in (machine_problem({"a": told}) or "")
    (tmp_path / "outcomes" / "a.json").write_text("[]")
    assert Traces(tmp_path, known).missing("a") is not None
    failure = {"recording": "p01"}
    (tmp_path / "outcomes" / "a.json").write_text(json.dumps([failure]))
    assert Traces(tmp_path, known).missing("a") is None


@pytest.mark.parametrize(
    ("said", "log", "last"),
    [
        ("SLURM status is: 'OUT_OF_MEMORY'", "", "raise mem_mb in /p/config.yaml"),
        ("SLURM status is: 'TIMEOUT'", "some warning", "raise runtime in /p/config.yaml"),
        ("SLURM status is: 'FAILED'", "x\nOSError: no such disk", "OSError: no such disk"),
        ("SLURM status is: 'FAILED'", None, "at the same paths?"),
    ],
)
def test_a_failed_job_says_what_to_do_in_its_last_line(
    tmp_path: Path, said: str, log: str | None, last: str
) -> None:
    (tmp_path / "outcomes").mkdir()
    if log is not None:
        (tmp_path / "outcomes" / "a.log").write_text(log)
    traces = Traces(tmp_path, Profile(Path("/p/config.yaml"), "slurm", 10, 0))
    assert last in traces.why("a", said).splitlines()[-1]


def test_a_full_disk_on_a_node_and_a_refusal_stop_the_run(tmp_path: Path) -> None:
    (tmp_path / "outcomes").mkdir()
    (tmp_path / "outcomes" / "a.log").write_text(
        "Traceback (most recent call last):\n"
        "waveassay.contract.errors.MachineError: /store: cannot be written: the disk is full"
    )
    traces = Traces(tmp_path, Profile(Path("/p/config.yaml"), "slurm", 10, 0))
    assert (machine_problem({"a": traces.why("a", "it failed")}) or "").startswith("/store: cannot")
    said = "SLURM sbatch failed. The error message was 'sbatch: error: invalid\npartition x'."
    told = machine_problem({"b": traces.why("b", said)}) or ""
    assert told.startswith("the cluster refused a job: sbatch: error: invalid partition x")


def test_jobs_for_a_cluster_are_longer() -> None:
    short = [
        [Task("finish", f"r{n}", "c", 0, None, f"{n:064x}", (), cost_s=0.5)] for n in range(1000)
    ]
    there, here = group_into_jobs(short, 100, CLUSTER), group_into_jobs(short, 100, LOCAL)
    assert len(there) < len(here) / 5
    assert all(job.cost_s <= CLUSTER.longest_s for job in there)
    one = group_into_jobs(short * 40, 1, CLUSTER)
    assert max(job.cost_s for job in one) > LOCAL.longest_s
