"""The models that ship: names, parameters, published values, sources and known limits. Light to import."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass


@dataclass(frozen=True)
class ModelCard:
    """What a reader may know of a model without running it.

    states and parameters are in canonical order; `nominal` holds the published value of every parameter in the unit
    of `cohort.quantities.PARAMETERS`; `typical` is the size of each state, used to scale errors; `positive` says
    that a state below zero has left the physical range.
    """

    name: str
    title: str
    states: tuple[str, ...]
    parameters: tuple[str, ...]
    nominal: Mapping[str, float]
    typical: Mapping[str, float]
    source: str
    limits: tuple[str, ...] = ()
    positive: bool = True


_TOLIC = "Tolic, Mosekilde & Sturis, J Theor Biol 2000;207:361-375, as restated in BIOMD0000000372"

_NOMINAL = {
    "Vp": 3.0, "Vi": 11.0, "Vg": 10.0, "E": 0.2, "tp": 6.0, "ti": 100.0, "td": 36.0, "Rm": 210.0, "a1": 300.0,
    "C1": 2000.0, "Ub": 72.0, "C2": 144.0, "C3": 1000.0, "U0": 40.0, "Um": 940.0, "beta": 1.77, "C4": 80.0,
    "Rg": 180.0, "alpha": 0.29, "C5": 26.0,
}  # fmt: skip

_TYPICAL = {"Ip": 90.0, "Ii": 200.0, "G": 12000.0, "x1": 90.0, "x2": 90.0, "x3": 90.0}

_LIMITS = (
    "At 6 mg/kg/min (420 mg/min at 70 kg) people oscillate (Sturis et al., J Clin Invest 1991;87:439-445); "
    "this model is damped there.",
    "With no infusion at all the model is damped; fasting people show oscillations "
    "(Sturis et al., J Clin Endocrinol Metab 1993;76:895).",
    "Steady insulin clearance, 0.57 L/min, is low against the 0.7-0.86 L/min measured (Turnheim & Waldhäusl 1988).",
    "No sleep, time of day, incretins, or clearance that falls with dose.",
)


_EXTENDED = {"gamma": 5.0, "C6": 2.0, "Sb": 20.0, "Sm": 140.0, "delta": -2.4, "C7": 2.0}
MOST_STAGES = 12


def _card(
    name: str,
    title: str,
    without: tuple[str, ...],
    states: tuple[str, ...],
    source: str,
    changed: Mapping[str, float] | None = None,
    limits: tuple[str, ...] = _LIMITS,
) -> ModelCard:
    nominal = {**_NOMINAL, **(changed or {})}
    parameters = tuple(p for p in nominal if p not in without)
    return ModelCard(
        name, title, states, parameters, {p: nominal[p] for p in parameters},
        {s: _TYPICAL.get(s, _TYPICAL["Ip"]) for s in states}, source, limits,
    )  # fmt: skip


def _chain(n: int) -> ModelCard:
    return _card(
        f"lag-chain-{n}",
        f"the liver answers plasma insulin through {n} stage{'s' if n > 1 else ''} of lag with the same total delay td (3: "
        "hepatic-lag)",
        (),
        ("Ip", "Ii", "G", *(f"x{k}" for k in range(1, n + 1))),
        f"the hepatic-lag equations with {n} for 3 stages; values of {_TOLIC}",
    )


MODELS: dict[str, ModelCard] = {
    card.name: card
    for card in (
        _card(
            "hepatic-lag",
            "six states; the liver answers plasma insulin through a three-stage lag of total delay td",
            (),
            ("Ip", "Ii", "G", "x1", "x2", "x3"),
            f"Sturis, Polonsky, Mosekilde & Van Cauter, Am J Physiol 1991;260:E801-E809, in the form of {_TOLIC}",
        ),
        _card(
            "prompt-liver",
            "three states; the liver answers plasma insulin at once (hepatic-lag in the limit td -> 0)",
            ("td",),
            ("Ip", "Ii", "G"),
            f"the hepatic-lag equations without the lag; values of {_TOLIC}",
        ),
        _card(
            "steady-liver",
            "three states; the liver releases glucose at a constant rate, whatever insulin does",
            ("td", "alpha", "C5"),
            ("Ip", "Ii", "G"),
            f"the hepatic-lag equations with release held at its equilibrium under 216 mg/min; values of {_TOLIC}",
        ),
        *(_chain(n) for n in range(1, MOST_STAGES + 1)),
        _card(
            "release-by-glucose",
            "six states; the liver's release falls with glucose too, and glucose leaves by a second way as it rises",
            (),
            ("Ip", "Ii", "G", "x1", "x2", "x3"),
            f"the extended form of {_TOLIC}",
            {"tp": 4.0, "alpha": 0.41, "C5": 29.0, **_EXTENDED},
            (
                *_LIMITS,
                "Glucose leaves by its second way even where there is none: extreme bodies can run out of it (then "
                "the row fails).",
            ),
        ),
    )
}
