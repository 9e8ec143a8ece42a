"""The bodies: each model's equations once, as its paper prints them.

Time in min; Ip, Ii, x1..x3 in mU; G in mg; Gin (mg/min) and Iin (mU/min) enter the plasma; `secretion` multiplies
the pancreas's own secretion. Each function returns the rates of change and what a reader sees of the body. They are
called with symbols (`cohort.model.trace`), so they may use + - * / ** exp log only.
"""

from __future__ import annotations

import inspect
from collections.abc import Callable
from typing import Any

from cohort.model.trace import Symbol, exp

S = Symbol
Equations = tuple[dict[str, Symbol], dict[str, Symbol]]

HELD_RELEASE = 0.3390670019600681
"""steady-liver: release as a share of Rg, f5/Rg of the published hepatic-lag body at rest under 216 mg/min."""


def f1(G: S, Vg: S, Rm: S, C1: S, a1: S) -> S:
    """Insulin secretion, mU/min."""
    return Rm / (1 + exp((C1 - G / Vg) / a1))


def f2(G: S, Vg: S, Ub: S, C2: S) -> S:
    """Glucose use that needs no insulin, mg/min."""
    return Ub * (1 - exp(-G / (C2 * Vg)))


def f3(G: S, Vg: S, C3: S) -> S:
    """How glucose drives the use that needs insulin."""
    return G / (C3 * Vg)


def f4(Ii: S, Vi: S, E: S, ti: S, U0: S, Um: S, beta: S, C4: S) -> S:
    """How insulin drives it, mg/min; u is the equivalent plasma concentration over its half-point."""
    u = (Ii / C4) * (1 / Vi + 1 / (E * ti))
    return U0 + (Um - U0) / (1 + u**-beta)


def f5(x: S, Vp: S, Rg: S, alpha: S, C5: S) -> S:
    """Glucose release by the liver, mg/min; x is the insulin amount it answers."""
    return Rg / (1 + exp(alpha * (x / Vp - C5)))


def _seen(G: S, Ip: S, secreted: S, released: S, Vg: S, Vp: S) -> dict[str, S]:
    return {
        "glucose_mg_dl": G / (10 * Vg),
        "insulin_mu_l": Ip / Vp,
        "secretion_mu_per_min": secreted,
        "release_mg_per_min": released,
    }


def hepatic_lag(
    Ip: S, Ii: S, G: S, x1: S, x2: S, x3: S, Gin: S, Iin: S, secretion: S, Vp: S, Vi: S, Vg: S, E: S, tp: S, ti: S,
    td: S, Rm: S, a1: S, C1: S, Ub: S, C2: S, C3: S, U0: S, Um: S, beta: S, C4: S, Rg: S, alpha: S, C5: S,
) -> Equations:  # fmt: skip
    """Sturis et al. 1991 in the form of Tolic et al. 2000: a three-stage lag between plasma insulin and the liver."""
    secreted = secretion * f1(G, Vg, Rm, C1, a1)
    released = f5(x3, Vp, Rg, alpha, C5)
    used = f2(G, Vg, Ub, C2) + f3(G, Vg, C3) * f4(Ii, Vi, E, ti, U0, Um, beta, C4)
    exchange = E * (Ip / Vp - Ii / Vi)
    rates = {
        "Ip": secreted + Iin - exchange - Ip / tp,
        "Ii": exchange - Ii / ti,
        "G": Gin - used + released,
        "x1": 3 * (Ip - x1) / td,
        "x2": 3 * (x1 - x2) / td,
        "x3": 3 * (x2 - x3) / td,
    }
    return rates, _seen(G, Ip, secreted, released, Vg, Vp)


def lag_chain(n: int) -> tuple[Callable[..., Equations], Callable[..., dict[str, S]]]:
    """(equations, at rest) of the same body with n stages in the lag and the same total delay; n = 3 is `hepatic_lag`.

    The lag is an Erlang law of n stages: mean td, variance td^2/n; it tends to a discrete delay.
    """
    stages = tuple(f"x{k}" for k in range(1, n + 1))
    base = list(inspect.signature(prompt_liver, eval_str=False).parameters)
    names = [*base[:3], *stages, *base[3:], "td"]

    def equations(*given: S) -> Equations:
        at = dict(zip(names, given, strict=True))
        rates, seen = prompt_liver(*(at[name] for name in base))
        released = f5(at[stages[-1]], at["Vp"], at["Rg"], at["alpha"], at["C5"])
        rates["G"] = rates["G"] - seen["release_mg_per_min"] + released
        before = at["Ip"]
        for stage in stages:
            rates[stage] = n * (before - at[stage]) / at["td"]
            before = at[stage]
        return rates, {**seen, "release_mg_per_min": released}

    def at_rest(*given: S) -> dict[str, S]:
        rest = insulin_at_rest(*given)
        return {**rest, **dict.fromkeys(stages, rest["Ip"])}

    return _named(equations, names), _named(at_rest, list(inspect.signature(insulin_at_rest).parameters))


