"""Straight-line arithmetic as data: the one form in which every kernel is derived, compiled and checked.

A `Program` is a list of operations on double-precision numbers without branches or loops. `cohort.compiled` turns
it into machine code for one or four lanes; `run` below executes the same list one operation at a time in plain
Python, with the same bits. Only + - x /, square root, fused multiply-add, comparison and exact handling of the
exponent exist here, so no result depends on a mathematics library: exp and log are composed from them.
"""

from __future__ import annotations

import hashlib
import math
import struct
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from fractions import Fraction
from functools import cached_property

Op = tuple[str, tuple[int, ...], float]
"""Operation name, operands (indices of earlier values), and the value of a constant (0 elsewhere)."""

_ROUNDER = 6755399441055744.0  # 1.5 x 2^52: adding and subtracting it rounds to the nearest integer
_LOG2E = 1.4426950408889634
_LN2 = 0.6931471805599453
_LN2_REST = 2.3190468138462996e-17  # ln 2 - _LN2
_EXP_LIMIT = 700.0
_EXP_TERMS = 13
_LOG_TERMS = 11
_HALF_PI = (1.5707963267948966, 6.123233995736766e-17, -1.4973849048591833e-33)


@dataclass(frozen=True)
class Program:
    """`n_inputs` numbers in, `len(outputs)` numbers out; values 0..n_inputs-1 are the inputs, then one per op."""

    name: str
    n_inputs: int
    ops: tuple[Op, ...]
    outputs: tuple[int, ...]

    @cached_property
    def key(self) -> str:
        """A digest of what is computed, equal exactly where the arithmetic is."""
        text = repr((self.n_inputs, self.ops, self.outputs))
        return hashlib.blake2b(text.encode(), digest_size=16).hexdigest()

    @property
    def flops(self) -> int:
        """How many arithmetic operations one execution takes (constants are free, fused counts once)."""
        return sum(op[0] != "const" for op in self.ops)


