"""Workload W by other means, each with its own equations, for `scripts/bench.py`: what a user could assemble instead.

Every function takes subjects float64[n, 20] in the order of the model's card and gives (values float64[n, 2, minutes],
seconds): plasma glucose (mg/dL) and insulin (mU/L) every minute, and how long it took without compilation.
"""

from __future__ import annotations

import ctypes
import shutil
import subprocess
import tempfile
import time
from collections.abc import Callable
from importlib.util import find_spec
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from cohort.compiled import jit

Array = NDArray[np.float64]
START = np.array([200.0, 200.0, 12000.0, 60.0, 60.0, 60.0])
INFUSION = 216.0
MINUTES = 2881


def with_kappa(values: Array) -> Array:
    """float64[n, 22]: the parameters, the infusion, and (1/Vi + 1/(E ti))/C4."""
    Vi, E, ti, C4 = (values[:, i] for i in (1, 3, 5, 16))
    return np.column_stack([values, np.full(len(values), INFUSION), (1 / Vi + 1 / (E * ti)) / C4])


# ---- SciPy --------------------------------------------------------------------------------------------------------


def lsoda(values: Array, tolerance: float) -> tuple[Array, float]:
    """SciPy's solve_ivp with LSODA and rates in Python, as a user would type them."""
    from scipy.integrate import solve_ivp

    out, grid = np.empty((len(values), 2, MINUTES)), np.arange(float(MINUTES))
    began = time.perf_counter()
    for row, p in zip(out, values, strict=True):
        got = solve_ivp(
            _python_rates(p), (0, grid[-1]), START, "LSODA", t_eval=grid, rtol=tolerance, atol=tolerance * 100
        )
        row[0], row[1] = got.y[2] / (10 * p[2]), got.y[0] / p[0]
    return out, time.perf_counter() - began


def _python_rates(p: Any) -> Callable[[float, Any], Any]:
    from math import exp

    Vp, Vi, Vg, E, tp, ti, td, Rm, a1, C1, Ub, C2, C3, U0, Um, beta, C4, Rg, alpha, C5 = p.tolist()
    kappa = (1 / Vi + 1 / (E * ti)) / C4

    def rates(_: float, x: Any) -> Any:
        Ip, Ii, G, x1, x2, x3 = x.tolist()
        f1 = Rm / (1 + exp((C1 - G / Vg) / a1))
        f2 = Ub * (1 - exp(-G / (C2 * Vg)))
        f4 = U0 + (Um - U0) / (1 + (kappa * Ii) ** -beta)
        f5 = Rg / (1 + exp(alpha * (x3 / Vp - C5)))
        exchange = E * (Ip / Vp - Ii / Vi)
        return [
            f1 - exchange - Ip / tp, exchange - Ii / ti, INFUSION - f2 - G / (C3 * Vg) * f4 + f5,
            3 * (Ip - x1) / td, 3 * (x1 - x2) / td, 3 * (x2 - x3) / td,
        ]  # fmt: skip

    return rates


# ---- SUNDIALS -----------------------------------------------------------------------------------------------------


def cvode_missing() -> str:
    """Why CVODE with a right-hand side in C cannot be had here; empty where it can."""
    if shutil.which("cc") is None:
        return "no C compiler (cc)"
    return "" if find_spec("sksundae") else "no SUNDIALS: it comes with the test environment"


def cvode(values: Array, tolerance: float) -> tuple[Array, float]:
    """SUNDIALS CVODE, Adams with fixed-point iteration, right-hand side and loop in C compiled on the spot."""
    spec = find_spec("sksundae")
    assert spec is not None
    assert spec.origin is not None
    libraries = Path(spec.origin).parent.parent / "scikit_sundae.libs"
    for name in ("gfortran", "openblas", "sundials_core", "sundials_nvecserial", "sundials_cvode"):
        for library in libraries.glob(f"lib{name}*"):
            ctypes.CDLL(str(library), mode=ctypes.RTLD_GLOBAL | ctypes.DEFAULT_MODE)
    with tempfile.TemporaryDirectory() as folder:
        made = Path(folder) / "cvode.so"
        source = Path(__file__).with_name("bench_cvode.c")
        subprocess.run(["cc", "-O3", "-march=native", "-shared", "-fPIC", "-o", made, source, "-lm"], check=True)
        cohort = ctypes.CDLL(str(made)).cohort
    pointer = ctypes.POINTER(ctypes.c_double)
    cohort.argtypes = [pointer, ctypes.c_long, pointer, ctypes.c_long, ctypes.c_double, ctypes.c_double, pointer]
    subjects, out = np.ascontiguousarray(with_kappa(values)), np.empty((len(values), 2, MINUTES))
    places = [a.ctypes.data_as(pointer) for a in (subjects, START, out)]
    began = time.perf_counter()
    failed = cohort(places[0], len(values), places[1], MINUTES, tolerance, tolerance * 100, places[2])
    seconds = time.perf_counter() - began
    if failed:
        raise RuntimeError("CVODE failed")
    return out, seconds


