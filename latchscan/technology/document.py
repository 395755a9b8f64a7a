"""YAML text in, plain data with the place of every key and value out.

This is the one door to the YAML library.  It takes a strict subset that reads the same in
every YAML version: mappings with plain text keys, lists, text, decimal numbers, ``true``
and ``false``.  What other parsers would quietly turn into something else (``010`` into 8,
``12:30`` into 750, a second equal key into the first) is a problem here, not a value.
"""

from __future__ import annotations

import re
from dataclasses import dataclass, field
from typing import TypeAlias

import yaml

Path: TypeAlias = tuple[str | int, ...]
"""Keys and list places from the top of the file to a value."""
Scalar: TypeAlias = str | int | float | bool
Data: TypeAlias = "Scalar | tuple[Data, ...] | dict[str, Data] | None"

MAX_BYTES = 250_000
"""A technology file is a few kilobytes; a larger file is something else."""
MAX_NODES = 5_000
"""Values after aliases are followed: a few hundred bytes of aliases can stand for millions."""
MAX_DEPTH = 30


@dataclass(frozen=True, slots=True, kw_only=True)
class FileKind:
    """What a file is called in messages and how large one may be.

    Attributes
    ----------
    noun
        What the file holds.
    most_bytes, most_nodes
        Bytes, and values after aliases are followed, beyond which it is something else.
    """

    noun: str
    most_bytes: int
    most_nodes: int


TECHNOLOGY_FILE = FileKind(noun="technology", most_bytes=MAX_BYTES, most_nodes=MAX_NODES)

_LONGEST_INTEGER = 18

_TAG = "tag:yaml.org,2002:"
_DECIMAL = re.compile(r"[-+]?(?:[0-9]+\.?[0-9]*|\.[0-9]+)(?:[eE][-+]?[0-9]+)?\Z")
_OCTAL = re.compile(r"[-+]?0[0-9]+\Z")
_OPENING = re.compile(r"(?:[!&]\S*\s+)*(?:(?P<quote>['\"])|[|>][^\n]*\n)?")
"""What stands before the text of a scalar: tag, anchor, quote, block header."""
_HALF_CHARACTER = re.compile("[\ud800-\udfff]")
"""An escape may spell half of a pair that stands for one character."""
_NOT_FINITE = {".inf": float("inf"), ".nan": float("nan")}


@dataclass(frozen=True, slots=True, order=True)
class Place:
    """Line and column in the file, both counted from 1."""

    line: int
    column: int