class Builder:
    """Builds a `Program`; equal operations are shared, and sums and products with 0 and 1 are dropped."""

    def __init__(self, name: str, n_inputs: int) -> None:
        self._name = name
        self._n_inputs = n_inputs
        self._ops: list[Op] = []
        self._known: dict[Op, int] = {}

    def finish(self, outputs: Sequence[int]) -> Program:
        """Return the program, without the operations that no output needs."""
        return _without_dead(Program(self._name, self._n_inputs, tuple(self._ops), tuple(outputs)))

    def _push(self, name: str, *operands: int, value: float = 0.0) -> int:
        op = (name, operands, value)
        if op not in self._known:
            self._known[op] = self._n_inputs + len(self._ops)
            self._ops.append(op)
        return self._known[op]

    def constant(self, value: float) -> int:
        return self._push("const", value=value + 0.0)

    def value_of(self, item: int) -> float | None:
        """Return the number behind a constant, None for anything else."""
        if item < self._n_inputs:
            return None
        name, _, value = self._ops[item - self._n_inputs]
        return value if name == "const" else None

    def add(self, a: int, b: int) -> int:
        if self.value_of(a) == 0.0:
            return b
        if self.value_of(b) == 0.0:
            return a
        return self._push("add", *sorted((a, b)))

    def sub(self, a: int, b: int) -> int:
        if self.value_of(b) == 0.0:
            return a
        return self._push("sub", a, b)

    def neg(self, a: int) -> int:
        known = self.value_of(a)
        return self.constant(-known) if known is not None else self._push("neg", a)

    def mul(self, a: int, b: int) -> int:
        known = {self.value_of(a): b, self.value_of(b): a}
        if 0.0 in known:
            return self.constant(0.0)
        if 1.0 in known:
            return known[1.0]
        if -1.0 in known:
            return self.neg(known[-1.0])
        return self._push("mul", *sorted((a, b)))

    def div(self, a: int, b: int) -> int:
        return a if self.value_of(b) == 1.0 else self._push("div", a, b)

    def fma(self, a: int, b: int, c: int) -> int:
        """a b + c with one rounding."""
        if self.value_of(c) == 0.0:
            return self.mul(a, b)
        known = {self.value_of(a): b, self.value_of(b): a}
        if 0.0 in known:
            return c
        if 1.0 in known:
            return self.add(known[1.0], c)
        return self._push("fma", *sorted((a, b)), c)

    def fnma(self, a: int, b: int, c: int) -> int:
        """c - a b with one rounding."""
        if self.value_of(a) == 0.0 or self.value_of(b) == 0.0:
            return c
        return self._push("fnma", *sorted((a, b)), c)

    def sqrt(self, a: int) -> int:
        return self._push("sqrt", a)

    def absolute(self, a: int) -> int:
        return self._push("abs", a)

    def if_less(self, a: int, b: int, yes: int, no: int) -> int:
        """`yes` where a < b, else `no`; a NaN on either side gives `no`."""
        return self._push("if_less", a, b, yes, no)

    def smaller(self, a: int, b: int) -> int:
        """The smaller of the two; a NaN in `b` stays."""
        return self.if_less(a, b, a, b)

    def larger(self, a: int, b: int) -> int:
        """The larger of the two; a NaN in `b` stays."""
        return self.if_less(b, a, a, b)

    def scale2(self, a: int, k: int) -> int:
        """a x 2^k for an integer-valued k; a and the result must be normal numbers."""
        return self._push("scale2", a, k)

    def exp(self, x: int) -> int:
        """e^x to about 1 ulp, x taken into +-700: 2^k e^r with |r| <= ln2/2 and the Taylor polynomial of e^r."""
        limit = self.constant(_EXP_LIMIT)
        x = self.if_less(limit, x, limit, x)
        limit = self.constant(-_EXP_LIMIT)
        x = self.if_less(x, limit, limit, x)
        rounder = self.constant(_ROUNDER)
        k = self.sub(self.fma(x, self.constant(_LOG2E), rounder), rounder)
        r = self.fnma(k, self.constant(_LN2), x)
        r = self.fnma(k, self.constant(_LN2_REST), r)
        total = self.constant(1.0 / math.factorial(_EXP_TERMS))
        for n in range(_EXP_TERMS - 1, -1, -1):
            total = self.fma(total, r, self.constant(1.0 / math.factorial(n)))
        return self.scale2(total, k)

    def log(self, x: int) -> int:
        """ln x to about 1 ulp for normal x > 0, -inf at 0, NaN below: x = m 2^e, ln m = 2 artanh((m-1)/(m+1))."""
        m, e = self._push("mantissa", x), self._push("exponent", x)
        half_root = self.constant(math.sqrt(0.5))
        one, zero = self.constant(1.0), self.constant(0.0)
        small = self.if_less(m, half_root, one, zero)
        m = self.fma(small, m, m)
        e = self.sub(e, small)
        f = self.sub(m, one)
        s = self.div(f, self.add(f, self.constant(2.0)))
        z = self._push("mul", s, s)
        total = self.constant(2.0 / (2 * _LOG_TERMS + 1))
        for n in range(_LOG_TERMS - 1, 0, -1):
            total = self.fma(total, z, self.constant(2.0 / (2 * n + 1)))
        tail = self.fma(self.mul(total, z), s, self.mul(e, self.constant(_LN2_REST)))
        value = self.fma(e, self.constant(_LN2), self.add(self.add(s, s), tail))
        nothing = self.if_less(x, zero, self.constant(math.nan), self.add(x, self.constant(-math.inf)))
        return self.if_less(zero, x, value, nothing)

    def logistic(self, v: int) -> int:
        """1/(1 + e^-v), never overflowing."""
        one = self.constant(1.0)
        return self.div(one, self.add(one, self.exp(self.neg(v))))

    def sin_cos(self, x: int) -> tuple[int, int]:
        """(sin x, cos x) to about 1 ulp of 1 for |x| < 1e6: x = k pi/2 + r and the Taylor polynomials of r."""
        rounder = self.constant(_ROUNDER)
        k = self.sub(self.fma(x, self.constant(2.0 / math.pi), rounder), rounder)
        r = x
        for part in _HALF_PI:
            r = self.fnma(k, self.constant(part), r)
        z = self.mul(r, r)
        sine, cosine = (self._alternating(z, first) for first in (1, 0))
        sine = self.mul(sine, r)
        # k modulo 4, as -2..2
        q = self.fnma(self.sub(self.fma(k, self.constant(0.25), rounder), rounder), self.constant(4.0), k)
        odd, half = self.absolute(self.sub(self.absolute(q), self.constant(1.0))), self.constant(0.5)
        a, b = self.if_less(odd, half, cosine, sine), self.if_less(odd, half, sine, cosine)
        turned = self.if_less(self.constant(1.5), self.absolute(q), self.neg(a), a)
        sine = self.if_less(q, self.constant(-0.5), self.if_less(self.constant(-1.5), q, self.neg(a), turned), turned)
        cosine = self.if_less(self.constant(0.5), q, self.neg(b), b)
        return sine, self.if_less(q, self.constant(-1.5), self.neg(b), cosine)

    def _alternating(self, z: int, first: int) -> int:
        """sum of (-z)^n / (2n + first)!: cos r, or sin r / r, for z = r^2 <= (pi/4)^2."""
        total = self.constant(0.0)
        for n in range(9, -1, -1):
            total = self.fma(total, z, self.constant((-1.0) ** n / math.factorial(2 * n + first)))
        return total


