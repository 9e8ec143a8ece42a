"""From equations in plain text to a graph that everything else is derived from.

A model is a Python function of its states, inputs and parameters that returns the rates of change, written as in
the paper. `trace` calls it once with symbols. The graph it leaves holds sums, products, quotients, exp, log and the
logistic function; equal expressions are one node. From it come derivatives (`derivative`), programs that evaluate
expressions (`evaluator`), and the Taylor recurrences of `cohort.model.taylor`.
"""

from __future__ import annotations

import inspect
from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any, ClassVar

from cohort.program import Builder, Program

Number = float | int


class Symbol:
    """One node of the graph: an operation on other nodes, a named symbol, or a number."""

    __slots__ = ("op", "operands", "value")

    _known: ClassVar[dict[tuple[str, tuple[int, ...], Any], Symbol]] = {}

    op: str
    operands: tuple[Symbol, ...]
    value: Any

    def __new__(cls, op: str, operands: tuple[Symbol, ...] = (), value: Any = None) -> Symbol:
        key = (op, tuple(id(o) for o in operands), value)
        if key not in cls._known:
            node = super().__new__(cls)
            node.op, node.operands, node.value = op, operands, value
            cls._known[key] = node
        return cls._known[key]

    def __add__(self, other: Symbol | Number) -> Symbol:
        return _add(self, _symbol(other))

    def __radd__(self, other: Number) -> Symbol:
        return _add(_symbol(other), self)

    def __sub__(self, other: Symbol | Number) -> Symbol:
        return _add(self, -_symbol(other))

    def __rsub__(self, other: Number) -> Symbol:
        return _add(_symbol(other), -self)

    def __neg__(self) -> Symbol:
        return _mul(_symbol(-1.0), self)

    def __mul__(self, other: Symbol | Number) -> Symbol:
        return _mul(self, _symbol(other))

    def __rmul__(self, other: Number) -> Symbol:
        return _mul(_symbol(other), self)

    def __truediv__(self, other: Symbol | Number) -> Symbol:
        return _div(self, _symbol(other))

    def __rtruediv__(self, other: Number) -> Symbol:
        return _div(_symbol(other), self)

    def __pow__(self, power: Symbol | Number) -> Symbol:
        return _power(self, power)

    def __repr__(self) -> str:
        if self.op in ("name", "const"):
            return str(self.value)
        return f"{self.op}({', '.join(map(repr, self.operands))})"


def _symbol(value: Symbol | Number) -> Symbol:
    return value if isinstance(value, Symbol) else Symbol("const", value=float(value))


def name(symbol: str) -> Symbol:
    """Return the node of a named state, input or parameter."""
    return Symbol("name", value=symbol)


def _is(node: Symbol, value: float) -> bool:
    return node.op == "const" and node.value == value


def _add(a: Symbol, b: Symbol) -> Symbol:
    if _is(a, 0.0):
        return b
    if _is(b, 0.0):
        return a
    if a.op == b.op == "const":
        return _symbol(a.value + b.value)
    return Symbol("add", (a, b))


def _mul(a: Symbol, b: Symbol) -> Symbol:
    if _is(a, 0.0) or _is(b, 0.0):
        return _symbol(0.0)
    if _is(a, 1.0):
        return b
    if _is(b, 1.0):
        return a
    if a.op == b.op == "const":
        return _symbol(a.value * b.value)
    return Symbol("mul", (a, b))


def _div(a: Symbol, b: Symbol) -> Symbol:
    if _is(b, 1.0) or _is(a, 0.0):
        return a
    if b.op == "add" and _is(b.operands[0], 1.0) and b.operands[1].op == "exp":
        # x / (1 + e^v) as the papers print it, in the form that cannot overflow
        return _mul(a, Symbol("logistic", (-b.operands[1].operands[0],)))
    return Symbol("div", (a, b))


def _power(a: Symbol, power: Symbol | Number) -> Symbol:
    if isinstance(power, int):
        whole = a
        for _ in range(abs(power) - 1):
            whole = _mul(whole, a)
        return whole if power > 0 else _div(_symbol(1.0), whole)
    return exp(_mul(_symbol(power), log(a)))


def exp(v: Symbol | Number) -> Symbol:
    """e^v."""
    return Symbol("exp", (_symbol(v),))


def log(v: Symbol | Number) -> Symbol:
    """ln v, for v > 0."""
    return Symbol("log", (_symbol(v),))


# ---- the traced model --------------------------------------------------------------------------------------------

INPUTS = ("Gin", "Iin")
"""Inputs of every body: glucose (mg/min) and insulin (mU/min) entering the plasma. `secretion` is a parameter."""


