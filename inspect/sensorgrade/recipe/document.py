"""YAML text into a tree that remembers lines, with everything dangerous in YAML refused.

Only mappings, lists and scalars are known. Scalars stay text: what they mean is decided by the
key they stand under, so that ``no``, ``1e3`` or ``12:30`` are never guessed at. Anchors, aliases
and tags are refused (they build exponentially large documents or objects), as are duplicate keys.
"""

import re
from collections.abc import Iterator
from dataclasses import dataclass
from typing import NoReturn

import yaml

from sensorgrade.errors import RecipeError

LONGEST = 1 << 20  # characters of one recipe
DEEPEST = 12  # levels of nesting; a recipe with everything in it has 6
MOST_PROBLEMS = 200  # told of one document
LONGEST_SENTENCE = 1000  # characters of one message
MOST_NODES = 50_000  # keys and values of one document

TABBED = re.compile(r"^[ ]*\t", re.MULTILINE)
PLAIN_NUMBER = re.compile(r"[+-]?[0-9.]{1,20}")
BARE_AT_LEAST = re.compile(r"[:,\-\[]\s+>=")


@dataclass(frozen=True, slots=True)
class Scalar:
    """Text of one value. ``plain`` is False when it was quoted or a block of lines."""

    text: str
    plain: bool
    line: int

    @property
    def empty(self) -> bool:
        """Whether the value says nothing: left out, ``~`` or ``null``."""
        return self.plain and self.text in ("", "~", "null")


@dataclass(frozen=True, slots=True)
class Listing:
    """The items of a list; ``line`` is that of its first."""

    items: tuple["Node", ...]
    line: int


@dataclass(frozen=True, slots=True)
class Entry:
    """One key of a mapping with the line it stands on, and its value."""

    line: int
    value: "Node"


@dataclass(frozen=True, slots=True)
class Mapping:
    """Keys in the order written."""

    entries: dict[str, Entry]
    line: int


Node = Scalar | Listing | Mapping


class Problems:
    """The mistakes found so far in one document; each is a line number and a sentence."""

    def __init__(self, path: str) -> None:
        self.path = path
        self._found: list[tuple[int, str]] = []

    def __len__(self) -> int:
        return len(self._found)

    def add(self, line: int, where: str, sentence: str) -> None:
        """Note a mistake at ``line`` in the key ``where`` (dotted, empty for the document).

        Raises
        ------
        RecipeError
            There are `MOST_PROBLEMS`: nobody reads more at once.
        """
        whole = f"{where}: {sentence}" if where else sentence
        self._found.append((line, printable(whole, LONGEST_SENTENCE)))
        if len(self._found) >= MOST_PROBLEMS:
            raise self.error()

    def error(self) -> RecipeError:
        """All mistakes, in the order of lines."""
        return RecipeError(
            tuple(
                f"{self.path}:{line}  {sentence}"
                for line, sentence in sorted(self._found, key=lambda found: found[0])
            )
        )


def joined(where: str, key: str) -> str:
    """The dotted path of a key, safe to print whatever the key holds."""
    shown = printable(key)
    return f"{where}.{shown}" if where else shown


def printable(text: str, longest: int = 60) -> str:
    """Text fit for one line of a terminal: control characters escaped, the middle cut."""
    clean = "".join(c if c.isprintable() else f"\\u{ord(c):04x}" for c in text)
    return clean if len(clean) <= longest else f"{clean[: longest - 10]}…{clean[-9:]}"


def shown(node: Node) -> str:
    """The value as a message quotes it."""
    if isinstance(node, Mapping):
        return "a mapping"
    if isinstance(node, Listing):
        return "a list"
    if node.empty:
        return "nothing"
    bare = node.plain and PLAIN_NUMBER.fullmatch(node.text)
    return node.text if bare else f'"{printable(node.text, 40)}"'


def document(text: str, problems: Problems) -> Node:
    """The tree of one YAML document.

    Duplicate keys and keys that are not text are noted in ``problems`` and the first is kept.

    Raises
    ------
    RecipeError
        The text is not a YAML document that this reader accepts; nothing more can be said of it.
    """
    if len(text) > LONGEST:
        problems.add(1, "", f"longer than {LONGEST} characters; a recipe is a few pages at most")
        raise problems.error()
    tab = TABBED.search(text)
    if tab is not None:
        line = text.count("\n", 0, tab.start()) + 1
        problems.add(line, "", "a tab in the indentation; indent with spaces")
        raise problems.error()
    events = _events(text, problems)
    root = _tree(next(events), events, problems, "", 1)
    for _ in events:  # to the end, so that what follows the document is read and judged as well
        pass
    return root


