"""Every name a user may write or read: symbol, meaning, unit, allowed range and source.

Plain data, imported by everyone. Published values belong to the models (`cohort.model`), since two models may give
one symbol two values; what a symbol means and where it may physically lie is the same in all of them.
"""

from __future__ import annotations

from dataclasses import dataclass

GLUCOSE_MG_DL_PER_MMOL_L = 18.016
"""Molar mass of glucose, 180.16 g/mol, as a factor between mg/dL and mmol/L."""

INSULIN_PMOL_PER_MU = 6.00
"""Knopp, Holder-Pearson & Chase, J Diabetes Sci Technol 2019;13:597: the one right factor."""

REFERENCE_WEIGHT_KG = 70.0


@dataclass(frozen=True)
class Quantity:
    """A named number: what it means, its unit (`1` for none) and the closed physical range `low`..`high`."""

    name: str
    meaning: str
    unit: str
    low: float
    high: float


PARAMETERS: dict[str, Quantity] = {
    q.name: q
    for q in (
        Quantity("Vp", "volume in which plasma insulin is spread", "L", 0.05, 150.0),
        Quantity("Vi", "volume in which interstitial insulin is spread", "L", 0.2, 550.0),
        Quantity("Vg", "volume in which glucose is spread", "L", 0.2, 500.0),
        Quantity("E", "exchange of insulin between plasma and interstitium", "L/min", 0.002, 20.0),
        Quantity("tp", "time constant of insulin degradation in plasma", "min", 0.1, 300.0),
        Quantity("ti", "time constant of insulin degradation in the interstitium", "min", 1.0, 5000.0),
        Quantity("td", "total delay from plasma insulin to the liver's response", "min", 0.5, 1000.0),
        Quantity("Rm", "highest rate of insulin secretion", "mU/min", 1.0, 10000.0),
        Quantity("a1", "glucose step over which secretion rises e-fold below its half-point", "mg/L", 10.0, 10000.0),
        Quantity("C1", "glucose concentration at half the highest secretion", "mg/L", 50.0, 50000.0),
        Quantity("Ub", "highest glucose use that needs no insulin", "mg/min", 0.5, 3500.0),
        Quantity("C2", "glucose concentration scale of the use that needs no insulin", "mg/L", 2.0, 7000.0),
        Quantity("C3", "glucose concentration scale of the use that insulin drives", "mg/L", 20.0, 50000.0),
        Quantity("U0", "insulin-driven use factor with no insulin", "mg/min", 0.1, 2000.0),
        Quantity("Um", "insulin-driven use factor at the highest insulin", "mg/min", 1.0, 50000.0),
        Quantity("beta", "steepness of insulin's effect on glucose use", "1", 0.2, 20.0),
        Quantity("C4", "interstitial insulin concentration at the half-point of its effect on use", "mU/L", 1.0, 4000.0),
        Quantity("Rg", "highest rate of glucose release by the liver", "mg/min", 1.0, 9000.0),
        Quantity("alpha", "steepness of insulin's braking of glucose release", "L/mU", 0.005, 15.0),
        Quantity("C5", "insulin concentration at half the highest glucose release", "mU/L", 0.5, 1300.0),
    )
}

INPUT_PARAMETERS: dict[str, Quantity] = {
    q.name: q
    for q in (
        Quantity("meal_absorption", "time constant of glucose appearance after a meal", "min", 1.0, 600.0),
        Quantity("meal_bioavailability", "share of a meal's glucose that reaches the circulation", "1", 0.0, 1.0),
    )
}
"""Properties of a person that act on the arms' inputs, not on the body's equations."""