@dataclass(frozen=True)
class Traced:
    """A model's equations as a graph.

    rates: d(state)/dt by state, in the states' order; observed: what a reader sees, by boundary name;
    parameters: names the equations use beside states and inputs; rest: the states at rest in terms of `rest_of`,
    empty where no such form is known.
    """

    states: tuple[str, ...]
    parameters: tuple[str, ...]
    rates: Mapping[str, Symbol]
    observed: Mapping[str, Symbol]
    rest_of: str
    rest: Mapping[str, Symbol]


def _call(function: Callable[..., Any]) -> Any:
    return function(*(name(parameter) for parameter in inspect.signature(function).parameters))


def trace(equations: Callable[..., Any], at_rest: Callable[..., Any] | None, parameters: Sequence[str]) -> Traced:
    """Call the model's text once with symbols.

    `equations` returns (rates, observed); `at_rest`, whose first argument is the state that the others follow from,
    returns the other states; its own rate must then fall strictly with it. Both name states, inputs and parameters
    in their signatures. Without `at_rest` the equilibrium is sought in all states at once.
    """
    rates, observed = _call(equations)
    if at_rest is None:
        rates = {state: _symbol(rate) for state, rate in rates.items()}
        observed = {column: _symbol(value) for column, value in observed.items()}
        return Traced(tuple(rates), tuple(parameters), rates, observed, next(iter(rates)), {})
    rest_of = next(iter(inspect.signature(at_rest).parameters))
    rates = {state: _symbol(rate) for state, rate in rates.items()}
    observed = {column: _symbol(value) for column, value in observed.items()}
    rest = {state: _symbol(value) for state, value in _call(at_rest).items()}
    return Traced(tuple(rates), tuple(parameters), rates, observed, rest_of, {rest_of: name(rest_of), **rest})


def substitute(node: Symbol, values: Mapping[str, Symbol], done: dict[Symbol, Symbol] | None = None) -> Symbol:
    """Return `node` with named symbols replaced."""
    done = {} if done is None else done
    if node not in done:
        if node.op == "name":
            done[node] = values.get(node.value, node)
        elif node.op == "const":
            done[node] = node
        else:
            done[node] = _rebuild(node, tuple(substitute(o, values, done) for o in node.operands))
    return done[node]


def _rebuild(node: Symbol, operands: tuple[Symbol, ...]) -> Symbol:
    binary = {"add": _add, "mul": _mul, "div": _div}
    return binary[node.op](*operands) if node.op in binary else Symbol(node.op, operands)


def derivative(node: Symbol, along: Mapping[str, Symbol], done: dict[Symbol, Symbol] | None = None) -> Symbol:
    """Return the exact derivative of `node` when each named symbol moves at the rate `along` gives it (0 if absent)."""
    done = {} if done is None else done
    if node not in done:
        done[node] = _derivative(node, along, done)
    return done[node]


def _derivative(node: Symbol, along: Mapping[str, Symbol], done: dict[Symbol, Symbol]) -> Symbol:
    if node.op == "const":
        return _symbol(0.0)
    if node.op == "name":
        return along.get(node.value, _symbol(0.0))
    slopes = [derivative(o, along, done) for o in node.operands]
    if node.op == "add":
        return slopes[0] + slopes[1]
    if node.op == "mul":
        return slopes[0] * node.operands[1] + node.operands[0] * slopes[1]
    if node.op == "div":
        return (slopes[0] - node * slopes[1]) / node.operands[1]
    if node.op == "exp":
        return node * slopes[0]
    if node.op == "log":
        return slopes[0] / node.operands[0]
    return node * (1.0 - node) * slopes[0]  # logistic


def evaluator(title: str, inputs: Iterable[str], wanted: Sequence[Symbol]) -> Program:
    """Return the program that computes the `wanted` expressions from the named `inputs`, in their order."""
    names = tuple(inputs)
    builder = Builder(title, len(names))
    done: dict[Symbol, int] = {name(symbol): i for i, symbol in enumerate(names)}
    return builder.finish([lower(builder, node, done) for node in wanted])


def lower(builder: Builder, node: Symbol, done: dict[Symbol, int]) -> int:
    """Write `node` into `builder`; `done` says where symbols and shared expressions already stand."""
    if node not in done:
        if node.op == "const":
            done[node] = builder.constant(node.value)
        elif node.op == "name":
            raise KeyError(f"the equations use {node.value!r}, which is no state, input or parameter")
        else:
            operands = [lower(builder, o, done) for o in node.operands]
            method = {"exp": builder.exp, "log": builder.log, "logistic": builder.logistic}
            binary = {"add": builder.add, "mul": builder.mul, "div": builder.div}
            done[node] = method[node.op](*operands) if node.op in method else binary[node.op](*operands)
    return done[node]