def _events(text: str, problems: Problems) -> Iterator[yaml.Event]:
    """The parser's events that make nodes; its complaints become one sentence with a line."""
    count = 0
    documents = 0
    try:
        for event in yaml.parse(text, Loader=yaml.SafeLoader):
            if isinstance(event, yaml.DocumentStartEvent):
                documents += 1
                if documents > 1:
                    _refuse(problems, _line(event), "a second document; one file holds one recipe")
            if isinstance(event, yaml.NodeEvent):
                _judge(event, problems)
            elif not isinstance(event, yaml.CollectionEndEvent):
                continue
            count += 1
            if count > MOST_NODES:
                _refuse(problems, _line(event), f"more than {MOST_NODES} values; no recipe has")
            yield event
    except yaml.MarkedYAMLError as error:
        mark = error.problem_mark or error.context_mark
        line = mark.line + 1 if mark else 1
        _refuse(problems, line, _syntax(error.problem or "", text, line))
    except yaml.reader.ReaderError as error:
        line = text.count("\n", 0, error.position) + 1
        found = f"U+{error.character:04X}"
        _refuse(problems, line, f"character {found} cannot stand in YAML; remove it")
    except (ValueError, OverflowError):  # chr() of an escape such as "\UFFFFFFFF", inside PyYAML
        _refuse(problems, 1, "an escape in double quotes names no character; use single quotes")
    if documents == 0:
        _refuse(
            problems, 1, "the file is empty; 'sensorgrade recipes show' prints one to start from"
        )


def _line(event: yaml.Event) -> int:
    mark = event.start_mark
    return mark.line + 1 if mark else 1


def _judge(event: yaml.NodeEvent, problems: Problems) -> None:
    """Refuse what YAML can do and recipes must not."""
    if event.anchor is not None:
        _refuse(
            problems,
            _line(event),
            f'"{printable(event.anchor, 20)}" is a YAML anchor or alias, which recipes do not use;'
            " write the value out, or quote text that starts with & or *",
        )
    tag = getattr(event, "tag", None)  # an alias has none
    if tag is not None:
        _refuse(
            problems,
            _line(event),
            f'"{printable(tag, 30)}" is a YAML tag, which recipes do not use; leave it out, or'
            " quote text that starts with !",
        )


def _refuse(problems: Problems, line: int, sentence: str) -> NoReturn:
    problems.add(line, "", sentence)
    raise problems.error()


def _syntax(problem: str, text: str, line: int) -> str:
    """What is wrong with the YAML, in words that say what to do."""
    lines = text.splitlines()
    written = lines[line - 1] if line <= len(lines) else ""
    if BARE_AT_LEAST.search(written):
        return 'a value that starts with > must be quoted: ">= 5 electron"'
    if "\t" in written:
        return "a tab where YAML allows only spaces; use spaces"
    if "mapping values are not allowed" in problem:
        return "a colon where none can stand; check the indentation, or quote text that holds ': '"
    return f"not YAML ({printable(problem, 80)}); check quotes, brackets and indentation"


def _tree(
    event: yaml.Event, events: Iterator[yaml.Event], problems: Problems, where: str, depth: int
) -> Node:
    """The node that starts with ``event``; takes what belongs to it from ``events``."""
    line = _line(event)
    if isinstance(event, yaml.ScalarEvent):
        if any(0xD800 <= ord(c) <= 0xDFFF for c in event.value):
            _refuse(problems, line, "an escape in double quotes names half a character; correct it")
        return Scalar(event.value, event.style is None, line)
    if depth > DEEPEST:
        _refuse(problems, line, f"nested deeper than {DEEPEST} levels; this is no recipe")
    if isinstance(event, yaml.SequenceStartEvent):
        items: list[Node] = []
        while not isinstance(event := next(events), yaml.SequenceEndEvent):
            items.append(_tree(event, events, problems, f"{where}[{len(items)}]", depth + 1))
        return Listing(tuple(items), line)
    entries: dict[str, Entry] = {}
    while not isinstance(event := next(events), yaml.MappingEndEvent):
        key = _tree(event, events, problems, where, depth + 1)
        name = key.text if isinstance(key, Scalar) else ""
        value = _tree(next(events), events, problems, joined(where, name), depth + 1)
        if not isinstance(key, Scalar) or key.empty:
            problems.add(key.line, where, f"expected text before the colon, found {shown(key)}")
        elif name in entries:
            problems.add(
                key.line,
                joined(where, name),
                f"stated twice, first in line {entries[name].line}; keep one",
            )
        else:
            entries[name] = Entry(key.line, value)
    return Mapping(entries, line)
