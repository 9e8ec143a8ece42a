"""Which subjects keep their time courses."""

import numpy as np
from hypothesis import given
from hypothesis import strategies as st

from cohort.execute.courses import BORDERLINE, EXTREME, TYPICAL, choose


def test_the_rule_by_hand() -> None:
    size = np.array([0.0, 10.0, 20.0, 30.0, 40.0, 50.0, 60.0, 70.0, 80.0])
    growth = np.array([-9.0, -1.0, 5.0, 6.0, 7.0, 0.1, 8.0, 9.0, 10.0])
    rows, why = choose(size, growth, 8)
    chosen = dict(zip(rows.tolist(), why.tolist(), strict=True))
    assert chosen == {
        3: TYPICAL,
        4: TYPICAL,
        5: TYPICAL,
        2: TYPICAL,
        1: BORDERLINE,
        6: BORDERLINE,
        8: EXTREME,
        0: EXTREME,
    }


@given(st.lists(st.floats(0, 100) | st.just(float("nan")), min_size=1, max_size=40), st.integers(0, 30))
def test_nobody_is_chosen_twice_and_never_more_than_wanted(size: list[float], wanted: int) -> None:
    values = np.array(size)
    rows, why = choose(values, values - 50.0, wanted)
    assert len(set(rows.tolist())) == len(rows) == len(why) <= wanted
    assert (np.diff(rows) > 0).all()
