"""What each meal does: a row a meal."""

from __future__ import annotations

from cohort.compiled import jit
from cohort.measure.scan import extremes, polished, scan, turns_between
from cohort.measure.windows import above, baseline

MEAL_COLUMNS = ("baseline_mg_dl", "peak_mg_dl", "time_to_peak_min", "iauc_mg_dl_min", "ringing_cycles")

IAUC_MIN = 120.0
"""Length of a meal's incremental area (Wolever, Br J Nutr 2004;91:295), cut short by the next meal."""

RINGING_MG_DL = 1.0


@jit
def meal_rows(roots, start, step_size, coefficients, summaries, n_steps, status, times, end, periods, out):  # type: ignore[no-untyped-def]
    """Write MEAL_COLUMNS of every subject and meal into out float64[n, meals, columns]; failed courses stay as they are.

    Peak and ringing look from the meal to the next (or the arm's end). A ringing cycle is a rise and the fall after
    it, both beyond 1 mg/dL, once the meal's own peak has passed.
    """
    meals = times.shape[0]
    for s in range(n_steps.shape[0]):
        if status[s] != -1:
            continue
        n = n_steps[s]
        course = scan(roots, start[s, :n], step_size[s, :n], coefficients[s, 0, :n], summaries[s, 0, :n])
        for m in range(meals):
            begin = times[m]
            until = times[m + 1] if m + 1 < meals else end
            before = baseline(course, begin, periods[s])
            peak, when, _ = extremes(course, begin, until)
            out[s, m, 0], out[s, m, 1], out[s, m, 2] = before, peak, polished(course, when) - begin
            _, out[s, m, 3] = above(course, begin, min(begin + IAUC_MIN, until), before)
            first, last = turns_between(course, when, until)
            out[s, m, 4] = ringing(course.values[first:last])


@jit
def ringing(values):  # type: ignore[no-untyped-def]
    """How many rises and falls, both beyond 1 mg/dL, the turning points after a peak hold (trough, crest, trough …)."""
    cycles = 0
    for i in range(1, values.shape[0] - 1):
        rise, fall = values[i] - values[i - 1], values[i] - values[i + 1]
        if rise > RINGING_MG_DL and fall > RINGING_MG_DL:
            cycles += 1
    return cycles
