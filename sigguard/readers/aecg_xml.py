"""An HL7 aECG document as a small tree: only what a reader of its waveforms looks at, and nothing unfolded.

Document types and entities are refused by ``defusedxml``; what is kept is bounded in number and
depth, so that a document costs no more memory than a few times its size.
"""

from __future__ import annotations

import warnings
from collections.abc import Iterator
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from sigguard.errors import ReadError
from sigguard.readers import base
from sigguard.readers.base import read_error

ROOT = "AnnotatedECG"
MAX_BYTES = 512 << 20
MAX_ELEMENTS, MAX_DEPTH = 200_000, 100
_CHUNK = 4 << 20
_DIGIT_BLOCK = 1 << 20  # characters turned into numbers at a time
_LONGEST_NUMBER = 100
_SKIPPED = frozenset(("annotationSet", "derivation", "text"))  # nothing in them is a recorded sample
_TEXTS = frozenset(("digits", "name", "family", "given"))  # elements whose characters count


@dataclass(slots=True)
class Node:
    """An element: its local name, its attributes by local name, elements below, characters."""

    tag: str
    attributes: dict[str, str]
    children: list[Node] = field(default_factory=list)
    pieces: list[str] = field(default_factory=list)

    def get(self, name: str) -> str:
        return self.attributes.get(name, "").strip()

    def below(self, *path: str) -> Iterator[Node]:
        """Elements reached by these names, one level each."""
        if not path:
            yield self
            return
        for child in self.children:
            if child.tag == path[0]:
                yield from child.below(*path[1:])

    def first(self, *path: str) -> Node | None:
        return next(self.below(*path), None)

    def all(self, tag: str) -> Iterator[Node]:
        """Elements of this name anywhere below, in the order of the document."""
        waiting = self.children[::-1]
        while waiting:
            node = waiting.pop()
            if node.tag == tag:
                yield node
            waiting += node.children[::-1]

    @property
    def text(self) -> str:
        return " ".join("".join(self.pieces).split())


class _TooMuch(ValueError):
    """More elements or levels than an ECG has."""


class _Builder:
    """Target of the parser."""

    def __init__(self) -> None:
        self.root: Node | None = None
        self._open: list[Node] = []
        self._skipping = 0
        self._count = 0

    def start(self, tag: str, attributes: dict[str, str]) -> None:
        name = _local(tag)
        if self._skipping or name in _SKIPPED:
            self._skipping += 1
            return
        self._count += 1
        if self._count > MAX_ELEMENTS or len(self._open) >= MAX_DEPTH:
            raise _TooMuch(f"more than {MAX_ELEMENTS} elements or {MAX_DEPTH} levels")
        node = Node(name, {_local(key): value for key, value in attributes.items()})
        if self._open:
            self._open[-1].children.append(node)
        else:
            self.root = node
        self._open.append(node)

    def end(self, tag: str) -> None:
        if self._skipping:
            self._skipping -= 1
        else:
            self._open.pop()

    def data(self, text: str) -> None:
        if not self._skipping and self._open and self._open[-1].tag in _TEXTS:
            self._open[-1].pieces.append(text)

    def close(self) -> Node | None:
        return self.root


def _local(name: str) -> str:
    return name.rpartition("}")[2]


def parse(path: Path) -> Node:
    """The document's root. Raises ReadError unless it is a sound aECG without document type or entities."""
    from defusedxml.common import DefusedXmlException  # only once there is such a file
    from defusedxml.ElementTree import DefusedXMLParser

    if path.stat().st_size > MAX_BYTES:
        raise trouble(path, "file", f"at most {MAX_BYTES >> 20} MiB of XML", "more", "send it in parts")
    try:
        parser = DefusedXMLParser(target=_Builder(), forbid_dtd=True)
        with path.open("rb") as file:
            while chunk := file.read(_CHUNK):
                parser.feed(chunk)
        root = parser.close()
    except DefusedXmlException as err:
        raise trouble(
            path,
            "document",
            "XML without a document type or entities",
            "one that declares some",
            "export the recording again",
        ) from err
    except (SyntaxError, ValueError, LookupError, RuntimeError) as err:  # unsound XML, unknown encodings
        raise trouble(
            path, "document", "sound XML", base.reason(err), "the file is damaged or cut: send it again"
        ) from err
    if root is None or root.tag != ROOT:
        found = "no element" if root is None else f"<{root.tag[:40]}>"
        raise trouble(path, "root element", f"<{ROOT}>", found, "send the ECG as HL7 aECG")
    return root


def whole_numbers(node: Node) -> NDArray[np.int64]:
    """The numbers between the tags, read block by block; ValueError where one is no whole number."""
    parts, rest = [], ""
    text = "".join(node.pieces)
    for at in range(0, len(text), _DIGIT_BLOCK):
        block = rest + text[at : at + _DIGIT_BLOCK]
        cut = (
            max(block.rfind(blank) for blank in " \n\t\r") + 1
            if at + _DIGIT_BLOCK < len(text)
            else len(block)
        )
        block, rest = block[:cut], block[cut:]
        if len(rest) > _LONGEST_NUMBER:
            raise ValueError(f"a number of more than {_LONGEST_NUMBER} characters")
        if block.strip():
            parts.append(_whole(block))
    return np.concatenate(parts) if parts else np.empty(0, dtype=np.int64)


def _whole(text: str) -> NDArray[np.int64]:
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("error")  # numpy warns where the text holds something else than numbers
            values = np.fromstring(text, dtype=np.float64, sep=" ")  # decimals such as "12.0" are met
    except DeprecationWarning as err:
        raise ValueError("something else between the numbers") from err
    if not (np.isfinite(values).all() and (np.abs(values) < 2**31).all()):
        raise ValueError("a number that no converter gives")
    out = values.astype(np.int64)
    if (out != values).any():
        raise ValueError("a step that is no whole number")
    return out


def trouble(path: Path, where: str, expected: str, found: str, remedy: str) -> ReadError:
    return read_error(str(path), where=where, expected=expected, found=found, remedy=remedy)
