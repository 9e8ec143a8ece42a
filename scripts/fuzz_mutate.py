"""Mutators of the fuzzer: bytes, tokens, lines, numbers, keys of the schema, splices."""

from __future__ import annotations

import random
import re
from collections.abc import Callable, Sequence

from cohort.quantities import INPUT_PARAMETERS, PARAMETERS
from cohort.study.keys import KEYS
from cohort.study.units import DIMENSIONS

LONGEST = 1 << 20
NUMBER = re.compile(rb"[+-]?\d[\d_.eE+-]*")
TOKEN = re.compile(rb"[A-Za-z0-9_.-]+|\s+|[^A-Za-z0-9_.\s-]")

EXTREMES = (
    b"0", b"-0", b"-1", b"1", b"2", b"1e-300", b"5e-324", b"1e300", b"1e308", b"1.7976931348623157e308", b"1e999", b"-1e999",
    b"nan", b"-nan", b"inf", b"-inf", b"1000000000000000000", b"9223372036854775807", b"9223372036854775808", b"0.1", b"1e9",
    b"-9223372036854775809", b"0x" + b"f" * 40, b"0x" + b"f" * 4000, b"9" * 5000, b"1" + b"0" * 400, b"0.30000000000000004",
    b"1e-9", b"16", b"1024", b"1e6", b"366", b"0.999999999", b"1_0", b"0b1", b"0o7", b"1979-05-27T07:32:00Z", b"07:32:00",
)  # fmt: skip
ODDITIES = (
    b"true", b"false", b"[]", b"{}", b'""', b"''", b'"\\u0000"', b'"\\u001b[31m"', b'"\\n"', b'"a\\nb"', b"'''\nx\n'''",
    b'"<script>alert(1)</script>"', b'"$\\\\frac{$"', b"'$x$'", b"'_x'", b'"\\uFFFF"', b"[[1]]", b"[{}]", b"{ a = 1 }",
    b'["a", "a"]', b"[1, 'x']", b'"/dev/zero"', b'"pipe.csv"', b'"loop.csv"', b'"zero.csv"', b'"~"', b'"../x"', b'"."',
    b'"people.csv"', b'"people.parquet"', b'"seen.csv"', b'"' + b"x" * 5000 + b'"', b"'\xc2\xb5mol/min'", b'"\xe2\x80\xa8"',
    b"{ natural = 0.8 }", b'"own fasting"', b'"1e999 h"', b'"1 h h"', b'"-5 %"', b"\xef\xbb\xbf", b"\xff\xfe", b"\x00", b"\r",
    b"\xed\xa0\x80", b"\x1b[31m", b"[" * 300, b"a." * 300, b"{a=" * 100, b"#", b'"""', b"'''", b"=", b",", b"\t", b"\r\n",
)  # fmt: skip
UNITS = tuple(dict.fromkeys(u.encode() for d in DIMENSIONS.values() for u in d.factors))
NAMES = tuple(dict.fromkeys(p.encode() for key in KEYS for p in re.split(r"[.\[\]]+", key) if p and p != "*"))
WORDS = tuple(w.encode() for key in KEYS.values() for w in key.words)
SYMBOLS = tuple(s.encode() for s in (*PARAMETERS, *INPUT_PARAMETERS))
TABLES = tuple(k.encode() for k, key in KEYS.items() if key.kind in ("table", "tables") and "*" not in k)
DICTIONARY = (*EXTREMES, *ODDITIES, *UNITS, *NAMES, *WORDS, *SYMBOLS)

Corpus = Sequence[bytes]


def _bytes(rng: random.Random, data: bytes, _corpus: Corpus) -> bytes:
    at = rng.randrange(len(data) + 1)
    cut = rng.choice((0, 1, 1, 1, 2, 4, 16))
    return data[:at] + rng.randbytes(rng.choice((0, 1, 1, 2, 4))) + data[at + cut :]


def _flip(rng: random.Random, data: bytes, _corpus: Corpus) -> bytes:
    if not data:
        return b"\x00"
    at = rng.randrange(len(data))
    return data[:at] + bytes([data[at] ^ 1 << rng.randrange(8)]) + data[at + 1 :]


def _integer(rng: random.Random, data: bytes, _corpus: Corpus) -> bytes:
    """A whole number of a binary format made extreme."""
    width, at = rng.choice((1, 2, 4, 8)), rng.randrange(len(data) + 1)
    value = rng.choice(
        (0, 1, (1 << 8 * width) - 1, 1 << 8 * width - 1, (1 << 8 * width - 1) - 1, rng.getrandbits(8 * width))
    )
    return data[:at] + value.to_bytes(width, "little") + data[at + width :]