# ---- a scalar Runge-Kutta under numba -----------------------------------------------------------------------------

# Tsitouras, Comput Math Appl 2011;62:770-775, pair 5(4) and its free interpolant (from memory; the bench checks errors)
A = np.array([
    [0.161, 0, 0, 0, 0, 0],
    [-0.008480655492356989, 0.335480655492357, 0, 0, 0, 0],
    [2.8971530571054935, -6.359448489975075, 4.3622954328695815, 0, 0, 0],
    [5.325864828439257, -11.748883564062828, 7.4955393428898365, -0.09249506636175525, 0, 0],
    [5.86145544294642, -12.92096931784711, 8.159367898576159, -0.071584973281401, -0.028269050394068383, 0],
    [0.09646076681806523, 0.01, 0.4798896504144996, 1.379008574103742, -3.290069515436081, 2.324710524099774],
])  # fmt: skip
OFF = np.array([
    -0.00178001105222577714, -0.0008164344596567469, 0.007880878010261995, -0.1447110071732629, 0.5823571654525552,
    -0.45808210592918697, 1 / 66,
])  # fmt: skip


@jit
def _rates(p, x, out):  # type: ignore[no-untyped-def]
    f1 = p[7] / (1 + np.exp((p[9] - x[2] / p[2]) / p[8]))
    f2 = p[10] * (1 - np.exp(-x[2] / (p[11] * p[2])))
    f4 = p[13] + (p[14] - p[13]) / (1 + (p[21] * x[1]) ** -p[15])
    f5 = p[17] / (1 + np.exp(p[18] * (x[5] / p[0] - p[19])))
    exchange = p[3] * (x[0] / p[0] - x[1] / p[1])
    out[0], out[1] = f1 - exchange - x[0] / p[4], exchange - x[1] / p[5]
    out[2] = p[20] - f2 - x[2] / (p[12] * p[2]) * f4 + f5
    out[3], out[4], out[5] = 3 * (x[0] - x[3]) / p[6], 3 * (x[3] - x[4]) / p[6], 3 * (x[4] - x[5]) / p[6]


@jit
def _between(k, i, x, h, at):  # type: ignore[no-untyped-def]
    """State i at a part x of the step, by the pair's free interpolant."""
    b1 = -1.0530884977290216 * x * (x - 1.3299890189751412) * (x * x - 1.4364028541716351 * x + 0.7139816917074209)
    b2 = 0.1017 * x * x * (x * x - 2.1966568338249754 * x + 1.2949852507374631)
    b3 = 2.490627285651252793 * x * x * (x * x - 2.38535645472061657 * x + 1.57803468208092486)
    b4 = -16.54810288924490272 * (x - 1.21712927295533244) * (x - 0.61620406037800089) * x * x
    b5 = 47.37952196281928122 * (x - 1.203071208372362603) * (x - 0.658047292653547382) * x * x
    b6 = -34.87065786149660974 * (x - 1.2) * (x - 0.666666666666666667) * x * x
    b7 = 2.5 * (x - 1.0) * (x - 0.6) * x * x
    total = b1 * k[0, i] + b2 * k[1, i] + b3 * k[2, i] + b4 * k[3, i] + b5 * k[4, i] + b6 * k[5, i] + b7 * k[6, i]
    return at + h * total


