"""Textbook oscillators as traced models, run through the same public functions as the bodies."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np

from cohort.measure.regime import Cycles, cycles
from cohort.model.body import Body, make_body
from cohort.model.catalogue import ModelCard


def seen(x: Any, y: Any) -> dict[str, Any]:
    """The two states under the column names every measure reads."""
    return {"glucose_mg_dl": x, "insulin_mu_l": y, "secretion_mu_per_min": y}


def van_der_pol(x, y, Gin, Iin, secretion, mu):  # type: ignore[no-untyped-def]
    return {"x": y + Gin, "y": mu * (1 - x * x) * y - x + Iin}, seen(x, y)


def brusselator(x, y, Gin, Iin, secretion, A, B):  # type: ignore[no-untyped-def]
    return {"x": A + x * x * y - (B + 1) * x + Gin, "y": B * x - x * x * y + Iin}, seen(x, y)


def subcritical(x, y, Gin, Iin, secretion, mu):  # type: ignore[no-untyped-def]
    """r' = mu r + r^3 - r^5, angle' = 1, in Cartesian form, about the origin."""
    r2 = x * x + y * y
    pull = mu + r2 - r2 * r2
    return {"x": pull * x - y + Gin, "y": pull * y + x + Iin}, seen(x, y)


def shifted_subcritical(x, y, Gin, Iin, secretion, mu):  # type: ignore[no-untyped-def]
    """The same about (2, 0), so that a factor on x moves it off its equilibrium."""
    u = x - 2
    r2 = u * u + y * y
    pull = mu + r2 - r2 * r2
    return {"x": pull * u - y + Gin, "y": pull * y + u + Iin}, seen(x, y)


def shifted_supercritical(x, y, Gin, Iin, secretion, mu):  # type: ignore[no-untyped-def]
    """r' = mu r - r^3 about (2, 0): no orbit while mu < 0."""
    u = x - 2
    pull = mu - u * u - y * y
    return {"x": pull * u - y + Gin, "y": pull * y + u + Iin}, seen(x, y)


def toy(name: str, text: Callable[..., Any], **parameters: float) -> Body:
    """A body from a toy's equations; its states may have either sign."""
    card = ModelCard(
        name, name, ("x", "y"), tuple(parameters), parameters, {"x": 1.0, "y": 1.0}, "textbook", positive=False
    )  # fmt: skip
    return make_body(card, text)


def cycles_of(body: Body) -> Cycles:
    """Its cycles at the card's values, with no input."""
    parameters = np.array([[*body.card.nominal.values(), 1.0]])
    return cycles(body, parameters, np.zeros(1), np.zeros(1))
