"""The one adapter to SALib: its Morris trajectories, and its first- and total-order estimators.

What its callers guard against, since SALib 1.6 is silent about it: one missing output makes every index 0; only the
order of the outputs ties them to the design; seed 0 is no seed; Morris levels of the design are not those of the
analysis unless told so; a constant output gives zeros; its intervals bootstrap one low-discrepancy sample.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

if TYPE_CHECKING:
    from cohort.infer.ranking import Design

Array = NDArray[np.float64]


def load() -> None:
    """Import SALib, which takes seconds when cold; a run does so while it simulates."""
    import SALib.analyze.sobol
    import SALib.sample.morris  # noqa: F401


def trajectories(design: Design, trim: float, rng: np.random.Generator) -> Array:
    """Morris trajectories (Technometrics 1991;33:161) in [trim, 1 - trim]^names, a row a point, one after another."""
    from SALib.sample.morris import sample

    belongs = {column: factor.name for factor in design.factors for column in factor.columns}
    problem = {
        "num_vars": len(design.names),
        "names": list(design.names),
        "groups": [belongs[column] for column in range(len(design.names))],
        "bounds": [[trim, 1.0 - trim]] * len(design.names),
    }
    return np.asarray(sample(problem, design.replicates, num_levels=design.levels, seed=rng), dtype=float)


def first_and_total(a: Array, b: Array, swapped: Array) -> tuple[Array, Array]:
    """S1 (Saltelli et al., Comput Phys Commun 2010;181:259) and ST (Jansen, ibid. 1999;117:35) of one replicate.

    a, b: outputs float64[n]; swapped: float64[factors, n], A with each factor from B. Returns float64[factors] each.
    Raises ValueError where an output is missing or A and B do not vary.
    """
    from SALib.analyze.sobol import first_order, total_order

    a, b, swapped = standardised(a, b, swapped)
    first = np.array([float(first_order(a, one, b)) for one in swapped])
    total = np.array([float(total_order(a, one, b)) for one in swapped])
    return first, total


def standardised(a: Array, b: Array, *others: Array) -> tuple[Array, ...]:
    """Outputs centred and scaled by those of A and B together. Raises ValueError where one is missing or none varies."""
    if not all(np.isfinite(some).all() for some in (a, b, *others)):
        raise ValueError("an output is missing")
    both = np.concatenate([a, b])
    middle, spread = both.mean(), both.std()
    if not spread > 1e-14 * np.abs(both).max():
        raise ValueError("the output does not vary")
    return tuple((some - middle) / spread for some in (a, b, *others))
