"""Whether an object has the form of a stage; asked where stages are loaded, and by the checks.

Nothing is called: this is what can be said of a stage as it stands.
"""

import re
from collections.abc import Iterator, Mapping

from waveassay.contract.kinds import Kind
from waveassay.contract.params import Params
from waveassay.contract.stage import EachRow, Stage, Whole

_NAME = re.compile(r"[a-z][a-z0-9_]*(\.[a-z][a-z0-9_]*)?\Z")

#: Kinds that leave the chain: no step takes them.
ENDS = (Kind.TABLE, Kind.FIGURE)


def why_unfit(stage: object) -> str | None:
    """Return in plain words why an object cannot serve as a stage and what to write, or None."""
    if stage is None:
        return "the module defines no STAGE: begin the name of a helper module with '_'"
    if not isinstance(stage, Stage):
        return f"STAGE is {_what(stage)}: write STAGE = Stage(...)"
    name: object = stage.name  # a stranger's module may hold anything
    if not isinstance(name, str) or not _NAME.match(name):
        return f"'{name}' is no stage name; lower case, such as 'family.method'"
    why = next(_faults(stage), None)
    return None if why is None else f"stage '{name}': {why}"


def _what(value: object) -> str:
    if isinstance(value, type):
        return f"the class {value.__name__}"
    return f"{value!r} ({type(value).__name__})" if len(repr(value)) < 60 else type(value).__name__


def _faults(stage: Stage) -> Iterator[str]:
    params: object = stage.params
    version: object = stage.version
    if not (isinstance(params, type) and issubclass(params, Params)):
        yield f"params is {_what(params)}: write a class derived from Params"
    if type(version) is not int or version < 1:
        yield f"version is {_what(version)}: write a whole number from 1"
    yield from _kind_faults(stage)
    for what in ("spec", "run", "needs", "derive", "reads_truncated"):
        value: object = getattr(stage, what)
        if not (callable(value) or (value is None and what != "spec")):
            yield f"{what} is {_what(value)}: write the function itself"
    example: object = stage.example
    if not isinstance(example, Mapping):
        yield f"example is {_what(example)}: write a mapping such as {{'length': '4 s'}}"
    yield from _work_faults(stage)
    yield from _context_faults(stage)


def _kind_faults(stage: Stage) -> Iterator[str]:
    takes: object = stage.takes
    if not callable(takes):
        if not isinstance(takes, tuple):
            one = f"Kind.{takes.name}" if isinstance(takes, Kind) else "Kind.EPOCHS"
            yield f"takes is {_what(takes)}, not a tuple: write takes=({one},)"
            return
        for kind in takes:
            if not isinstance(kind, Kind):
                yield f"takes holds {_what(kind)}: write kinds, such as takes=(Kind.EPOCHS,)"
            elif kind in ENDS:
                yield f"takes holds Kind.{kind.name}, which no step can take"
    gives: object = stage.gives
    if isinstance(gives, type) or not (callable(gives) or isinstance(gives, Kind)):
        yield f"gives is {_what(gives)}: write one kind, such as gives=Kind.FEATURES"


def _work_faults(stage: Stage) -> Iterator[str]:
    """Find a stage without work to do, or with the marks of a source and of a step at once."""
    if stage.needs is not None:
        if stage.takes != ():
            yield "needs is for a source, and this stage takes something: leave needs out"
        if stage.run is not None:
            yield "a source has nothing to run, the engine reads: leave run out"
    elif stage.takes == ():
        yield "takes is empty and needs is missing: write the kinds that it takes"
    elif stage.run is None and not isinstance(stage.context, Whole):
        yield "it has nothing to run: write run=run, or context=Whole(collect, combine)"


def _context_faults(stage: Stage) -> Iterator[str]:
    context: object = stage.context
    if context is None:
        return
    taken = () if callable(stage.takes) else stage.takes
    if isinstance(context, Whole):
        for what in ("collect", "combine", "apply"):
            value: object = getattr(context, what)
            if not (callable(value) or (value is None and what == "apply")):
                yield f"{what} of its Whole is {_what(value)}: write the function itself"
    elif isinstance(context, EachRow):
        if Kind.SIGNALS in taken:
            yield (
                "context is EachRow(), and signals have no rows: write a function "
                "(params, spec) -> Reach, or leave context out"
            )
    elif isinstance(context, type) or not callable(context):
        yield (
            f"context is {_what(context)}: write EachRow(), Whole(collect, combine), or a function "
            "(params, spec) -> Reach"
        )
    elif any(kind is not Kind.SIGNALS for kind in taken):
        yield (
            "context is a function, which says how far a signal reaches, and the stage takes "
            f"{', '.join(map(str, taken))}: write EachRow() or Whole(collect, combine)"
        )
