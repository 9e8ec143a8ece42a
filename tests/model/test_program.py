"""Straight-line programs: their functions against the C library's, and machine code against the plain-Python twin."""

import math
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from cohort.compiled import LANES, run_compiled
from cohort.program import Builder, Program, run

ULP = 2.220446049250313e-16


def program_of(kind: str) -> Program:
    builder = Builder(kind, 1)
    method = {"exp": builder.exp, "log": builder.log, "logistic": builder.logistic, "sqrt": builder.sqrt}
    if kind in method:
        return builder.finish([method[kind](0)])
    return builder.finish(builder.sin_cos(0))


def execute(program: Program, inputs: list[float], lanes: int) -> np.ndarray:
    source = np.repeat(np.array(inputs)[:, None], lanes, axis=1).copy()
    result = np.empty((len(program.outputs), lanes))
    run_compiled(program, source, result, lanes)
    return result


@given(st.floats(-690.0, 690.0))
def test_exp_is_within_two_units_in_the_last_place_of_the_c_library(x: float) -> None:
    assert run(program_of("exp"), [x])[0] == pytest.approx(math.exp(x), rel=2 * ULP)


@given(st.floats(1e-300, 1e300))
def test_log_is_within_two_units_in_the_last_place_of_the_c_library(x: float) -> None:
    assert run(program_of("log"), [x])[0] == pytest.approx(math.log(x), rel=2 * ULP, abs=1e-17)


@given(st.floats(-1e5, 1e5))
def test_sine_and_cosine_agree_with_the_c_library(x: float) -> None:
    sine, cosine = run(program_of("sin_cos"), [x])
    assert abs(sine - math.sin(x)) <= 2 * ULP
    assert abs(cosine - math.cos(x)) <= 2 * ULP


def test_functions_outside_their_domain_do_not_invent_numbers() -> None:
    assert run(program_of("log"), [0.0])[0] == -math.inf
    assert math.isnan(run(program_of("log"), [math.nan])[0])
    assert math.isnan(run(program_of("log"), [-1.0])[0])
    assert math.isnan(run(program_of("exp"), [math.nan])[0])
    assert math.isnan(run(program_of("sqrt"), [-1.0])[0])
    assert run(program_of("logistic"), [-1e9])[0] < 1e-300
    assert run(program_of("logistic"), [1e9])[0] == 1.0


@settings(max_examples=50)
@given(st.sampled_from(["exp", "log", "logistic", "sqrt", "sin_cos"]), st.floats(-700.0, 700.0))
def test_machine_code_and_twin_give_the_same_bits_in_every_lane(kind: str, x: float) -> None:
    program = program_of(kind)
    expected = np.array(run(program, [x]))
    for lanes in (1, LANES):
        found = execute(program, [x], lanes)
        for lane in range(lanes):
            np.testing.assert_array_equal(found[:, lane], expected)


@given(st.floats(-1e6, 1e6), st.floats(-1e6, 1e6), st.floats(-1e6, 1e6))
def test_fused_multiply_add_rounds_once(a: float, b: float, c: float) -> None:
    builder = Builder("fused", 3)
    program = builder.finish([builder.fma(0, 1, 2), builder.fnma(0, 1, 2)])
    product = Fraction(a) * Fraction(b)
    expected = [float(Fraction(c) + product), float(Fraction(c) - product)]
    assert run(program, [a, b, c]) == expected
    assert execute(program, [a, b, c], LANES)[:, 0].tolist() == expected


def test_equal_operations_are_shared_and_unused_ones_dropped() -> None:
    builder = Builder("shared", 2)
    first, again = builder.mul(0, 1), builder.mul(1, 0)
    builder.exp(0)
    program = builder.finish([builder.add(first, again)])
    assert first == again
    assert program.flops == 2


def test_the_wrong_number_of_inputs_is_refused() -> None:
    with pytest.raises(ValueError, match="takes 1 inputs, got 2"):
        run(program_of("exp"), [1.0, 2.0])
