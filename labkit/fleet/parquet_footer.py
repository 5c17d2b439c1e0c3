"""How much a parquet file says it holds, from the bytes of its footer alone.

Arrow tells the same, but ends the process when some numbers of a spoilt footer contradict each other.
The footer is a struct of Thrift's compact protocol; only what is needed of it is kept.
"""

from dataclasses import dataclass
from typing import Any, BinaryIO

_DEEPEST = 20
LENGTHS_FIRST = "DELTA_LENGTH_BYTE_ARRAY"
_ENCODINGS = {6: LENGTHS_FIRST, 7: "DELTA_BYTE_ARRAY", 2: "DICTIONARY", 8: "DICTIONARY"}
_TEXTS = (6, 7)  # physical types: bytes of any length, and of a fixed one


@dataclass(frozen=True)
class Chunk:
    """A column in a group of rows: its first name, values, bytes when unpacked, and how texts are kept."""

    column: str
    is_text: bool
    values: int
    size: int
    encodings: frozenset[str]


def chunks_of(stream: BinaryIO) -> list[Chunk]:
    """Return what the footer of a file says of each column in each group of rows.

    Raises
    ------
    ValueError
        When there is no such footer.
    """
    end = stream.seek(0, 2)
    if end < 12:
        raise ValueError("too short")
    stream.seek(end - 8)
    tail = stream.read(8)
    length = int.from_bytes(tail[:4], "little")
    if tail[4:] != b"PAR1" or length > end - 12:
        raise ValueError("no footer")
    stream.seek(end - 8 - length)
    try:
        footer = _Compact(stream.read(length)).struct(0)
        return [
            _chunk(column[3]) for group in footer.get(4, []) for column in group.get(1, []) if 3 in column
        ]
    except (LookupError, TypeError, AttributeError):
        raise ValueError("no whole footer") from None


def _chunk(about: dict[int, Any]) -> Chunk:
    encodings = frozenset(_ENCODINGS.get(each, "") for each in about[2]) - {""}
    name = about[3][0].decode("utf-8", "replace")
    return Chunk(name, about[1] in _TEXTS, max(0, about[5]), max(0, about[6]), encodings)


class _Compact:
    """Reads values of Thrift's compact protocol."""

    def __init__(self, content: bytes) -> None:
        self.content = content
        self.at = 0

    def struct(self, depth: int) -> dict[int, Any]:
        if depth > _DEEPEST:
            raise LookupError
        found: dict[int, Any] = {}
        number = 0
        while head := self._byte():
            number = number + (head >> 4) if head >> 4 else self._whole()
            kind = head & 15
            found[number] = kind == 1 if kind in (1, 2) else self._value(kind, depth)
        return found

    def _value(self, kind: int, depth: int) -> Any:
        if depth > _DEEPEST:
            raise LookupError
        if kind in (1, 2, 3):
            return self._byte()
        if kind in (4, 5, 6):
            return self._whole()
        if kind == 7:
            return self._bytes(8)
        if kind == 8:
            return self._bytes(self._varint())
        if kind in (9, 10):
            head = self._byte()
            count = head >> 4 if head >> 4 < 15 else self._varint()
            return [self._value(head & 15, depth + 1) for _ in range(self._fitting(count))]
        if kind == 12:
            return self.struct(depth + 1)
        raise LookupError

    def _fitting(self, count: int) -> int:
        """Return a number of things of a byte or more, when so many may follow."""
        if count > len(self.content) - self.at:
            raise LookupError
        return count

    def _bytes(self, count: int) -> bytes:
        start, self.at = self.at, self.at + self._fitting(count)
        return self.content[start : self.at]

    def _byte(self) -> int:
        self.at += 1
        return self.content[self.at - 1]

    def _varint(self) -> int:
        value = shift = 0
        while True:
            byte = self._byte()
            value |= (byte & 127) << shift
            shift += 7
            if byte < 128:
                return value
            if shift > 63:
                raise LookupError

    def _whole(self) -> int:
        value = self._varint()
        return (value >> 1) ^ -(value & 1)
