"""Spoilt copies of whole inputs, drawn from a seed: bytes, words and numbers that an attacker would write."""

import random
import re
from collections.abc import Iterator, Sequence

# Put in anywhere, whatever the format.
TOKENS = [
    *(b"\0", b"\xff\xfe", b"\xef\xbb\xbf", b"\xc3\x28", b"\xed\xa0\x80", b"\r", b"\n", b"\r\n", b"\t", b" "),
    *(b'"', b"'", b",", b";", b"=", b"-", b"+", b"@", b"#", b"\\", b"/", b"..", b"(", b")", b"[", b"]"),
    *(b"{", b"}", b"nan", b"NaN", b"inf", b"-inf", b"1e999", b"-0", b"0x", b"1e-320", b"true", b"null"),
    *(b"9" * 25, b"-" + b"9" * 400, b"9" * 5000, b"0x" + b"f" * 5000, b"1e" + b"9" * 30, b"2" * 19),
    *(b"9223372036854775808", b"-9223372036854775809", b"4294967295", b"18446744073709551615"),
    *("½".encode(), "\u202e".encode(), "e\u0301".encode(), "٣".encode(), b"\x1b[2J", b"\x85", b"\x1c"),
    *(b"../../etc/passwd", b"/dev/zero", b"{0.__class__}", b"%s%n", b"${HOME}", b"__import__('os')"),
    *(b"[" * 3000, b"(" * 3000, b'{"a":' * 3000, b"-" * 3000, b"a." * 2000, b"x" * 3000, b"1979-05-27"),
    *(b"07:32:00", b"2031-05-02T08:30:00Z", b"P1D", b'"""', b"'''", b"\n[a]\n", b"\nx=1\n", b"option_3"),
]
_WORD = re.compile(rb"[A-Za-z0-9_.+-]+")
_NUMBER = re.compile(rb"-?[0-9]+(?:\.[0-9]+)?")


class Mutants:
    """Mutants of some seeds; `keep` adds one that is worth spoiling further.

    Parameters
    ----------
    seeds : sequence of bytes
        Whole inputs.
    number : int
        The seed of all draws.
    tokens : sequence of bytes
        What is put in, besides what the seeds hold.
    """

    def __init__(self, seeds: Sequence[bytes], number: int, tokens: Sequence[bytes] = ()) -> None:
        self.random = random.Random(number)
        self.pool = list(seeds)
        self.tokens = [*TOKENS, *tokens, *tokens]
        self.kinds = [
            *(self._flip, self._byte, self._cut, self._drop, self._double, self._insert, self._splice),
            *(self._word, self._word, self._word, self._number, self._swap, self._line, self._repeat),
        ]

    def draw(self) -> bytes:
        """Return the next mutant: one to four changes of a seed."""
        content = self.random.choice(self.pool)
        for _ in range(self.random.choice((1, 1, 1, 2, 2, 3, 4))):
            content = self.random.choice(self.kinds)(content)
        return content

    def keep(self, content: bytes) -> None:
        """Spoil this one further, too."""
        self.pool.append(content)

    def _at(self, content: bytes) -> int:
        return self.random.randrange(len(content) + 1)

    def _span(self, content: bytes) -> tuple[int, int]:
        start = self._at(content)
        return start, min(len(content), start + self.random.choice((1, 2, 4, 8, 32, 200)))

    def _flip(self, content: bytes) -> bytes:
        if not content:
            return content
        at = self.random.randrange(len(content))
        return content[:at] + bytes([content[at] ^ 1 << self.random.randrange(8)]) + content[at + 1 :]

    def _byte(self, content: bytes) -> bytes:
        if not content:
            return content
        at = self.random.randrange(len(content))
        return content[:at] + bytes([self.random.choice((0, 1, 127, 128, 255, 10, 44))]) + content[at + 1 :]

    def _cut(self, content: bytes) -> bytes:
        at = self._at(content)
        return content[:at] if self.random.random() < 0.7 else content[at:]

    def _drop(self, content: bytes) -> bytes:
        start, end = self._span(content)
        return content[:start] + content[end:]

    def _double(self, content: bytes) -> bytes:
        start, end = self._span(content)
        return content[:end] + content[start:end] * self.random.choice((1, 1, 3, 50)) + content[end:]

    def _insert(self, content: bytes) -> bytes:
        at = self._at(content)
        return content[:at] + self.random.choice(self.tokens) + content[at:]

    def _splice(self, content: bytes) -> bytes:
        other = self.random.choice(self.pool)
        start, end = self._span(other)
        at, after = self._span(content)
        return content[:at] + other[start:end] + content[self.random.choice((at, after)) :]

    def _replace(self, content: bytes, pattern: re.Pattern[bytes], new: bytes) -> bytes:
        found = list(pattern.finditer(content))
        if not found:
            return content + new
        one = self.random.choice(found)
        return content[: one.start()] + new + content[one.end() :]

    def _word(self, content: bytes) -> bytes:
        return self._replace(content, _WORD, self.random.choice(self.tokens))

    def _number(self, content: bytes) -> bytes:
        size = self.random.choice((0, 1, 2, 3, 31, 32, 53, 63, 64, 200, 1100))
        number = (1 << size) + self.random.randrange(-1, 2)
        new = b"%d" % (number * self.random.choice((1, -1)))
        return self._replace(content, _NUMBER, new + self.random.choice((b"", b"", b".5", b"e9", b"e-400")))

    def _swap(self, content: bytes) -> bytes:
        words = list(_WORD.finditer(content))
        if len(words) < 2:
            return content
        one, other = sorted(self.random.sample(words, 2), key=lambda word: word.start())
        middle = content[one.end() : other.start()]
        return content[: one.start()] + other[0] + middle + one[0] + content[other.end() :]

    def _line(self, content: bytes) -> bytes:
        lines = content.split(b"\n")
        at = self.random.randrange(len(lines))
        if self.random.random() < 0.5:
            del lines[at]
        else:
            lines.insert(self.random.randrange(len(lines) + 1), lines[at])
        return b"\n".join(lines)

    def _repeat(self, content: bytes) -> bytes:
        return content * self.random.choice((2, 3)) if len(content) < 4000 else content


def mutants(seeds: Sequence[bytes], number: int, count: int, tokens: Sequence[bytes] = ()) -> Iterator[bytes]:
    """Yield `count` mutants of some seeds."""
    source = Mutants(seeds, number, tokens)
    for _ in range(count):
        yield source.draw()
