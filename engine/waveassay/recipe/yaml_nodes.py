"""YAML text -> nodes that know their place, with the meaning of YAML 1.2.

PyYAML reads YAML 1.1: ``no`` as false, ``010`` as eight, ``12:30`` as 750, ``1e3`` as text, and
it keeps the last of two equal keys in silence. Here the scalars follow the core schema of YAML
1.2 (https://yaml.org/spec/1.2.2/#103-core-schema), equal keys are refused, and so is what a
recipe does not need and an attacker would use: tags, merge keys, more than a few aliases.
"""

import re
from collections.abc import Iterator
from typing import Any

import yaml

from waveassay.recipe.model import Place
from waveassay.recipe.problems import Problem, RecipeError, Report

MAX_BYTES = 256 * 1024
MAX_DEPTH = 24
MAX_NODES = 50_000
MAX_ALIASES = 16
MAX_KEY = 200
MAX_DIGITS = 64

_TAG = "tag:yaml.org,2002:"

# What PyYAML would call not printable, and the line separators that YAML 1.2 no longer breaks at.
_FORBIDDEN = re.compile(
    "[^\t\n\r\x20-\x7e\xa0-\u2027\u202a-\ud7ff\ue000-\ufefe\uff00-\ufffd\U00010000-\U0010ffff]"
)

# PyYAML's wording -> ours. Each is searched in the parser's own message.
_PLAIN = (
    ("mapping values are not allowed", "a ':' where none is expected; a text that holds ': ' "
     "needs quotes, and keys of one mapping need the same indentation"),
    ("could not find expected ':'", "a ':' with a space after it is missing behind this key"),
    ("expected <block end>", "the indentation does not fit that of the lines before"),
    ("expected ',' or ']'", "a list opened with '[' is not closed with ']'"),
    ("expected ',' or '}'", "a mapping opened with '{' is not closed with '}'"),
    ("found unexpected end of stream", "a quoted text is not closed"),
    ("sequence entries are not allowed", "a '-' where no list item is expected"),
    ("unknown escape character", "a backslash in a text in double quotes begins an unknown "
     "escape; single quotes leave backslashes alone"),
)  # fmt: skip


def decode(data: bytes, path: str) -> str:
    """Return a recipe's text from the bytes of its file; a byte order mark of UTF-8 is dropped.

    Raises
    ------
    RecipeError
        When the bytes are not text in UTF-8, or far more than a recipe holds.
    """
    if len(data) > MAX_BYTES:
        raise RecipeError(
            [
                Problem(
                    Place(path, 1, 1),
                    "Y102",
                    f"the file is too large; a recipe holds at most {MAX_BYTES:,} bytes",
                )
            ]
        )
    if data.startswith((b"\xff\xfe", b"\xfe\xff")):
        message = "the file is in UTF-16; save it as UTF-8"
        raise RecipeError([Problem(Place(path, 1, 1), "Y101", message)])
    try:
        return data.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        # With a byte order mark, places are counted behind it, as an editor does.
        before = error.object[: error.start].decode("utf-8-sig", "replace")
        message = (
            f"not a text file in UTF-8 (byte 0x{error.object[error.start]:02x} found); "
            "save the recipe as plain text in UTF-8"
        )
        raise RecipeError([Problem(_end_of(before, path), "Y101", message)]) from None


def _end_of(text: str, path: str) -> Place:
    lines = re.split("\r\n|\r|\n", text)
    return Place(path, len(lines), len(lines[-1]) + 1)


class _Stop(Exception):
    """Reading cannot go on; the problem has been reported."""


