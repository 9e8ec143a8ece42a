"""A user's own model: a Python file of equations, run once with symbols, then at the engine's full speed.

The file is code and is run as such; who calls `register` has been told so. It defines

    title, source       texts
    parameters          {symbol: (value, unit, low, high, meaning)}
    typical             {state: size}, in the order of the states
    equations(...)      states, Gin, Iin, secretion and parameters by name -> (rates, seen), as in `cohort.model.equations`
    at_rest(...)        optional: the other states from the first argument, where the balance falls strictly with it
    positive, limits    optional: whether states must stay above 0 (True); known limits

`exp` and `log` are there. `seen` holds the four columns that every measure reads.
"""

from __future__ import annotations

import hashlib
import inspect
import traceback
from collections.abc import Mapping
from typing import Any

import numpy as np

from cohort.errors import nearest
from cohort.model import body as bodies
from cohort.model.catalogue import MODELS, ModelCard
from cohort.model.trace import INPUTS, exp, log
from cohort.program import run
from cohort.quantities import INPUT_PARAMETERS, PARAMETERS, Quantity

SEEN = ("glucose_mg_dl", "insulin_mu_l", "secretion_mu_per_min", "release_mg_per_min")
WANTED = ("title", "source", "parameters", "typical", "equations")
LARGEST_CODE = 200_000
_DIFFERENCE, _SLOPE_OFF = 1e-6, 1e-5


class OwnModelError(ValueError):
    """A model file that cannot be used; the message says why, with the line where there is one."""


def register(code: str, name: str) -> str:
    """Run a model file's text and add what it defines to the models; returns the name it goes by, `name` and a digest.

    The same text again is the same model. Raises OwnModelError.
    """
    known = f"{name}@{hashlib.sha256(code.encode()).hexdigest()[:8]}"
    if known not in MODELS:
        found = _run(code, name)
        card = _card(found, known)
        added = _quantities(found["parameters"])
        PARAMETERS.update(added)
        try:
            _check_names(found, card)
            made = bodies.make_body(card, found["equations"], found.get("at_rest"))
            _check(made)
        except Exception as error:  # noqa: BLE001 - a user's code may raise anything
            for symbol in added:
                PARAMETERS.pop(symbol)
            raise error if isinstance(error, OwnModelError) else OwnModelError(_said(error, code, name)) from None
        MODELS[known] = card
        bodies.OWN[known] = made
    return known


def _run(code: str, name: str) -> dict[str, Any]:
    found: dict[str, Any] = {"exp": exp, "log": log, "__name__": name}
    try:
        exec(compile(code, name, "exec"), found)  # noqa: S102 - what --allow-model-code is for
    except Exception as error:  # noqa: BLE001 - a user's code may raise anything
        raise OwnModelError(_said(error, code, name)) from None
    missing = [word for word in WANTED if word not in found]
    if missing:
        near = nearest(missing[0], [k for k in found if not k.startswith("__")])
        raise OwnModelError(f"defines no {', '.join(missing)}{near}; a model file defines {', '.join(WANTED)}")
    return found


def _said(error: Exception, code: str, name: str) -> str:
    """An error in the file's own words, with the line of the file it came from."""
    line = getattr(error, "lineno", None)
    if line is None:
        lines = [frame.lineno for frame in traceback.extract_tb(error.__traceback__) if frame.filename == name]
        line = lines[-1] if lines else None
    where = f"line {line}: " if line and line <= code.count("\n") + 1 else ""
    what = str(error.args[0]) if isinstance(error, KeyError) and error.args else str(error)
    return f"{where}{type(error).__name__}: {what}"


