"""What is done to every subject of an arm: infusions, meals, boluses and the clamp, as plain data.

Times are minutes from the arm's beginning, glucose rates mg/min (or mg/kg/min where `per_kg`), glucose amounts mg,
insulin rates mU/min, insulin amounts mU. Nothing here computes: `cohort.model.inputs` turns these into rates.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass


@dataclass(frozen=True)
class Constant:
    """A steady rate from the arm's beginning to its end."""

    rate: float
    per_kg: bool = False


@dataclass(frozen=True)
class Steps:
    """Rate `rates[i]` from `times_min[i]` until the next time; zero before the first."""

    times_min: tuple[float, ...]
    rates: tuple[float, ...]
    per_kg: bool = False


@dataclass(frozen=True)
class Natural:
    """A period given as a multiple of the subject's own period at the same mean input."""

    factor: float


@dataclass(frozen=True)
class OnOff:
    """`rate` for the first `duty` of every period, nothing for the rest. Mean: rate x duty."""

    rate: float
    period_min: float | Natural
    duty: float = 0.5
    per_kg: bool = False


@dataclass(frozen=True)
class Sine:
    """mean x (1 + relative_amplitude sin(2 pi t / period + phase)); phase in radians."""

    mean: float
    relative_amplitude: float
    period_min: float | Natural
    phase: float = 0.0
    per_kg: bool = False


@dataclass(frozen=True)
class Meal:
    """Appearance of `amount_mg` from `time_min` on; its integral is amount x bioavailability.

    stages 1: amount exp(-t/a)/a; stages 2: amount t exp(-t/a)/a^2. A subject's own meal_absorption and
    meal_bioavailability, where they vary, take the place of the arm's.
    """

    time_min: float
    amount_mg: float
    absorption_min: float
    stages: int = 1
    bioavailability: float = 1.0
    repeat_min: float | None = None
    per_kg: bool = False


@dataclass(frozen=True)
class Bolus:
    """`amount` into plasma (insulin, mU) or the glucose space (glucose, mg) at once."""

    time_min: float
    amount: float
    per_kg: bool = False


Shape = Constant | Steps | OnOff | Sine | Meal | Bolus


@dataclass(frozen=True)
class Clamp:
    """Glucose held at `glucose_mg_dl` (None: the subject's own fasting value) from `from_min` on."""

    glucose_mg_dl: float | None
    from_min: float = 0.0


@dataclass(frozen=True)
class AtFasting:
    """Start at the equilibrium with no input."""


@dataclass(frozen=True)
class AtEquilibrium:
    """Start at the equilibrium of the arm's steady input, glucose displaced by the relative amount `displace`."""

    displace: float = 0.05


@dataclass(frozen=True)
class AtState:
    """Start at a stated state, amounts by state symbol."""

    values: Mapping[str, float]


Start = AtFasting | AtEquilibrium | AtState


@dataclass(frozen=True)
class Arm:
    """One protocol: `duration_min` includes `settle_min`; the measured window is the rest.

    `steady` is the stated steady glucose input (mg/min, or mg/kg/min where `steady_per_kg`) for arms that have none
    of their own. `secretion` multiplies the pancreas's own secretion throughout.
    """

    name: str
    duration_min: float
    settle_min: float = 0.0
    start: Start = AtFasting()
    glucose: tuple[Shape, ...] = ()
    insulin: tuple[Shape, ...] = ()
    secretion: float = 1.0
    clamp: Clamp | None = None
    steady: float | None = None
    steady_per_kg: bool = False