def _token(rng: random.Random, data: bytes, _corpus: Corpus) -> bytes:
    found = _some(rng, TOKEN, data)
    if found is None:
        return data + rng.choice(DICTIONARY)
    return data[: found.start()] + rng.choice(DICTIONARY) + data[found.end() :]


def _number(rng: random.Random, data: bytes, corpus: Corpus) -> bytes:
    found = _some(rng, NUMBER, data)
    if found is None:
        return _token(rng, data, corpus)
    return data[: found.start()] + rng.choice(EXTREMES) + data[found.end() :]


def _some(rng: random.Random, pattern: re.Pattern[bytes], data: bytes) -> re.Match[bytes] | None:
    """A match after a place chosen at random."""
    return pattern.search(data, rng.randrange(len(data) + 1)) or pattern.search(data)


def _value(rng: random.Random, data: bytes, _corpus: Corpus) -> bytes:
    """What stands after an equals sign replaced up to its line's end."""
    at = data.find(b"=", rng.randrange(len(data) + 1))
    if at < 0:
        return data + rng.choice(ODDITIES)
    end = data.find(b"\n", at)
    unit = b'"' + rng.choice(EXTREMES) + b" " + rng.choice(UNITS) + b'"'
    return data[: at + 1] + rng.choice((rng.choice(ODDITIES), rng.choice(EXTREMES), unit)) + data[end:] * (end >= 0)


def _lines(rng: random.Random, data: bytes, _corpus: Corpus) -> bytes:
    lines = data.split(b"\n")
    i, j = (rng.randrange(len(lines)) for _ in range(2))
    kind = rng.randrange(4)
    if kind == 0:
        del lines[i]
    elif kind == 1:
        lines.insert(j, lines[i])
    elif kind == 2:
        lines[i], lines[j] = lines[j], lines[i]
    else:
        lines[i] += rng.choice((b"\n", b"")) + lines[j]
    return b"\n".join(lines)


def _key(rng: random.Random, data: bytes, _corpus: Corpus) -> bytes:
    """A line with a key of the schema, or a table's header, put anywhere."""
    lines = data.split(b"\n")
    name = rng.choice(TABLES)
    head = (
        b"[[" + name.replace(b"[]", b"") + b"]]"
        if KEYS[name.decode()].kind == "tables"
        else b"[" + name.replace(b"[]", b"") + b"]"
    )
    key = rng.choice((rng.choice(NAMES), rng.choice(SYMBOLS), b".".join(rng.choices(NAMES, k=2))))
    value = rng.choice((rng.choice(ODDITIES), rng.choice(EXTREMES), b'"' + rng.choice(WORDS) + b'"'))
    lines.insert(rng.randrange(len(lines) + 1), rng.choice((head, key + b" = " + value)))
    return b"\n".join(lines)


def _splice(rng: random.Random, data: bytes, corpus: Corpus) -> bytes:
    other = rng.choice(corpus)
    i, j = rng.randrange(len(data) + 1), rng.randrange(len(other) + 1)
    return (
        data[:i] + other[j : j + rng.choice((8, 64, 512, len(other)))] + data[i + rng.choice((0, 8, 64, len(data))) :]
    )


def _repeat(rng: random.Random, data: bytes, _corpus: Corpus) -> bytes:
    i = rng.randrange(len(data) + 1)
    piece = data[i : i + rng.choice((1, 4, 20, 100))]
    times = rng.choice((2, 2, 3, 10, 100, 2000)) if rng.random() < 0.2 else 2
    return data[:i] + piece * times + data[i:]


Mutator = Callable[[random.Random, bytes, Corpus], bytes]
OF_TEXT: tuple[Mutator, ...] = (
    _bytes, _flip, _token, _token, _number, _number, _value, _value, _lines, _key, _splice, _repeat,
)  # fmt: skip
OF_BINARY: tuple[Mutator, ...] = (_bytes, _flip, _flip, _integer, _integer, _splice)


def mutated(rng: random.Random, corpus: Corpus, binary: bool) -> bytes:
    """A mutation of one entry of the corpus, newer ones more often; never longer than a megabyte."""
    n = len(corpus)
    data = corpus[rng.randrange(n) if rng.random() < 0.5 else max(n - 1 - int(rng.expovariate(0.1)), 0)]
    for _ in range(rng.choice((1, 1, 1, 2, 2, 4))):
        data = rng.choice(OF_BINARY if binary else OF_TEXT)(rng, data, corpus)[:LONGEST]
    return data