class _Loader(yaml.SafeLoader):
    """PyYAML's parser and node tree with bounds, and the core schema of YAML 1.2."""

    yaml_implicit_resolvers: dict[str, list[tuple[str, re.Pattern[str]]]] = {}  # noqa: RUF012

    def __init__(self, text: str, report: Report) -> None:
        super().__init__(text)
        self.report = report
        self.depth = 0
        self.aliases = 0
        self.sizes: dict[int, int] = {}  # nodes below a node, aliases written out

    def refuse(self, mark: Any, code: str, message: str) -> None:
        place = Place(self.report.path, mark.line + 1, mark.column + 1)
        self.report.error(place, code, message)

    def compose_node(self, parent: Any, index: Any) -> Any:
        event: Any = self.peek_event()  # type: ignore[no-untyped-call]
        mark = event.start_mark
        if isinstance(event, yaml.AliasEvent):
            return self._aliased(event)
        if event.tag is not None:
            tag = event.tag.replace(_TAG, "!!")
            self.refuse(mark, "Y111", f"tags such as '{tag}' are not part of a recipe")
        if self.depth >= MAX_DEPTH:
            self.refuse(mark, "Y112", f"nested more than {MAX_DEPTH} levels deep")
            raise _Stop
        self.depth += 1
        node: Any = super().compose_node(parent, index)
        self.depth -= 1
        self.sizes[id(node)] = 1 + sum(self.sizes[id(child)] for child in _children(node))
        if self.sizes[id(node)] > MAX_NODES:
            self.refuse(
                mark,
                "Y109" if self.aliases else "Y102",
                f"more than {MAX_NODES:,} values"
                + (" once its aliases are written out" if self.aliases else ""),
            )
            raise _Stop
        if isinstance(node, yaml.MappingNode):
            self._check_keys(node)
        elif isinstance(node, yaml.ScalarNode):
            self._check_scalar(node)
        return node

    def _aliased(self, event: Any) -> Any:
        self.aliases += 1
        node = self.anchors.get(event.anchor)
        message = None
        if self.aliases > MAX_ALIASES:
            message = f"more than {MAX_ALIASES} aliases; write the values out"
        elif node is None:
            message = f"no anchor '&{event.anchor}' stands before this alias"
        elif id(node) not in self.sizes:
            message = f"alias '*{event.anchor}' contains itself"
        if message is not None:
            self.refuse(event.start_mark, "Y109", message)
            raise _Stop
        return super().compose_node(None, 0)

    def _check_keys(self, node: yaml.MappingNode) -> None:
        first: dict[str, Any] = {}
        for key, _ in node.value:
            mark = key.start_mark
            if not isinstance(key, yaml.ScalarNode) or len(key.value) > MAX_KEY:
                self.refuse(mark, "Y113", f"a key is a text of at most {MAX_KEY} characters")
            elif _merges(key):
                self.refuse(mark, "Y110", "merge keys ('<<') are refused; write the values out")
            elif key.value in first:
                at = first[key.value]
                self.refuse(
                    mark,
                    "Y108",
                    f"key '{shortened(key.value)}' stands twice; "
                    f"first at line {at.line + 1}, column {at.column + 1}",
                )
            else:
                first[key.value] = mark

    def _check_scalar(self, node: yaml.ScalarNode) -> None:
        if is_number(node) and len(node.value) > MAX_DIGITS:
            self.refuse(node.start_mark, "Y114", f"a number of more than {MAX_DIGITS} digits")
        if any("\ud800" <= char <= "\udfff" for char in node.value):
            self.refuse(node.start_mark, "Y101", "an escape stands for half a character")


def _merges(key: yaml.ScalarNode) -> bool:
    return key.value == "<<" and key.style is None


def _resolver(kind: str, pattern: str, first: str) -> None:
    _Loader.add_implicit_resolver(_TAG + kind, re.compile(rf"(?:{pattern})\Z"), [*first])


_resolver("bool", "true|True|TRUE|false|False|FALSE", "tTfF")
_resolver("int", r"[-+]?[0-9]+|0o[0-7]+|0x[0-9a-fA-F]+", "-+0123456789")
_resolver(
    "float",
    r"[-+]?(?:\.[0-9]+|[0-9]+(?:\.[0-9]*)?)(?:[eE][-+]?[0-9]+)?"
    r"|[-+]?\.(?:inf|Inf|INF)|\.(?:nan|NaN|NAN)",
    "-+.0123456789",
)
_Loader.add_implicit_resolver(_TAG + "null", re.compile(r"(?:~|null|Null|NULL|)\Z"), [*"~nN", ""])


def _children(node: yaml.Node) -> Iterator[yaml.Node]:
    if isinstance(node, yaml.SequenceNode):
        yield from node.value
    elif isinstance(node, yaml.MappingNode):
        for key, value in node.value:
            yield key
            yield value


def read_document(text: str, report: Report) -> yaml.MappingNode | None:
    """Return the one mapping that a recipe's text holds; report what is wrong with the YAML.

    Values may be looked at although there were problems, unless None is returned.
    """
    path = report.path
    start = Place(path, 1, 1)
    if len(text) > MAX_BYTES:
        report.error(start, "Y102", f"a recipe holds at most {MAX_BYTES:,} characters")
        return None
    if strange := _FORBIDDEN.search(text, 1 if text.startswith("\ufeff") else 0):
        place = _end_of(text[: strange.start()].removeprefix("\ufeff"), path)
        code_point = f"U+{ord(strange[0]):04X}"
        report.error(place, "Y101", f"character {code_point} has no place in a recipe; remove it")
        return None
    loader = _Loader(text, report)
    try:
        loader.get_event()  # type: ignore[no-untyped-call]
        root: Any = None
        if not loader.check_event(yaml.StreamEndEvent):
            root = loader.compose_document()
        if root is None or (isinstance(root, yaml.ScalarNode) and not root.value):
            report.error(start, "Y103", "the file is empty; a recipe begins with 'recipe: NAME'")
            return None
        if not loader.check_event(yaml.StreamEndEvent):
            second: Any = loader.peek_event()  # type: ignore[no-untyped-call]
            mark = second.start_mark
            loader.refuse(mark, "Y106", "a second document begins; a recipe is one document")
    except _Stop:
        return None
    except yaml.MarkedYAMLError as error:
        _report_syntax(error, text, report)
        return None
    except (ValueError, OverflowError, IndexError, yaml.YAMLError):
        # PyYAML's own slips, such as an escape beyond the last character of Unicode.
        mark = loader.get_mark()
        report.error(Place(path, mark.line + 1, mark.column + 1), "Y104", "not YAML from here on")
        return None
    finally:
        loader.dispose()
    if not isinstance(root, yaml.MappingNode):
        report.error(
            place_of(root, path),
            "Y107",
            f"a recipe is a mapping that begins with 'recipe: NAME' (found {found(root)})",
        )
        return None
    return root


