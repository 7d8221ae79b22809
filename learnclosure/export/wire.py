"""Reading the bytes of a graph before any library is allowed to.

A parser builds objects for whatever a file holds: a few megabytes of empty messages become
gigabytes, a field given twice is merged, and unknown fields are carried along. So the bytes
are first walked through by the rules of the protobuf wire format (Protocol Buffers
documentation, "Encoding"), against a closed list of the fields of ``onnx.proto`` that an
exported graph uses. Nothing is built meanwhile.
"""

from __future__ import annotations

import re
from typing import NamedTuple, NoReturn

from learnclosure.export.checks import RefusalError

VARINT, FIXED_64, TEXT, FIXED_32 = 0, 1, 2, 5
LARGEST_FIELDS = 400_000
"""Most fields in a file, lists of integers in attributes not counted one by one."""
LARGEST_NODES = 20_000
LARGEST_LISTS = 16 << 20
"""Most bytes of all lists of integers together."""
LARGEST_TEXT = 1 << 16
LARGEST_RANK = 8
LARGEST_SHIFT = 63


class Field(NamedTuple):
    """A field that may occur in a message.

    Attributes
    ----------
    wire : int
        Its wire type.
    message : str
        Kind of message inside, empty if none.
    most : int
        How often it may occur.
    largest : int
        ``LARGEST_TEXT``, or ``RAW`` for bytes that are no text.
    """

    wire: int
    message: str = ""
    most: int = 1
    largest: int = LARGEST_TEXT


MANY = LARGEST_NODES
RAW = 1 << 40
"""Largest size of what holds numbers, not text; the file itself bounds it."""
FIELDS: dict[str, dict[int, Field]] = {
    "model": {
        1: Field(VARINT),
        2: Field(TEXT),
        3: Field(TEXT),
        4: Field(TEXT),
        5: Field(VARINT),
        6: Field(TEXT),
        7: Field(TEXT, "graph"),
        8: Field(TEXT, "operator set", 16),
        14: Field(TEXT, "property", 1024),
    },
    "operator set": {1: Field(TEXT), 2: Field(VARINT)},
    "property": {1: Field(TEXT), 2: Field(TEXT)},
    "graph": {
        1: Field(TEXT, "node", MANY),
        2: Field(TEXT),
        5: Field(TEXT, "constant", MANY),
        10: Field(TEXT),
        11: Field(TEXT, "value", 1024),
        12: Field(TEXT, "value", 1024),
    },
    "node": {
        1: Field(TEXT, most=1024),
        2: Field(TEXT, most=1024),
        3: Field(TEXT),
        4: Field(TEXT),
        5: Field(TEXT, "attribute", 64),
        6: Field(TEXT),
        7: Field(TEXT),
    },
    "attribute": {
        1: Field(TEXT),
        3: Field(VARINT),
        5: Field(TEXT, "constant"),
        8: Field(VARINT, most=1 << 40),
        13: Field(TEXT),
        20: Field(VARINT),
    },
    "constant": {
        1: Field(VARINT, most=LARGEST_RANK),
        2: Field(VARINT),
        8: Field(TEXT),
        9: Field(TEXT, largest=RAW),
        12: Field(TEXT),
    },
    "value": {1: Field(TEXT), 2: Field(TEXT, "type"), 3: Field(TEXT)},
    "type": {1: Field(TEXT, "array type"), 6: Field(TEXT)},
    "array type": {1: Field(VARINT), 2: Field(TEXT, "shape")},
    "shape": {1: Field(TEXT, "dimension", LARGEST_RANK)},
    "dimension": {1: Field(VARINT), 2: Field(TEXT), 3: Field(TEXT)},
}
"""Fields by kind of message and number."""

UNWANTED: dict[tuple[str, int], tuple[str, str]] = {
    ("model", 20): ("training-information", "training information"),
    ("model", 25): ("functions", "functions"),
    ("graph", 13): ("inner-shapes", "declared shapes of inner values"),
    ("graph", 14): ("plain-constants", "quantisation"),
    ("graph", 15): ("plain-constants", "sparse constants"),
    ("node", 8): ("functions", "an overloaded function"),
    ("attribute", 6): ("subgraphs", "a subgraph"),
    ("attribute", 11): ("subgraphs", "subgraphs"),
    ("attribute", 21): ("functions", "a parameter of a function"),
    ("constant", 3): ("plain-constants", "a constant in parts"),
    ("constant", 4): ("plain-constants", "a constant that is not raw"),
    ("constant", 5): ("plain-constants", "a constant that is not raw"),
    ("constant", 6): ("plain-constants", "a constant of texts"),
    ("constant", 7): ("plain-constants", "a constant that is not raw"),
    ("constant", 10): ("plain-constants", "a constant that is not raw"),
    ("constant", 11): ("plain-constants", "a constant that is not raw"),
    ("constant", 13): ("external-data", "a constant that lies outside the file"),
    ("constant", 14): ("external-data", "a constant that lies outside the file"),
}
"""Fields of the format that are known and refused: the rule, and what the graph holds."""

