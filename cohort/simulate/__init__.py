"""Compiled integration of many subjects, a status for each and never an exception.

The room itself can be called: `cohort.simulate(model, parameters, arm)` takes one subject or an array of them through
an arm, without files.
"""

from __future__ import annotations

import sys
import types
from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from cohort.model.protocol import Arm
    from cohort.simulate.course import Courses


class _Room(types.ModuleType):
    """This module, callable."""

    def __call__(
        self, model: str, parameters: Mapping[str, Any] | None, arm: Arm, body_weight_kg: Any = None
    ) -> Courses:
        """Simulate one subject or several; see `cohort.simulate.people.simulate`."""
        from cohort.simulate.people import simulate

        return simulate(model, parameters or {}, arm, body_weight_kg)


sys.modules[__name__].__class__ = _Room