Found: TypeAlias = tuple[Place, Path, str]
"""Place, path and message of a problem."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Slip:
    """Something wrong with the text itself, before any meaning is given to it."""

    place: Place
    path: Path
    message: str


@dataclass(slots=True, kw_only=True, eq=False)
class Document:
    """What a text holds and where.

    Attributes
    ----------
    data
        The values; None where the text cannot be read at all.
    slips
        What is wrong with the text.
    blank
        Paths of the values that a slip makes unusable; they are None in `data`.
    keys, values
        Place of the key and of the value of every path.
    plain
        Raw text of every scalar that stands without quotes.
    text
        The whole text without a byte order mark.
    spans
        First and last index in `text` of every scalar.
    kind
        What the file ought to be.
    """

    kind: FileKind = TECHNOLOGY_FILE
    text: str = ""
    data: Data = None
    slips: list[Slip] = field(default_factory=list)
    blank: set[Path] = field(default_factory=set)
    keys: dict[Path, Place] = field(default_factory=dict)
    values: dict[Path, Place] = field(default_factory=dict)
    plain: dict[Path, str] = field(default_factory=dict)
    spans: dict[Path, tuple[int, int]] = field(default_factory=dict)

    def place_in_scalar(self, path: Path, column: int) -> Place:
        """Place in the file of a character of a text value.

        Parameters
        ----------
        path
            Path of the text value.
        column
            The character's place in the value, from 1; one more than its length for its end.

        Notes
        -----
        A value may be quoted or folded over lines, so the characters are counted without
        the spaces between them, which is all that folding changes.
        """
        first, last = self.spans[path]
        opening = _OPENING.match(self.text, first, last)
        if opening is not None:
            first = opening.end()
            last -= 1 if opening["quote"] else 0
        value = self._value(path)
        before = sum(not character.isspace() for character in value[: column - 1])
        solid = [i for i in range(first, last) if not self.text[i].isspace()]
        if before < len(solid):
            return self._place(solid[before])
        return self._place(solid[-1] + 1 if solid else first)

    def _value(self, path: Path) -> str:
        value = self.data
        for part in path:
            if isinstance(value, dict):
                value = value[str(part)]
            elif isinstance(value, tuple):
                value = value[int(part)]
        return value if isinstance(value, str) else ""

    def _place(self, index: int) -> Place:
        line_start = self.text.rfind("\n", 0, index) + 1
        return Place(self.text.count("\n", 0, index) + 1, index - line_start + 1)


def read_document(content: str | bytes, kind: FileKind = TECHNOLOGY_FILE) -> Document:
    """Data and places of a YAML text; never raises for what the text holds."""
    document = Document(kind=kind)
    text = _decoded(content, document)
    if text is None:
        return document
    # One kind of line end, so that places and indices agree everywhere.
    document.text = text.removeprefix("\ufeff").replace("\r\n", "\n").replace("\r", "\n")
    root = _root(document)
    if root is not None:
        _Walk(document).root(root)
    return document


def _slip(document: Document, place: Place, message: str, path: Path = ()) -> None:
    document.slips.append(Slip(place=place, path=path, message=message))


def _decoded(content: str | bytes, document: Document) -> str | None:
    kind = document.kind
    if len(content) > kind.most_bytes:
        message = f"larger than {kind.most_bytes} bytes, expected a {kind.noun} file"
        _slip(document, Place(1, 1), message)
        return None
    if isinstance(content, str):
        return content
    try:
        return content.decode("utf-8")
    except UnicodeDecodeError as error:
        before = content[: error.start].decode("utf-8")
        place = Place(before.count("\n") + 1, len(before) - (before.rfind("\n") + 1) + 1)
        byte = content[error.start]
        _slip(document, place, f"byte 0x{byte:02x} is not UTF-8 text, expected a UTF-8 file")
        return None


def _root(document: Document) -> yaml.Node | None:
    """Compose the node tree, after its size and depth are known to be harmless."""
    try:
        if not _is_small(document):
            return None
        root: yaml.Node | None = yaml.compose(document.text, Loader=yaml.SafeLoader)
    except yaml.MarkedYAMLError as error:
        mark = error.problem_mark or error.context_mark
        place = Place(1, 1) if mark is None else Place(mark.line + 1, mark.column + 1)
        what = " ".join(part for part in (error.context, error.problem) if part)
        _slip(document, place, f"not YAML: {one_line(' '.join(what.split()), 200)}")
        return None
    except yaml.reader.ReaderError as error:
        place = document._place(error.position)
        _slip(document, place, f"character {error.character:#06x} is not allowed in YAML")
        return None
    except (yaml.YAMLError, ValueError, OverflowError) as error:
        # The library lets Python's own errors through for absurd escapes and versions.
        _slip(document, Place(1, 1), f"not YAML: {one_line(str(error))}")
        return None
    if root is None:
        _slip(document, Place(1, 1), f"the file is empty, expected a {document.kind.noun}")
    return root


def _is_small(document: Document) -> bool:
    """Whether values are few and not nested deep; the composer is slow and recursive."""
    depth = nodes = 0
    for event in yaml.parse(document.text, Loader=yaml.SafeLoader):
        if isinstance(event, (yaml.MappingStartEvent, yaml.SequenceStartEvent)):
            depth += 1
        elif isinstance(event, (yaml.MappingEndEvent, yaml.SequenceEndEvent)):
            depth -= 1
        if depth > MAX_DEPTH:
            place = _place_of(event)
            _slip(document, place, f"nested too deep, expected at most {MAX_DEPTH} levels")
            return False
        nodes += isinstance(event, yaml.NodeEvent)
        most = document.kind.most_nodes
        if nodes > 2 * most:
            _slip(document, _place_of(event), f"more than {most} keys and values")
            return False
    return True


class _Walk:
    """One walk over the node tree, filling a document."""

    def __init__(self, document: Document) -> None:
        self.document = document
        self.nodes = 0

    def root(self, node: yaml.Node) -> None:
        self.document.data = self.value(node, ())

    def slip(self, node: yaml.Node, path: Path, message: str) -> None:
        _slip(self.document, _place_of(node), message, path)

    def blank(self, node: yaml.Node, path: Path, message: str) -> None:
        self.slip(node, path, message)
        self.document.blank.add(path)

    def value(self, node: yaml.Node, path: Path) -> Data:
        self.nodes += 1
        kind = self.document.kind
        if self.nodes == kind.most_nodes + 1:
            message = f"more than {kind.most_nodes} values, expected a {kind.noun} file"
            self.slip(node, path, message)
        # An alias to one of its own parents ends here too: the path only ever grows.
        if self.nodes > kind.most_nodes:
            self.document.blank.add(path)
            return None
        if len(path) > MAX_DEPTH:
            self.document.blank.add(path)
            self.slip(node, path[:3], f"nested deeper than {MAX_DEPTH} levels by an alias")
            return None
        self.document.values[path] = _place_of(node)
        if isinstance(node, yaml.MappingNode):
            return self.mapping(node, path)
        if isinstance(node, yaml.SequenceNode):
            if node.tag != f"{_TAG}seq":
                self.blank(node, path, f"tag {_shown_tag(node)} is not supported")
                return None
            return tuple(self.value(item, (*path, i)) for i, item in enumerate(node.value))
        return self.scalar(node, path) if isinstance(node, yaml.ScalarNode) else None

    def mapping(self, node: yaml.MappingNode, path: Path) -> Data:
        if node.tag != f"{_TAG}map":
            self.blank(node, path, f"tag {_shown_tag(node)} is not supported")
            return None
        data: dict[str, Data] = {}
        for key_node, value_node in node.value:
            if not isinstance(key_node, yaml.ScalarNode):
                self.slip(key_node, path, "a key must be plain text, got a list or mapping")
                continue
            key = key_node.value
            if _HALF_CHARACTER.search(key):
                self.slip(key_node, path, f"{shown_text(key)} is no valid text, expected a key")
                continue
            here = (*path, key)
            if key_node.tag == f"{_TAG}merge":
                self.slip(key_node, here, "merge keys are not supported, expected keys in full")
                continue
            if here in self.document.keys:
                first = self.document.keys[here].line
                self.slip(key_node, here, f"key given twice, first in line {first}")
                continue
            self.document.keys[here] = _place_of(key_node)
            data[key] = self.value(value_node, here)
        return data

    def scalar(self, node: yaml.ScalarNode, path: Path) -> Scalar | None:
        text: str = node.value
        kind = node.tag.removeprefix(_TAG)
        self.document.spans[path] = (node.start_mark.index, node.end_mark.index)
        if node.style is None:
            self.document.plain[path] = text
        if kind in {"int", "float"}:
            return self.number(node, path)
        if kind == "null":
            self.blank(node, path, "no value, expected one or no such key")
            return None
        if kind == "bool" and text.lower() in {"true", "false"}:
            return text.lower() == "true"
        # `on`, `off`, `yes`, `no` and dates are text, as YAML 1.2 has them.
        if kind in {"str", "bool", "timestamp", "value", "merge"}:
            return text
        self.blank(node, path, f"tag {_shown_tag(node)} is not supported")
        return None

    def number(self, node: yaml.ScalarNode, path: Path) -> Scalar | None:
        text: str = node.value
        if _OCTAL.match(text):
            decimal = text.replace("+", "").replace("-", "").lstrip("0") or "0"
            what = f"{one_line(text)} starts with 0 and is octal to YAML"
            self.blank(node, path, f"{what}, expected {one_line(decimal)}")
            return None
        signless = text.lstrip("+-").lower()
        if signless in _NOT_FINITE:
            return _NOT_FINITE[signless]
        if not _DECIMAL.match(text):
            shown = shown_text(text)
            self.blank(node, path, f"{shown} is not a plain decimal number such as 12.5")
            return None
        if text.lstrip("+-").isdigit() and len(text) <= _LONGEST_INTEGER:
            return int(text)
        return float(text)


def _place_of(item: yaml.Node | yaml.Event) -> Place:
    mark = item.start_mark
    return Place(1, 1) if mark is None else Place(mark.line + 1, mark.column + 1)


def _shown_tag(node: yaml.Node) -> str:
    return shown_text(str(node.tag).replace(_TAG, "!!"))


def one_line(text: str, longest: int = 60) -> str:
    """User's text, cut and escaped so that it is safe to print in one line."""
    cut = text if len(text) <= longest else f"{text[: longest - 3]}..."
    return cut if cut.isprintable() else ascii(cut)[1:-1]


def shown_text(text: str) -> str:
    """User's text in backticks, safe to print in one line."""
    return f"`{one_line(text)}`"


def looks_decimal(text: str) -> bool:
    """Whether a person would read the text as a decimal number."""
    return _DECIMAL.match(text) is not None