@jit
def _tsit5(subjects, start, tolerance, a, off, out):  # type: ignore[no-untyped-def]
    k, x, y = np.zeros((7, 6)), np.empty(6), np.empty(6)
    end = out.shape[2] - 1.0
    for s in range(subjects.shape[0]):
        p = subjects[s]
        x[:] = start
        t, h, minute, before = 0.0, 0.1, 0, 1.0
        _rates(p, x, k[0])
        while minute < out.shape[2]:
            for stage in range(6):
                for i in range(6):
                    total = 0.0
                    for j in range(stage + 1):
                        total += a[stage, j] * k[j, i]
                    y[i] = x[i] + h * total
                _rates(p, y, k[stage + 1])
            error = 0.0
            for i in range(6):
                e = 0.0
                for j in range(7):
                    e += off[j] * k[j, i]
                e *= h / (tolerance * 100 + tolerance * max(abs(x[i]), abs(y[i])))
                error += e * e
            error = np.sqrt(error / 6)
            if error <= 1.0:
                while minute < out.shape[2] and minute <= t + h:
                    part = (minute - t) / h
                    out[s, 0, minute] = _between(k, 2, part, h, x[2]) / (10 * p[2])
                    out[s, 1, minute] = _between(k, 0, part, h, x[0]) / p[0]
                    minute += 1
                t += h
                x[:] = y
                k[0] = k[6]
                h *= min(5.0, max(0.2, 0.9 * max(error, 1e-10) ** -0.14 * before**0.08))
                before = max(error, 1e-4)
            else:
                h *= max(0.2, 0.9 * error**-0.2)
            h = min(h, end + 1.0 - t)


def tsit5(values: Array, tolerance: float) -> tuple[Array, float]:
    """Tsit5 with step control and dense output in numba, a subject after the other."""
    subjects, out = with_kappa(values), np.empty((len(values), 2, MINUTES))
    _tsit5(subjects[:1], START, tolerance, A, OFF, out[:1])
    began = time.perf_counter()
    _tsit5(subjects, START, tolerance, A, OFF, out)
    return out, time.perf_counter() - began


# ---- a batch solver -----------------------------------------------------------------------------------------------


def batch_missing() -> str:
    """Why the batch solver cannot be had here; empty where it can."""
    return "" if find_spec("diffrax") else "not installed: pip install diffrax (the extra `bench`)"


def batch(values: Array, tolerance: float) -> tuple[Array, float]:
    """diffrax's Dopri8 under vmap and jit, in double precision."""
    import diffrax
    import jax
    import jax.numpy as jnp

    jax.config.update("jax_enable_x64", True)

    def rates(_: Any, x: Any, p: Any) -> Any:
        f1 = p[7] / (1 + jnp.exp((p[9] - x[2] / p[2]) / p[8]))
        f2 = p[10] * (1 - jnp.exp(-x[2] / (p[11] * p[2])))
        f4 = p[13] + (p[14] - p[13]) / (1 + (p[21] * x[1]) ** -p[15])
        f5 = p[17] / (1 + jnp.exp(p[18] * (x[5] / p[0] - p[19])))
        exchange = p[3] * (x[0] / p[0] - x[1] / p[1])
        return jnp.stack([
            f1 - exchange - x[0] / p[4], exchange - x[1] / p[5], p[20] - f2 - x[2] / (p[12] * p[2]) * f4 + f5,
            3 * (x[0] - x[3]) / p[6], 3 * (x[3] - x[4]) / p[6], 3 * (x[4] - x[5]) / p[6],
        ])  # fmt: skip

    grid = jnp.arange(float(MINUTES))

    def one(p: Any) -> Any:
        found = diffrax.diffeqsolve(
            diffrax.ODETerm(rates), diffrax.Dopri8(), 0.0, MINUTES - 1.0, 0.1, jnp.asarray(START), p,
            saveat=diffrax.SaveAt(ts=grid), max_steps=100_000,
            stepsize_controller=diffrax.PIDController(rtol=tolerance, atol=tolerance * 100),
        )  # fmt: skip
        states = found.ys
        return jnp.stack([states[:, 2] / (10 * p[2]), states[:, 0] / p[0]])

    solve = jax.jit(jax.vmap(one))
    subjects = jnp.asarray(with_kappa(values))
    solve(subjects).block_until_ready()
    began = time.perf_counter()
    found = np.asarray(solve(subjects).block_until_ready())
    return found, time.perf_counter() - began