def _without_dead(program: Program) -> Program:
    needed = set(program.outputs)
    for index in range(len(program.ops) - 1, -1, -1):
        if program.n_inputs + index in needed:
            needed.update(program.ops[index][1])
    place = {i: i for i in range(program.n_inputs)}
    ops: list[Op] = []
    for index, (name, operands, value) in enumerate(program.ops):
        if program.n_inputs + index in needed:
            place[program.n_inputs + index] = program.n_inputs + len(ops)
            ops.append((name, tuple(place[o] for o in operands), value))
    return Program(program.name, program.n_inputs, tuple(ops), tuple(place[o] for o in program.outputs))


def _fma(a: float, b: float, c: float) -> float:
    if not all(map(math.isfinite, (a, b, c))):
        return a * b + c
    exact = Fraction(a) * Fraction(b) + Fraction(c)
    return float(exact) if exact else a * b + c


def _divide(a: float, b: float) -> float:
    if b:
        return a / b
    return math.nan if a == 0 or math.isnan(a) else math.copysign(math.inf, a) * math.copysign(1.0, b)


def _bits(x: float) -> int:
    return int.from_bytes(struct.pack(">d", x), "big")


def _number(bits: int) -> float:
    return float(struct.unpack(">d", (bits & 0xFFFFFFFFFFFFFFFF).to_bytes(8, "big"))[0])


def _scale2(a: float, k: float) -> float:
    return _number(_bits(a) + (_bits(k + _ROUNDER) << 52))


_PLAIN: dict[str, Callable[..., float]] = {
    "add": lambda a, b: a + b,
    "sub": lambda a, b: a - b,
    "mul": lambda a, b: a * b,
    "div": _divide,
    "neg": lambda a: -a,
    "fma": _fma,
    "fnma": lambda a, b, c: _fma(-a, b, c),
    "sqrt": lambda a: math.sqrt(a) if a >= 0 else math.nan,
    "abs": abs,
    "if_less": lambda a, b, yes, no: yes if a < b else no,
    "scale2": _scale2,
    "mantissa": lambda x: _number((_bits(x) & 0x000FFFFFFFFFFFFF) | 0x3FE0000000000000),
    "exponent": lambda x: float((_bits(x) >> 52 & 0x7FF) - 1022),
}


def run(program: Program, inputs: Sequence[float]) -> list[float]:
    """Execute `program` in plain Python: the compiled kernels' twin, slow and with the same bits."""
    values = [float(x) for x in inputs]
    if len(values) != program.n_inputs:
        raise ValueError(f"{program.name} takes {program.n_inputs} inputs, got {len(values)}")
    for name, operands, value in program.ops:
        values.append(value if name == "const" else _PLAIN[name](*(values[o] for o in operands)))
    return [values[o] for o in program.outputs]