# A list of integers: field 8 of an attribute, once for each integer.
_INTEGERS = re.compile(rb"(?:\x40[\x80-\xff]{0,9}+[\x00-\x7f])++")


def scan_graph(content: bytes) -> str:
    """Walk through a serialised graph and insist on fields from the closed list.

    Parameters
    ----------
    content : bytes

    Returns
    -------
    str
        What was found.

    Raises
    ------
    RefusalError
        If the bytes are cut off or malformed, a field is unknown, unwanted or repeated, or
        there are too many.
    """
    walk = _Walk(content)
    found = walk.message("model", 0, len(content))
    if not found.get(7):
        raise RefusalError("graph-bytes", "not an ONNX model")
    return f"{len(content)} bytes, {walk.fields} fields"


class _Walk:
    def __init__(self, content: bytes) -> None:
        self.content = content
        self.fields = 0
        self.listed = 0

    def message(self, kind: str, place: int, end: int) -> dict[int, int]:
        """Walk through one message and count its fields by number."""
        allowed = FIELDS[kind]
        counts: dict[int, int] = {}
        while place < end:
            start = place
            tag, place = self.varint(place, end)
            number, wire = tag >> 3, tag & 7
            field = allowed.get(number)
            if field is None or field.wire != wire:
                _refuse_field(kind, number)
            counts[number] = counts.get(number, 0) + 1
            self.fields += 1
            if self.fields > LARGEST_FIELDS:
                raise RefusalError("graph-count", f"more than {LARGEST_FIELDS} fields")
            if counts[number] > field.most:
                _refuse_count(kind, number, field)
            if kind == "attribute" and number == 8:
                place = self.integers(start, end)
            elif wire == VARINT:
                _, place = self.varint(place, end)
            else:
                size, place = self.varint(place, end)
                if size > end - place:
                    _refuse_bytes("cut off")
                if field.message:
                    self.message(field.message, place, place + size)
                elif field.largest != RAW:
                    self.text(kind, place, size)
                place += size
        return counts

    def varint(self, place: int, end: int) -> tuple[int, int]:
        """Read one integer; return it and where the next byte is."""
        value = shift = 0
        while True:
            if place >= end or shift > LARGEST_SHIFT:
                _refuse_bytes("cut off" if place >= end else "an integer without end")
            byte = self.content[place]
            place += 1
            value |= (byte & 0x7F) << shift
            if byte < 0x80:
                return value, place
            shift += 7

    def integers(self, place: int, end: int) -> int:
        """Pass over a list of integers; return where the next byte is."""
        match = _INTEGERS.match(self.content, place, end)
        if match is None:
            _refuse_bytes("cut off")
        self.listed += match.end() - place
        if self.listed > LARGEST_LISTS:
            raise RefusalError("graph-count", f"more than {LARGEST_LISTS} bytes of integers")
        return match.end()

    def text(self, kind: str, place: int, size: int) -> None:
        """Insist on a text of bounded size in UTF-8."""
        if size > LARGEST_TEXT:
            raise RefusalError("graph-count", f"a text of {size} bytes in a {kind}")
        try:
            self.content[place : place + size].decode()
        except UnicodeDecodeError:
            _refuse_bytes(f"a {kind} with a text that is not UTF-8")


def _refuse_bytes(found: str) -> NoReturn:
    raise RefusalError("graph-bytes", f"not an ONNX model: {found}")


def _refuse_field(kind: str, number: int) -> NoReturn:
    if (kind, number) in UNWANTED:
        rule, what = UNWANTED[kind, number]
        raise RefusalError(rule, f"holds {what}")
    raise RefusalError("graph-bytes", f"not an ONNX model: field {number} in a {kind}")


def _refuse_count(kind: str, number: int, field: Field) -> NoReturn:
    if field.most == 1:
        raise RefusalError("graph-repeated", f"field {number} of a {kind} stands twice")
    raise RefusalError("graph-count", f"more than {field.most} of field {number} in a {kind}")
