"""Quantities with units, as a small checked table: `parse("36 min", "min")` -> 36.0."""

from __future__ import annotations

import re
from dataclasses import dataclass

from cohort.errors import nearest
from cohort.quantities import GLUCOSE_MG_DL_PER_MMOL_L, INSULIN_PMOL_PER_MU

_MG_PER_MMOL = 10.0 * GLUCOSE_MG_DL_PER_MMOL_L
_PMOL = 1.0 / INSULIN_PMOL_PER_MU


@dataclass(frozen=True)
class Dimension:
    """A kind of quantity: what it is called, the unit it is kept in, and what other units are worth in that one."""

    meaning: str
    unit: str
    factors: dict[str, float]


DIMENSIONS: dict[str, Dimension] = {
    d.unit: d
    for d in (
        Dimension("a time", "min", {"min": 1.0, "h": 60.0, "d": 1440.0, "s": 1.0 / 60.0}),
        Dimension("a volume", "L", {"L": 1.0, "dL": 0.1, "mL": 1e-3}),
        Dimension("a clearance", "L/min", {"L/min": 1.0, "mL/min": 1e-3, "L/h": 1.0 / 60.0}),
        Dimension(
            "a rate of glucose",
            "mg/min",
            {"mg/min": 1.0, "g/min": 1000.0, "g/h": 1000.0 / 60.0, "mg/h": 1.0 / 60.0,
             "mmol/min": _MG_PER_MMOL, "mmol/h": _MG_PER_MMOL / 60.0, "umol/min": _MG_PER_MMOL / 1000.0},
        ),
        Dimension(
            "a rate of glucose by weight",
            "mg/kg/min",
            {"mg/kg/min": 1.0, "g/kg/h": 1000.0 / 60.0, "mg/kg/h": 1.0 / 60.0,
             "mmol/kg/min": _MG_PER_MMOL, "umol/kg/min": _MG_PER_MMOL / 1000.0},
        ),
        Dimension("an amount of glucose", "mg", {"mg": 1.0, "g": 1000.0, "mmol": _MG_PER_MMOL}),
        Dimension("an amount of glucose by weight", "mg/kg", {"mg/kg": 1.0, "g/kg": 1000.0, "mmol/kg": _MG_PER_MMOL}),
        Dimension(
            "a rate of insulin",
            "mU/min",
            {"mU/min": 1.0, "U/min": 1000.0, "U/h": 1000.0 / 60.0, "mU/h": 1.0 / 60.0,
             "pmol/min": _PMOL, "nmol/min": 1000.0 * _PMOL, "nmol/h": 1000.0 / 60.0 * _PMOL},
        ),
        Dimension(
            "a rate of insulin by weight",
            "mU/kg/min",
            {"mU/kg/min": 1.0, "U/kg/h": 1000.0 / 60.0, "pmol/kg/min": _PMOL},
        ),
        Dimension(
            "an amount of insulin", "mU", {"mU": 1.0, "U": 1000.0, "pmol": _PMOL, "nmol": 1000.0 * _PMOL}
        ),
        Dimension("an amount of insulin by weight", "mU/kg", {"mU/kg": 1.0, "U/kg": 1000.0, "pmol/kg": _PMOL}),
        Dimension(
            "a glucose concentration",
            "mg/dL",
            {"mg/dL": 1.0, "mmol/L": GLUCOSE_MG_DL_PER_MMOL_L, "mg/L": 0.1, "g/L": 100.0},
        ),
        Dimension(
            "a glucose concentration",
            "mg/L",
            {"mg/L": 1.0, "mg/dL": 10.0, "g/L": 1000.0, "mmol/L": _MG_PER_MMOL},
        ),
        Dimension(
            "an insulin concentration",
            "mU/L",
            {"mU/L": 1.0, "uU/mL": 1.0, "U/L": 1000.0, "pmol/L": _PMOL, "nmol/L": 1000.0 * _PMOL},
        ),
        Dimension("a slope by insulin", "L/mU", {"L/mU": 1.0, "L/U": 1e-3, "mL/uU": 1.0, "L/pmol": INSULIN_PMOL_PER_MU}),
        Dimension("a body weight", "kg", {"kg": 1.0, "g": 1e-3, "lb": 0.45359237}),
        Dimension("a plain number", "1", {"%": 0.01}),
    )
}  # fmt: skip

_QUANTITY = re.compile(r"\s*([+-]?(?:\d[\d_]*\.?[\d_]*|\.\d+)(?:[eE][+-]?\d+)?)\s*([^\s\d].*?)?\s*")


class UnitError(ValueError):
    """A text that is no quantity of the wanted kind; the message says what was found and what is allowed."""


def _allowed(units: tuple[str, ...]) -> str:
    names = [u for unit in units for u in DIMENSIONS[unit].factors]
    return names[0] if len(names) == 1 else f"{', '.join(names[:-1])} or {names[-1]}"


def parse(value: object, *units: str) -> tuple[float, str]:
    """Read a quantity that may be of any of the kinds kept in `units`: (number, which of them it is in).

    A plain number is taken in the first of them. Raises UnitError.
    """
    for kept in units:
        if kept not in DIMENSIONS:  # a unit of a user's own model
            plain = kept.replace(" ", "").removeprefix("1")  # "0.06 /min": a unit cannot begin with a digit
            DIMENSIONS[kept] = Dimension(f"a quantity in {kept}", kept, {plain: 1.0})
    wanted = DIMENSIONS[units[0]].meaning
    if isinstance(value, bool) or not isinstance(value, int | float | str):
        raise UnitError(f'{str(value)[:60]} is not {wanted}; write a number or a text such as "1 {units[0]}"')
    if not isinstance(value, str):
        return _number(value), units[0]
    found = _QUANTITY.fullmatch(value) if len(value) < 100 else None
    if found is None:
        raise UnitError(f"{value[:60]!r} is not {wanted}; write a number and a unit: {_allowed(units)}")
    number = _number(float(found[1].replace("_", "")))
    unit = (found[2] or "").replace("µ", "u").replace("μ", "u").replace(" ", "")
    if not unit:
        return number, units[0]
    for kept in units:
        if unit in DIMENSIONS[kept].factors:
            return _number(number * DIMENSIONS[kept].factors[unit]), kept
    others = [d.meaning for d in DIMENSIONS.values() if unit in d.factors]
    if others:
        raise UnitError(f"{value!r} is {others[0]}; {wanted} is wanted: {_allowed(units)}")
    every = [u for kept in units for u in DIMENSIONS[kept].factors]
    raise UnitError(f"{value!r}: {unit!r} is no unit of {wanted}{nearest(unit, every)}; allowed: {_allowed(units)}")


def _number(value: float) -> float:
    try:
        number = float(value)
    except OverflowError:  # its digits may be too many to print
        raise UnitError("so large a whole number is not a finite number") from None
    if number != number or number in (float("inf"), float("-inf")):
        raise UnitError(f"{value!r} is not a finite number")
    return number