def _named(function: Callable[..., Any], names: list[str]) -> Callable[..., Any]:
    """The same function with these names for its arguments, by which tracing hands it symbols."""
    kind = inspect.Parameter.POSITIONAL_OR_KEYWORD
    function.__signature__ = inspect.Signature([inspect.Parameter(name, kind) for name in names])  # type: ignore[attr-defined]
    return function


def release_by_glucose(
    Ip: S, Ii: S, G: S, x1: S, x2: S, x3: S, Gin: S, Iin: S, secretion: S, Vp: S, Vi: S, Vg: S, E: S, tp: S, ti: S,
    td: S, Rm: S, a1: S, C1: S, Ub: S, C2: S, C3: S, U0: S, Um: S, beta: S, C4: S, Rg: S, alpha: S, C5: S,
    gamma: S, C6: S, Sb: S, Sm: S, delta: S, C7: S,
) -> Equations:  # fmt: skip
    """Tolic et al. 2000, extended: release falls with glucose too (f6), and glucose leaves by a second way (f7)."""
    rates, seen = hepatic_lag(Ip, Ii, G, x1, x2, x3, Gin, Iin, secretion, Vp, Vi, Vg, E, tp, ti, td, Rm, a1, C1, Ub, C2, C3,
                              U0, Um, beta, C4, Rg, alpha, C5)  # fmt: skip
    level = G / (C3 * Vg)
    f6 = 1 / (1 + exp(gamma * (level - C6)))
    f7 = Sb + (Sm - Sb) / (1 + exp(delta * (level - C7)))
    released = seen["release_mg_per_min"] * f6
    rates["G"] = rates["G"] - seen["release_mg_per_min"] + released - f7
    return rates, {**seen, "release_mg_per_min": released}


def prompt_liver(
    Ip: S, Ii: S, G: S, Gin: S, Iin: S, secretion: S, Vp: S, Vi: S, Vg: S, E: S, tp: S, ti: S,
    Rm: S, a1: S, C1: S, Ub: S, C2: S, C3: S, U0: S, Um: S, beta: S, C4: S, Rg: S, alpha: S, C5: S,
) -> Equations:  # fmt: skip
    """The same body whose liver answers plasma insulin at once: the limit td -> 0."""
    secreted = secretion * f1(G, Vg, Rm, C1, a1)
    released = f5(Ip, Vp, Rg, alpha, C5)
    used = f2(G, Vg, Ub, C2) + f3(G, Vg, C3) * f4(Ii, Vi, E, ti, U0, Um, beta, C4)
    exchange = E * (Ip / Vp - Ii / Vi)
    rates = {
        "Ip": secreted + Iin - exchange - Ip / tp,
        "Ii": exchange - Ii / ti,
        "G": Gin - used + released,
    }
    return rates, _seen(G, Ip, secreted, released, Vg, Vp)


def steady_liver(
    Ip: S, Ii: S, G: S, Gin: S, Iin: S, secretion: S, Vp: S, Vi: S, Vg: S, E: S, tp: S, ti: S,
    Rm: S, a1: S, C1: S, Ub: S, C2: S, C3: S, U0: S, Um: S, beta: S, C4: S, Rg: S,
) -> Equations:  # fmt: skip
    """The same body whose liver releases glucose at a constant rate, whatever insulin does."""
    secreted = secretion * f1(G, Vg, Rm, C1, a1)
    released = HELD_RELEASE * Rg
    used = f2(G, Vg, Ub, C2) + f3(G, Vg, C3) * f4(Ii, Vi, E, ti, U0, Um, beta, C4)
    exchange = E * (Ip / Vp - Ii / Vi)
    rates = {
        "Ip": secreted + Iin - exchange - Ip / tp,
        "Ii": exchange - Ii / ti,
        "G": Gin - used + released,
    }
    return rates, _seen(G, Ip, secreted, released, Vg, Vp)


def insulin_at_rest(
    G: S, Iin: S, secretion: S, Vp: S, Vi: S, Vg: S, E: S, tp: S, ti: S, Rm: S, a1: S, C1: S
) -> dict[str, S]:
    """Insulin amounts that stay where they are while glucose is G: with r = Ii/Ip, Ip (E/Vp + 1/tp - r E/Vi) = f1."""
    r = (E / Vp) / (E / Vi + 1 / ti)
    # E/Vp - r E/Vi without the cancellation
    to_interstitium = r / ti
    Ip = (secretion * f1(G, Vg, Rm, C1, a1) + Iin) / (1 / tp + to_interstitium)
    return {"Ip": Ip, "Ii": r * Ip}


def lag_at_rest(
    G: S, Iin: S, secretion: S, Vp: S, Vi: S, Vg: S, E: S, tp: S, ti: S, Rm: S, a1: S, C1: S
) -> dict[str, S]:
    """As `insulin_at_rest`, the lag's stages holding the plasma's amount."""
    rest = insulin_at_rest(G, Iin, secretion, Vp, Vi, Vg, E, tp, ti, Rm, a1, C1)
    return {**rest, "x1": rest["Ip"], "x2": rest["Ip"], "x3": rest["Ip"]}
