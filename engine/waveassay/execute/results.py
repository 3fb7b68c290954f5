"""What came of each recording, once the jobs have ended."""

import json
from collections.abc import Iterator, Mapping, Sequence
from pathlib import Path
from typing import Any

from waveassay.contract import SignalError
from waveassay.contract.digests import digest
from waveassay.execute.finish import FACTS_FILE
from waveassay.execute.store import Store
from waveassay.execute.work import OUTCOMES, Failure
from waveassay.plan.jobs import Job
from waveassay.plan.passage import Passage
from waveassay.plan.plan import Plan, PlannedRecording
from waveassay.plan.program import Level, Move
from waveassay.plan.tasks import Task
from waveassay.provenance.results import Output, Result

_MACHINE = "MachineError: "


def machine_problem(ended: Mapping[str, str]) -> str | None:
    """Return what the machine declined; ``ended`` is job -> the text of its failure."""
    for text in ended.values():
        for line in reversed(text.splitlines()):
            if _MACHINE in line:
                return line.split(_MACHINE, 1)[1].rstrip(".")
    return None


def failures_by_recording(
    work: Path, jobs: Sequence[Job], ended: Mapping[str, str], whole: str | None
) -> dict[str, Failure]:
    """Return why each recording failed, from the jobs' outcomes or for want of one."""
    failures: dict[str, Failure] = {}
    for job in jobs:
        outcome = work / OUTCOMES / f"{job.identifier}.json"
        if outcome.exists():
            for known in json.loads(outcome.read_text(encoding="utf-8")):
                failures.setdefault(known["recording"], Failure(**known))
    for job in jobs:
        if ended.get(job.identifier) or (work / OUTCOMES / f"{job.identifier}.json").exists():
            text = ended.get(job.identifier, "")
        else:
            text = whole or "the job was never started, since one that it needs failed"
        if not text:
            continue
        lines = [line for line in text.splitlines() if line.strip()]
        message = f"the work was cut off: {lines[-1].strip() if lines else text}. Run again"
        if "memory" in message:  # the only sign that a killed process leaves
            message += "; if it happens again, with fewer processes at once (--workers)"
        message += "."
        for task in job.tasks:
            failures.setdefault(
                task.recording, Failure(task.recording, task.chain, "", message, text)
            )
    return failures


def collect_results(
    plan: Plan, store: Store, failures: Mapping[str, Failure]
) -> tuple[Result, ...]:
    """Return what came of every recording, in order of name."""
    return tuple(_result(item, store, failures) for item in plan.recordings)


def _result(item: PlannedRecording, store: Store, failures: Mapping[str, Failure]) -> Result:
    facts = item.read.facts if item.read else None
    known: dict[str, Any] = {
        "recording": item.found.name,
        "path": item.found.path.as_posix(),
        "sha256": item.read.sha256 if item.read else "",
        "start": facts.start.isoformat() if facts and facts.start else "",
        "duration_s": float(facts.duration_s) if facts else None,
    }
    if item.problem is not None:
        return Result(**known, status="failed", message=item.problem)
    finishing = {task.chain: task.key for task in item.tasks if task.action == "finish"}
    failure: Failure | None = None
    outputs: list[Output] = []
    if not all(store.has(key) for key in finishing.values()):
        unknown = Failure(item.found.name, "", "", "it was not finished. Run again.")
        failure = failures.get(item.found.name, unknown)
    else:  # whatever happened to its job, all of it was done
        try:
            outputs = [_output(store, chain, key) for chain, key in finishing.items()]
        except SignalError as error:
            failure = Failure(item.found.name, "", "", str(error))
    if failure is not None:
        return Result(
            **known,
            status="failed",
            chain=failure.chain,
            step=failure.step,
            message=failure.message,
        )
    told = [warning for output in outputs for warning in output.facts["warnings"]]
    warnings = list(dict.fromkeys((*item.warnings, *told)))
    return Result(
        **known,
        status="done_with_warnings" if warnings else "done",
        message="; ".join(warnings),
        outputs=tuple(outputs),
    )


def _output(store: Store, chain: str, key: str) -> Output:
    artefact = store.read(key)
    text = artefact.path(FACTS_FILE).read_text(encoding="utf-8")
    return Output(chain, artefact.folder, json.loads(text), artefact.files)


def step_rows(
    plan: Plan, store: Store, computed: set[str], results: Sequence[Result]
) -> Iterator[list[Any]]:
    """Yield a row a recording, chain and step: recording, chain, step, key, digest, reused, env.

    The key stands for the results that hold the step's work (one a stretch), the digest for what
    they keep.
    """
    done = {result.recording for result in results if result.status != "failed"}
    for item in plan.recordings:
        if item.found.name not in done:
            continue
        for passage in item.passages:
            tasks = [task for task in item.tasks if task.chain == passage.chain.name]
            known: dict[str, list[Any]] = {}
            for index, step in enumerate(passage.chain.steps):
                moves = [
                    lane.program.moves[index]
                    for lane in passage.lanes
                    if index in lane.program.moves
                ]
                if moves:
                    held = _holding(passage, moves[0], tasks)
                    key = held[0].key if len(held) == 1 else digest([task.key for task in held])
                    if key not in known:  # steps of one task share its result
                        known[key] = [key, *_kept(held, store, computed)]
                    yield [item.found.name, passage.chain.name, step.name, *known[key]]


def _holding(passage: Passage, move: Move, tasks: Sequence[Task]) -> list[Task]:
    """Return the tasks whose results hold a step's work."""
    prepares = any(lane.program.prepares(move.pass_no) for lane in passage.lanes)
    if move.level is Level.RECORDING:
        action = "finish"
    elif move.level is Level.SAMPLES and prepares:
        action = "prepare"
    else:
        action = "rows"
    return [t for t in tasks if t.action == action and t.pass_no in (move.pass_no, 0)]


def _kept(held: Sequence[Task], store: Store, computed: set[str]) -> list[Any]:
    """Return of tasks' results: digest, whether all was there before, and environments."""
    facts = [known for known in map(store.facts, [task.key for task in held]) if known]
    reused = not any(task.key in computed for task in held)
    environments = ";".join(sorted({environment for _, environment in facts}))
    if len(facts) == 1 and len(held) == 1:
        return [facts[0][0], reused, environments]
    return [digest([d for d, _ in facts]), reused, environments]