def _report_syntax(error: yaml.MarkedYAMLError, text: str, report: Report) -> None:
    said = error.problem or "not YAML"
    mark = error.problem_mark or error.context_mark
    if "could not find expected ':'" in said and error.context_mark is not None:
        mark = error.context_mark  # the key itself; the parser notices on a later line
    line, column = (mark.line, mark.column) if mark else (0, 0)
    place = Place(report.path, line + 1, column + 1)
    lines = re.split("\r\n|\r|\n", text)
    here = lines[line] if line < len(lines) else ""
    indented_by_tab = "\t" in here[: column + 1] and not here[: column + 1].strip()
    if indented_by_tab or "'\\t'" in said:
        tab = Place(report.path, line + 1, (here.find("\t") if "\t" in here else column) + 1)
        report.error(tab, "Y105", "a tab stands where spaces are due; indent with spaces")
        return
    if token := re.search(r"found character '(.)' that cannot start any token", said):
        report.error(place, "Y104", f"a text that begins with '{token[1]}' needs quotes")
        return
    message = next((ours for theirs, ours in _PLAIN if theirs in said), said)
    opened = error.context_mark
    if "is not closed" in message and opened is not None:
        message += f" (opened at line {opened.line + 1}, column {opened.column + 1})"
    report.error(place, "Y104", message)


def place_of(node: yaml.Node, path: str) -> Place:
    """Return where a node begins, counted from 1."""
    return Place(path, node.start_mark.line + 1, node.start_mark.column + 1)


def entries(node: yaml.Node | None) -> Iterator[tuple[str, yaml.Node, yaml.Node]]:
    """Yield each key of a mapping as text, its node and its value; nothing for other nodes.

    Keys are always text (``1:`` is the key ``1``); of two equal keys only the first is given.
    """
    seen: set[str] = set()
    if isinstance(node, yaml.MappingNode):
        for key, value in node.value:
            if not isinstance(key, yaml.ScalarNode) or _merges(key):
                continue
            if key.value not in seen:
                seen.add(key.value)
                yield key.value, key, value


def is_null(node: yaml.Node) -> bool:
    """Tell whether nothing stands there."""
    return node.tag == _TAG + "null"


def is_number(node: yaml.Node) -> bool:
    """Tell whether a node is a number."""
    return node.tag in (_TAG + "int", _TAG + "float")


def is_text(node: yaml.Node) -> bool:
    """Tell whether a node is a text."""
    return isinstance(node, yaml.ScalarNode) and not (
        is_null(node) or is_number(node) or node.tag == _TAG + "bool"
    )


def value_of(node: yaml.Node) -> Any:
    """Return what a node means: a dict, a list, or a text, number, bool or None."""
    if isinstance(node, yaml.MappingNode):
        return {name: value_of(value) for name, _, value in entries(node)}
    if isinstance(node, yaml.SequenceNode):
        return [value_of(item) for item in node.value]
    text: str = node.value
    if node.tag == _TAG + "null":
        return None
    if node.tag == _TAG + "bool":
        return text[0] in "tT"
    if node.tag == _TAG + "int" and len(text) <= MAX_DIGITS:
        base = {"0o": 8, "0x": 16}.get(text[:2], 10)
        return int(text, base)
    if is_number(node):
        return float(re.sub(r"\.(?=inf|nan)", "", text.lower()))
    return text


def shortened(text: str) -> str:
    """Return a text of at most 60 characters, on one line."""
    line = " ".join(text.split())
    return line if len(line) <= 60 else line[:57] + "..."


def found(node: yaml.Node) -> str:
    """Return how a message names what stands there."""
    if isinstance(node, yaml.MappingNode):
        return "a mapping"
    if isinstance(node, yaml.SequenceNode):
        return f"a list of {len(node.value)}"
    if is_null(node):
        return "nothing"
    text = shortened(node.value)
    assert isinstance(node, yaml.ScalarNode)
    return f"'{text}'" if not text or node.style in ("'", '"') else text


def places_below(node: yaml.Node | None, path: str, prefix: str = "") -> dict[str, Place]:
    """Return where each value below a node stands: dotted name -> place."""
    places: dict[str, Place] = {}
    children: list[tuple[str, yaml.Node]] = []
    if isinstance(node, yaml.MappingNode):
        children = [(name, value) for name, _, value in entries(node)]
    elif isinstance(node, yaml.SequenceNode):
        children = [(str(index), value) for index, value in enumerate(node.value)]
    for name, value in children:
        places[prefix + name] = place_of(value, path)
        places |= places_below(value, path, f"{prefix}{name}.")
    return places