def _card(found: Mapping[str, Any], name: str) -> ModelCard:
    parameters, typical = found["parameters"], found["typical"]
    if not (isinstance(parameters, dict) and parameters and isinstance(typical, dict) and typical):
        raise OwnModelError("parameters and typical are tables {symbol: ...} with at least one entry")
    wrong = [s for s in (*parameters, *typical) if not str(s).isidentifier() or s in INPUT_PARAMETERS]
    if wrong:
        raise OwnModelError(f"{wrong[0]!r} cannot be a symbol")
    for state, size in typical.items():
        if not (isinstance(size, int | float) and np.isfinite(size) and size > 0):
            raise OwnModelError(f"typical[{state!r}] is {size!r}; a size above 0 is wanted")
    return ModelCard(
        name, str(found["title"]), tuple(typical), tuple(parameters), {p: float(_entry(parameters, p)[0]) for p in parameters},
        {s: float(v) for s, v in typical.items()}, str(found["source"]), tuple(found.get("limits", ())),
        bool(found.get("positive", True)),
    )  # fmt: skip


def _entry(parameters: Mapping[str, Any], symbol: str) -> tuple[float, str, float, float, str]:
    entry = parameters[symbol]
    if not (isinstance(entry, tuple | list) and len(entry) == 5 and isinstance(entry[1], str)):
        raise OwnModelError(f"parameters[{symbol!r}] is not (value, unit, low, high, meaning)")
    numbers = [entry[i] for i in (0, 2, 3)]
    if (
        not all(isinstance(x, int | float) and np.isfinite(x) for x in numbers)
        or not numbers[1] <= numbers[0] <= numbers[2]
    ):
        raise OwnModelError(f"parameters[{symbol!r}]: {numbers[0]} does not lie in {numbers[1]} to {numbers[2]}")
    return float(entry[0]), entry[1], float(entry[2]), float(entry[3]), str(entry[4])


def _quantities(parameters: Mapping[str, Any]) -> dict[str, Quantity]:
    """Symbols that are new; one that is known keeps its meaning and must have its unit."""
    added = {}
    for symbol in parameters:
        _, unit, low, high, meaning = _entry(parameters, symbol)
        if symbol in PARAMETERS:
            if PARAMETERS[symbol].unit != unit:
                known = PARAMETERS[symbol]
                raise OwnModelError(
                    f"parameters[{symbol!r}] has unit {unit!r}; here {symbol} is {known.meaning}, in {known.unit!r}"
                )
        else:
            added[symbol] = Quantity(symbol, meaning, unit, low, high)
    return added


def _check_names(found: Mapping[str, Any], card: ModelCard) -> None:
    known = (*card.states, *INPUTS, *card.parameters, *bodies.ARM_PARAMETERS)
    for function in ("equations", "at_rest"):
        if function in found:
            for name in inspect.signature(found[function]).parameters:
                if name not in known:
                    raise OwnModelError(
                        f"{function} take {name!r}, which is no state, input or parameter{nearest(name, known)}"
                    )


def _check(made: bodies.Body) -> None:
    """Columns, finite rates at the typical state, and exact slopes against differences of the rates."""
    lacking = [column for column in SEEN if column not in made.traced.observed]
    if lacking:
        raise OwnModelError(f"equations show no {', '.join(lacking)}; {', '.join(SEEN)} are wanted")
    card = made.card
    place = [*card.typical.values(), 100.0, 0.0, *card.nominal.values(), 1.0]
    rates, slopes, n = np.array(run(made.rates, place)), run(made.jacobian, place), len(card.states)
    if not np.isfinite([*rates, *slopes]).all():
        raise OwnModelError("rates or their slopes are not finite at the typical state, Gin 100")
    exact = np.array(slopes).reshape(n, n)
    for j in range(n):
        step = _DIFFERENCE * place[j]
        ahead, behind = (run(made.rates, [*place[:j], place[j] + sign * step, *place[j + 1 :]]) for sign in (1, -1))
        near = (np.array(ahead) - np.array(behind)) / (2 * step)
        size = np.abs(exact[:, j]) + np.abs(rates) / place[j] + 1e-12
        if (np.abs(near - exact[:, j]) > _SLOPE_OFF * size).any():
            raise OwnModelError(
                f"the slope of the rates by {card.states[j]} does not agree with differences; is it smooth?"
            )
