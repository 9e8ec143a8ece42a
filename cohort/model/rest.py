"""Bodies at rest: the equilibrium under a constant input, its eigenvalues, and the regime they imply.

The scalar balance of glucose falls strictly in G (all parameters positive, Um > U0), so it has one root; it is found
by Newton's method kept inside a bracket. A model that gives no such balance is solved in all states at once by damped
Newton steps from near its typical size. Eigenvalues of the exact Jacobian come from Hessenberg reduction and the
shifted QR iteration of Francis, then Newton's method on det(lambda - J) polishes the leading one.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from cohort.compiled import call_program, compile_program, jit
from cohort.model.body import Body
from cohort.model.linear import solve_each

Array = NDArray[np.float64]


TRACE_MU_PER_MIN = 1e-9
"""Insulin that enters where none is secreted: with none at all the equations have no slope at rest."""


@dataclass(frozen=True)
class Rest:
    """Equilibria of n subjects: states float64[n, states], eigenvalues complex128[n, states] with the leading one
    first (largest real part; of a pair the one above the axis), NaN where no finite equilibrium was found."""

    states: Array
    eigenvalues: NDArray[np.complex128]
    jacobians: Array


def at_rest(body: Body, parameters: Array, Gin: Array, Iin: Array) -> Rest:
    """Equilibrium and eigenvalues of every subject under constant inputs.

    parameters: float64[n, len(body.parameters)]; Gin mg/min and Iin mU/min: float64[n].
    """
    n, states = len(parameters), len(body.card.states)
    Iin = np.where(parameters[:, body.parameters.index("secretion")] == 0.0, np.maximum(Iin, TRACE_MU_PER_MIN), Iin)
    inputs = np.column_stack([Gin, Iin, parameters])
    found = np.full((n, states), np.nan)
    jacobians = np.full((n, states, states), np.nan)
    eigenvalues = np.full((n, states), np.nan + 0j)
    lead = body.card.states.index(body.traced.rest_of)
    lowest = 0.0 if body.card.positive else -np.inf
    typical = body.card.typical[body.traced.rest_of]
    rates, jacobian = compile_program(body.rates), compile_program(body.jacobian)
    if body.traced.rest:
        _solve(compile_program(body.balance), inputs, lead, typical, lowest, found)
    else:
        sizes = np.array([body.card.typical[s] for s in body.card.states])
        _solve_together(rates, jacobian, inputs, sizes if body.card.positive else 0.1 * sizes, found)
    _spectra(jacobian, inputs, found, jacobians, eigenvalues)
    return Rest(found, eigenvalues, jacobians)


@jit
def _solve(balance, inputs, lead, typical, lowest, found):  # type: ignore[no-untyped-def]
    n, states = found.shape
    source = np.empty(1 + inputs.shape[1])
    result = np.empty(2 + states)
    for b in range(n):
        source[1:] = inputs[b]
        if root(balance, source, result, typical, lowest):
            found[b] = result[2:]
            found[b, lead] = source[0]


@jit
def _solve_together(rates, jacobian, inputs, begin, found):  # type: ignore[no-untyped-def]
    n, states = found.shape
    place = np.empty(states + inputs.shape[1])
    rate, slopes, step = np.empty(states), np.empty((1, states, states)), np.empty((1, states))
    for b in range(n):
        place[:states] = begin
        place[states:] = inputs[b]
        for _ in range(200):
            call_program(rates, place, rate)
            call_program(jacobian, place, slopes)
            solve_each(slopes, -rate.reshape(1, states), step)
            size = np.abs(rate).sum()
            relative = np.max(np.abs(step[0]) / (np.abs(place[:states]) + 1e-3 * np.abs(begin)))
            if not np.isfinite(relative):
                break
            before = place[:states].copy()
            factor = 1.0
            while factor > 1e-6:
                place[:states] = before + factor * step[0]
                call_program(rates, place, rate)
                if np.abs(rate).sum() <= size:
                    break
                factor *= 0.5
            if relative < 1e-14 or size == 0.0 or factor <= 1e-6:
                if relative < 1e-9:
                    found[b] = before
                break


@jit
def _spectra(jacobian, inputs, found, jacobians, eigenvalues):  # type: ignore[no-untyped-def]
    """Jacobian and eigenvalues at each equilibrium; one whose Jacobian is not finite is no equilibrium."""
    n, states = found.shape
    place = np.empty(states + inputs.shape[1])
    for b in range(n):
        if np.isnan(found[b, 0]):
            continue
        place[:states] = found[b]
        place[states:] = inputs[b]
        call_program(jacobian, place, jacobians[b])
        if np.all(np.isfinite(jacobians[b])):
            spectrum(jacobians[b], eigenvalues[b])
        else:
            found[b] = np.nan
            jacobians[b] = np.nan


@jit
def root(balance, source, result, typical, lowest):  # type: ignore[no-untyped-def]
    """Solve the falling scalar balance for source[0] by bracketed Newton; True where it was found."""
    low, high = lowest, np.inf
    x = typical
    step = np.inf
    for _ in range(200):
        source[0] = x
        call_program(balance, source, result)
        value, slope = result[0], result[1]
        if not np.isfinite(value):
            return False
        if value == 0.0:
            return True
        if value > 0.0:
            low = x
        else:
            high = x
        newton = x - value / slope
        if not (low < newton < high) or not slope < 0.0:
            if high == np.inf:
                newton = 2.0 * abs(x) + typical
            elif low == -np.inf:
                newton = -2.0 * abs(x) - typical
            else:
                newton = 0.5 * (low + high)
        elif high < np.inf and low > -np.inf and 0.5 * step < abs(newton - x) and abs(newton - x) > 1e-9 * abs(x):
            newton = 0.5 * (low + high)  # steps that do not shrink may circle within the bracket for ever
        last, step = step, abs(newton - x)
        if step <= 4e-16 * abs(x) or (step >= last and step <= 1e-13 * (abs(x) + 1e-3 * typical)):
            return True
        if abs(x) > 1e9 * typical:
            return False
        x = newton
    return False


@jit
def spectrum(matrix, values):  # type: ignore[no-untyped-def]
    """Eigenvalues of a small real matrix into `values`, the leading one first and polished."""
    n = matrix.shape[0]
    work = matrix.copy()
    _hessenberg(work)
    if not _francis(work, values):
        values[:] = np.nan
        return
    for i in range(1, n):
        x = values[i]
        j = i
        while j > 0 and _before(x, values[j - 1]):
            values[j] = values[j - 1]
            j -= 1
        values[j] = x
    leading = _polish(matrix, values[0])
    if n > 1 and values[0].imag > 0.0:
        values[1] = leading.conjugate()
    values[0] = leading


@jit
def _before(a, b):  # type: ignore[no-untyped-def]
    return a.real > b.real or (a.real == b.real and a.imag > b.imag)


@jit
def _hessenberg(a):  # type: ignore[no-untyped-def]
    """Reduce to upper Hessenberg form by stabilised elimination (Wilkinson 1965)."""
    n = a.shape[0]
    for m in range(1, n - 1):
        pivot = m
        for j in range(m, n):
            if abs(a[j, m - 1]) > abs(a[pivot, m - 1]):
                pivot = j
        if a[pivot, m - 1] == 0.0:
            continue
        if pivot != m:
            for j in range(n):
                a[pivot, j], a[m, j] = a[m, j], a[pivot, j]
            for j in range(n):
                a[j, pivot], a[j, m] = a[j, m], a[j, pivot]
        for i in range(m + 1, n):
            y = a[i, m - 1] / a[m, m - 1]
            if y != 0.0:
                for j in range(m - 1, n):
                    a[i, j] -= y * a[m, j]
                for j in range(n):
                    a[j, m] += y * a[j, i]
                a[i, m - 1] = 0.0


@jit
def _pair(a, b, c, d, values, at):  # type: ignore[no-untyped-def]
    """Eigenvalues of [[a, b], [c, d]]."""
    p = 0.5 * (a - d)
    q = p * p + b * c
    if q >= 0.0:
        z = p + np.sqrt(q) if p >= 0.0 else p - np.sqrt(q)
        values[at] = complex(d + z, 0.0)
        values[at + 1] = complex(d - b * c / z if z != 0.0 else d + z, 0.0)
    else:
        values[at] = complex(d + p, np.sqrt(-q))
        values[at + 1] = complex(d + p, -np.sqrt(-q))


@jit
def _francis(h, values):  # type: ignore[no-untyped-def]
    """Eigenvalues of an upper Hessenberg matrix by double-shifted QR steps with 3 x 3 reflections; False if it fails."""
    n = h.shape[0]
    norm = 0.0
    for i in range(n):
        for j in range(max(i - 1, 0), n):
            norm += abs(h[i, j])
    last = n - 1
    rounds = 0
    while last >= 0:
        first = last
        while first > 0:
            size = abs(h[first - 1, first - 1]) + abs(h[first, first])
            if size == 0.0:
                size = norm
            if abs(h[first, first - 1]) <= 2.3e-16 * size:
                h[first, first - 1] = 0.0
                break
            first -= 1
        if first == last:
            values[last] = complex(h[last, last], 0.0)
            last -= 1
            rounds = 0
        elif first == last - 1:
            _pair(h[first, first], h[first, last], h[last, first], h[last, last], values, first)
            last -= 2
            rounds = 0
        else:
            rounds += 1
            if rounds > 60:
                return False
            trace = h[last - 1, last - 1] + h[last, last]
            det = h[last - 1, last - 1] * h[last, last] - h[last - 1, last] * h[last, last - 1]
            if rounds % 10 == 0:
                s = abs(h[last, last - 1]) + abs(h[last - 1, last - 2])
                trace, det = 1.5 * s, s * s
            _double_step(h, first, last, trace, det)
    return True


@jit
def _double_step(h, first, last, trace, det):  # type: ignore[no-untyped-def]
    n = h.shape[0]
    x = h[first, first] * (h[first, first] - trace) + h[first, first + 1] * h[first + 1, first] + det
    y = h[first + 1, first] * (h[first, first] + h[first + 1, first + 1] - trace)
    z = h[first + 2, first + 1] * h[first + 1, first]
    for k in range(first, last):
        size = 3 if k < last - 1 else 2
        if size == 2:
            z = 0.0
        scale = abs(x) + abs(y) + abs(z)
        if scale != 0.0:
            x, y, z = x / scale, y / scale, z / scale
            r = np.sqrt(x * x + y * y + z * z)
            if x < 0.0:
                r = -r
            v0, v1, v2 = x + r, y, z
            factor = 1.0 / (r * v0)
            for j in range(max(k - 1, first), n):
                total = v0 * h[k, j] + v1 * h[k + 1, j]
                if size == 3:
                    total += v2 * h[k + 2, j]
                total *= factor
                h[k, j] -= total * v0
                h[k + 1, j] -= total * v1
                if size == 3:
                    h[k + 2, j] -= total * v2
            for i in range(min(k + 4, last + 1)):
                total = v0 * h[i, k] + v1 * h[i, k + 1]
                if size == 3:
                    total += v2 * h[i, k + 2]
                total *= factor
                h[i, k] -= total * v0
                h[i, k + 1] -= total * v1
                if size == 3:
                    h[i, k + 2] -= total * v2
            if k > first:
                h[k + 1, k - 1] = 0.0
                if size == 3:
                    h[k + 2, k - 1] = 0.0
        if k < last - 1:
            x = h[k + 1, k]
            y = h[k + 2, k]
            z = h[k + 3, k] if k < last - 2 else 0.0


@jit
def _polish(matrix, value):  # type: ignore[no-untyped-def]
    """Newton's method on det(lambda - J): the correction is 1 / trace((lambda - J)^-1)."""
    n = matrix.shape[0]
    real = value.imag == 0.0
    best = value
    last = np.inf
    for _ in range(6):
        inverse_trace = _resolvent_trace(matrix, best)
        if not (np.isfinite(inverse_trace.real) and np.isfinite(inverse_trace.imag)) or inverse_trace == 0.0:
            return best
        change = 1.0 / inverse_trace
        if real:
            change = complex(change.real, 0.0)
        size = abs(change.real) + abs(change.imag)
        if not size < 0.5 * last:
            return best
        best -= change
        last = size
        if size <= 1e-16 * (abs(best.real) + abs(best.imag)) * n:
            return best
    return best


@jit
def _resolvent_trace(matrix, value):  # type: ignore[no-untyped-def]
    """trace((value - J)^-1) by elimination with row exchanges."""
    n = matrix.shape[0]
    a = np.zeros((n, 2 * n), dtype=np.complex128)
    for i in range(n):
        for j in range(n):
            a[i, j] = -matrix[i, j]
        a[i, i] += value
        a[i, n + i] = 1.0
    for k in range(n):
        pivot = k
        for i in range(k + 1, n):
            if abs(a[i, k].real) + abs(a[i, k].imag) > abs(a[pivot, k].real) + abs(a[pivot, k].imag):
                pivot = i
        if a[pivot, k] == 0.0:
            return complex(np.inf, 0.0)
        if pivot != k:
            for j in range(2 * n):
                a[k, j], a[pivot, j] = a[pivot, j], a[k, j]
        for i in range(n):
            if i != k and a[i, k] != 0.0:
                factor = a[i, k] / a[k, k]
                for j in range(k, 2 * n):
                    a[i, j] -= factor * a[k, j]
    total = complex(0.0, 0.0)
    for i in range(n):
        total += a[i, n + i] / a[i, i]
    return total
