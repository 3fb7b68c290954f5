"""What came of each recording, once the jobs have ended."""

import json
from collections.abc import Iterator, Mapping, Sequence
from itertools import islice
from pathlib import Path
from typing import Any

from waveassay.contract import SignalError
from waveassay.contract.digests import digest
from waveassay.execute.finish import FACTS_FILE
from waveassay.execute.store import MissingArtefactError, Store
from waveassay.execute.work import OUTCOMES, Failure
from waveassay.plan.drafts import drafts_of, holders_of
from waveassay.plan.jobs import Job
from waveassay.plan.plan import Plan, PlannedRecording
from waveassay.provenance.results import Made, Output, Result

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
    try:  # whatever happened to its job, all of it may have been done
        outputs = [_output(store, chain, key) for chain, key in finishing.items()]
    except MissingArtefactError:
        unknown = Failure(item.found.name, "", "", "it was not finished. Run again.")
        failure = failures.get(item.found.name, unknown)
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
    artefact = store.read(key, (FACTS_FILE,))
    facts = json.loads(artefact.contents[FACTS_FILE])
    made = {**artefact.rests_on, key: artefact.made}
    return Output(chain, artefact.folder, facts, artefact.files, made)


def step_rows(plan: Plan, computed: set[str], results: Sequence[Result]) -> Iterator[list[Any]]:
    """Yield a row a recording, chain and step: recording, chain, step, key, digest, reused, env.

    The key stands for the results that hold the step's work (one a stretch), the digest for what
    they keep.
    """
    for item, result in zip(plan.recordings, results, strict=True):
        by_chain = {output.chain: output for output in result.outputs}
        tasks = iter(item.tasks)
        for passage in item.passages:
            own = list(islice(tasks, len(drafts_of(passage))))
            output = by_chain.get(passage.chain.name)
            if output is None:  # a recording that failed leaves none
                continue
            kept: dict[tuple[int, ...], list[Any]] = {}
            for step, places in holders_of(passage):
                if places not in kept:  # steps of one task share its result
                    held = [own[place].key for place in places]
                    kept[places] = _kept(held, output.made, computed)
                yield [result.recording, output.chain, step, *kept[places]]


def _kept(keys: Sequence[str], made: Mapping[str, Made], computed: set[str]) -> list[Any]:
    """Return of results: their key, digest, whether all was there before, and environments."""
    known = [made[key] for key in keys if key in made]
    reused = computed.isdisjoint(keys)
    environments = ";".join(sorted({environment for _, environment in known}))
    if len(keys) == 1 == len(known):
        return [keys[0], known[0][0], reused, environments]
    return [digest(keys), digest([found for found, _ in known]), reused, environments]
