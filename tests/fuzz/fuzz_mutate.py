"""Files spoilt at random: bytes, lines, cells, header cards and numbers."""

from __future__ import annotations

import gzip
import re
from collections.abc import Callable
from random import Random

__all__ = ["mutate"]

CARD, BLOCK = 80, 2880
# What programs have stumbled over before, whatever the format (common practice).
WORDS = (
    *(b"", b" ", b"0", b"-0", b"-1", b"1", b"nan", b"-nan", b"inf", b"-inf", b"1e999", b"-1e-999"),
    *(b"2147483648", b"-2147483649", b"4294967296", b"9223372036854775807", b"9223372036854775808"),
    *(b"18446744073709551616", b"1e308", b"1" * 400, b"0." + b"0" * 400 + b"1", b"0x1F", b"1_000"),
    *(b"true", b"null", b"None", b"N/A", b"--", b"''", b'"', b'""', b"'", b"\\", b"/", b"../x"),
    *(b"\0", b"\t", b"\r", b"\n", b"\r\n", b"\x0b", b"\x0c", b"\x1b[2J", b"\x7f", b"\x85", b"\xff"),
    *("\u202e".encode(), "\ufeff".encode(), "\u2028".encode(), "\u0663".encode(), "−1".encode()),
    *(
        b"\xed\xa0\x80",
        b"\xc0\xaf",
        b"{",
        b"}",
        b"[",
        b"]",
        b"(",
        b")",
        b"<",
        b">",
        b"&amp;",
        b"%s",
    ),
    *(b"{0}", b"{{7*7}}", b"=1+1", b"@x", b"T", b"F", b",", b";", b":", b"#", b"*", b"&a", b"*a"),
    *(b"END", b"1E", b"1PE(9)", b"0D", b"99999999X", b"J", b"K", b"10A", b"2031-03-14T05:21:60Z"),
    *(b"0000-00-00", b"60000.5", b"2460000.5", b"9999-12-31T23:59:59+18:00", b"(((((((((((((((("),
)
NUMBER = re.compile(rb"[-+]?[0-9]+(?:\.[0-9]*)?(?:[eEdD][-+]?[0-9]+)?")


def _at(rng: Random, data: bytes) -> int:
    return rng.randrange(len(data) + 1)


def _flip(rng: Random, data: bytes) -> bytes:
    spoilt = bytearray(data)
    for _ in range(rng.choice((1, 1, 2, 8))):
        if spoilt:
            spoilt[rng.randrange(len(spoilt))] ^= 1 << rng.randrange(8)
    return bytes(spoilt)


def _overwrite(rng: Random, data: bytes) -> bytes:
    at, word = _at(rng, data), rng.choice(WORDS)
    return data[:at] + word + data[at + len(word) :]


def _insert(rng: Random, data: bytes) -> bytes:
    at = _at(rng, data)
    return data[:at] + rng.choice(WORDS) * rng.choice((1, 1, 1, 3, 200)) + data[at:]


def _cut(rng: Random, data: bytes) -> bytes:
    return data[: _at(rng, data)]


def _remove(rng: Random, data: bytes) -> bytes:
    at = _at(rng, data)
    return data[:at] + data[at + rng.choice((1, 2, 8, CARD, BLOCK)) :]


def _repeat(rng: Random, data: bytes) -> bytes:
    at = _at(rng, data)
    part = data[at : at + rng.choice((1, 4, CARD, BLOCK))]
    return data[:at] + part * rng.choice((2, 3, 50)) + data[at:]


def _number(rng: Random, data: bytes) -> bytes:
    """Replace one number by another thing, in its own width where it can be."""
    found = list(NUMBER.finditer(data[: 1 << 16]))
    if not found:
        return _overwrite(rng, data)
    match = rng.choice(found)
    word = rng.choice(WORDS)
    if rng.random() < 0.5:
        word = word.rjust(match.end() - match.start())
        return data[: match.start()] + word + data[match.start() + len(word) :]
    return data[: match.start()] + word + data[match.end() :]


def _line(rng: Random, data: bytes) -> bytes:
    """Take out, double, swap or empty a line."""
    lines = data.split(b"\n")
    at, other = rng.randrange(len(lines)), rng.randrange(len(lines))
    match rng.randrange(4):
        case 0:
            del lines[at]
        case 1:
            lines[at:at] = [lines[other]] * rng.choice((1, 2, 100))
        case 2:
            lines[at], lines[other] = lines[other], lines[at]
        case _:
            lines[at] = rng.choice(WORDS)
    return b"\n".join(lines)


def _cell(rng: Random, data: bytes) -> bytes:
    """Replace one cell of a line of text."""
    lines = data.split(b"\n")
    at = rng.randrange(len(lines))
    mark = rng.choice((b",", b";", b"\t", b" ", b"=", b'"'))
    cells = lines[at].split(mark)
    cells[rng.randrange(len(cells))] = rng.choice(WORDS)
    lines[at] = mark.join(cells)
    return b"\n".join(lines)


def _card(rng: Random, data: bytes) -> bytes:
    """Change the value of one FITS header card, or take, double or swap whole cards."""
    end = data.find(b"END" + b" " * (CARD - 3))
    start = data.rfind(b"XTENSION", 0, max(end, 0))
    ends = [i for i in range(0, min(len(data), 1 << 16), CARD) if data[i : i + 4] == b"END "]
    if not ends:
        return _overwrite(rng, data)
    end = rng.choice(ends)
    start = max((i for i in ends if i < end), default=-CARD) + CARD
    cards = [i for i in range(start, end, CARD) if data[i : i + CARD].strip()]
    if not cards:
        return _overwrite(rng, data)
    at, other = rng.choice(cards), rng.choice(cards)
    card = data[at : at + CARD]
    match rng.randrange(5):
        case 0 | 1 | 2:
            word = rng.choice(WORDS)
            if rng.random() < 0.4:
                word = b"'" + word + b"'"
            card = (card[:8] + b"= " + word.rjust(20))[:CARD].ljust(CARD)
        case 3:
            card = data[other : other + CARD]
        case _:
            card = b" " * CARD
    return data[:at] + card + data[at + CARD :]


_Change = Callable[[Random, bytes], bytes]
_ANY: tuple[_Change, ...] = (_flip, _overwrite, _insert, _cut, _remove, _repeat, _number)
_TEXT: tuple[_Change, ...] = (*_ANY, _line, _line, _cell, _cell, _cell, _number, _number)
_FITS: tuple[_Change, ...] = (*_ANY, *(_card,) * 10, _number, _number)


def mutate(rng: Random, data: bytes, others: list[bytes]) -> bytes:
    """Return a file with a few faults; one that came packed is packed again, mostly."""
    packed = data.startswith(b"\x1f\x8b")
    if packed:
        if rng.random() < 0.3:
            return rng.choice(_ANY)(rng, data)
        data = gzip.decompress(data)
    if rng.random() < 0.03:
        other = rng.choice(others)
        data = data[: _at(rng, data)] + other[_at(rng, other) :]
    changes = _FITS if data.startswith(b"SIMPLE") else _TEXT
    for _ in range(rng.choice((1, 1, 1, 2, 2, 3, 6))):
        data = rng.choice(changes)(rng, data)
    return gzip.compress(data, 1, mtime=0) if packed else data
