"""The only import of numba and llvmlite: compiled loops, compiled programs, and where compiled code is kept.

Two kinds of machine code exist. Loops over subjects and steps are ordinary Python functions under `jit`, and know
no model. A `Program` (straight-line arithmetic derived from a model's equations) is compiled by `compile_program`
for one or several lanes and reached through its address, so a new model costs its own few milliseconds of
compilation and never a new loop. Both are kept in a private folder keyed by a digest of all sources, since a
compiled loop does not notice that a function it calls has changed.
"""

from __future__ import annotations

import ctypes
import functools
import hashlib
import os
import platform
import stat
import sys
import tempfile
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import llvmlite
import llvmlite.binding as llvm
import numba
from llvmlite import ir
from numba.core import cgutils, types
from numba.core.compiler_lock import global_compiler_lock
from numba.extending import intrinsic

from cohort.program import Program

LANES = 8 if llvm.get_host_cpu_features().get("avx512f", False) else 4
"""How many subjects one vector holds: eight where the processor has 32 wide registers, else four; more would not fit
the registers. A subject's bits do not depend on it."""

_I64 = ir.IntType(64)
_F64 = ir.DoubleType()
_ROUNDER = 6755399441055744.0


# ---- where compiled code is kept ---------------------------------------------------------------------------------


KERNELS = ("program.py", "compiled.py", "model", "simulate", "measure", "population")
"""Sources that a subject's numbers can depend on."""


def _sources(rooms: tuple[str, ...]) -> Iterator[tuple[str, bytes]]:
    root = Path(__file__).parent
    for room in rooms:
        place = root / room
        for path in sorted(place.rglob("*.py")) if place.is_dir() else [place]:
            yield path.relative_to(root).as_posix(), path.read_bytes()


def _digest_of(rooms: tuple[str, ...]) -> str:
    digest = hashlib.blake2b(digest_size=16)
    for name, data in _sources(rooms):
        digest.update(name.encode() + b"\0" + data)
    return digest.hexdigest()


@functools.cache
def kernel_identity() -> str:
    """A digest of every source that a subject's numbers can depend on."""
    return _digest_of(KERNELS)


def kernel_sources() -> dict[str, str]:
    """A digest of each of those sources by name, so that a change can be named."""
    return {name: hashlib.blake2b(data, digest_size=4).hexdigest() for name, data in _sources(KERNELS)}


@functools.cache
def detector_identity() -> str:
    """A digest of every source that readings and detections can depend on, beside those of a subject's numbers."""
    return _digest_of(("observe",))


@functools.cache
def _all_kernels() -> str:
    return _digest_of(("program.py", "compiled.py", "model", "simulate", "measure", "observe"))


def _cache_parent() -> Path | None:
    stated = os.environ.get("COHORT_CACHE_DIR") or os.environ.get("XDG_CACHE_HOME")
    if stated:
        return Path(stated)
    home = os.environ.get("HOME")
    return Path(home) / ".cache" if home and Path(home).is_dir() else None


def _is_private(folder: Path) -> bool:
    found = folder.lstat()
    return stat.S_ISDIR(found.st_mode) and found.st_uid == os.getuid() and not found.st_mode & 0o077


@functools.cache
def cache_folder() -> Path | None:
    """Return the folder for compiled code, or None where no private, writable one can be had (then none is kept)."""
    parent = _cache_parent()
    if parent is None:
        return None
    versions = f"{sys.version_info[:2]}{numba.__version__}{llvmlite.__version__}{_cpu()}{platform.machine()}"
    key = hashlib.blake2b((_all_kernels() + versions).encode(), digest_size=12).hexdigest()
    folder = parent / "ultradian-cohort" / key
    try:
        folder.parent.mkdir(mode=0o700, parents=True, exist_ok=True)
        folder.mkdir(mode=0o700, exist_ok=True)
        if not (_is_private(folder.parent) and _is_private(folder)):
            return None
        with tempfile.TemporaryFile(dir=folder):
            return folder
    except OSError:
        return None


def jit(function: Callable[..., Any]) -> Callable[..., Any]:
    """Compile a loop: no Python objects, the interpreter's lock released, no reordering of arithmetic."""
    folder = cache_folder()
    if folder is not None:
        numba.config.CACHE_DIR = str(folder)
    compiled: Callable[..., Any] = numba.njit(
        nogil=True, cache=folder is not None, error_model="numpy", boundscheck=False
    )(function)
    return compiled


# ---- programs to machine code ------------------------------------------------------------------------------------


@functools.cache
def _cpu() -> tuple[str, str]:
    return llvm.get_host_cpu_name(), llvm.get_host_cpu_features().flatten()


def cpu_name() -> str:
    """The processor as the compiler knows it, with a digest of its features."""
    name, features = _cpu()
    return f"{name} {hashlib.blake2b(features.encode(), digest_size=4).hexdigest()}"


class _Emitter:
    """Writes one program as LLVM instructions on vectors of `lanes` doubles."""

    def __init__(self, module: ir.Module, builder: ir.IRBuilder, lanes: int) -> None:
        self.module, self.builder, self.lanes = module, builder, lanes
        self.real = ir.VectorType(_F64, lanes) if lanes > 1 else _F64
        self.whole = ir.VectorType(_I64, lanes) if lanes > 1 else _I64

    def constant(self, kind: ir.Type, value: float) -> ir.Constant:
        return ir.Constant(kind, [value] * self.lanes if self.lanes > 1 else value)

    def bits(self, value: ir.Value) -> ir.Value:
        return self.builder.bitcast(value, self.whole)

    def number(self, value: ir.Value) -> ir.Value:
        return self.builder.bitcast(value, self.real)

    def intrinsic(self, name: str, *operands: ir.Value) -> ir.Value:
        suffix = f"v{self.lanes}f64" if self.lanes > 1 else "f64"
        kind = ir.FunctionType(self.real, [self.real] * len(operands))
        return self.builder.call(cgutils.get_or_insert_function(self.module, kind, f"llvm.{name}.{suffix}"), operands)

    def scale2(self, a: ir.Value, k: ir.Value) -> ir.Value:
        shifted = self.bits(self.builder.fadd(k, self.constant(self.real, _ROUNDER)))
        power = self.builder.shl(shifted, self.constant(self.whole, 52))
        return self.number(self.builder.add(self.bits(a), power))

    def mantissa(self, x: ir.Value) -> ir.Value:
        kept = self.builder.and_(self.bits(x), self.constant(self.whole, 0x000FFFFFFFFFFFFF))
        return self.number(self.builder.or_(kept, self.constant(self.whole, 0x3FE0000000000000)))

    def exponent(self, x: ir.Value) -> ir.Value:
        shifted = self.builder.lshr(self.bits(x), self.constant(self.whole, 52))
        masked = self.builder.and_(shifted, self.constant(self.whole, 0x7FF))
        large = self.number(self.builder.or_(masked, self.constant(self.whole, 0x4330000000000000)))
        return self.builder.fsub(large, self.constant(self.real, 4503599627370496.0 + 1022.0))

    def emit(self, name: str, operands: list[ir.Value], value: float) -> ir.Value:
        b = self.builder
        if name == "const":
            return self.constant(self.real, value)
        if name == "if_less":
            return b.select(b.fcmp_ordered("<", operands[0], operands[1]), operands[2], operands[3])
        if name in ("scale2", "mantissa", "exponent"):
            return getattr(self, name)(*operands)
        if name == "fnma":
            return self.intrinsic("fma", b.fneg(operands[0]), *operands[1:])
        if name in ("fma", "sqrt", "abs"):
            return self.intrinsic("fabs" if name == "abs" else name, *operands)
        plain = {"add": b.fadd, "sub": b.fsub, "mul": b.fmul, "div": b.fdiv, "neg": b.fneg}
        return plain[name](*operands)


def row_width(program: Program, carried: int, lanes: int) -> int:
    """How many places a lane's row of outputs takes, in programs whose outputs from `carried` on are stored by lane."""
    return -(-(len(program.outputs) - carried) // lanes) * lanes


def _transposed(builder: ir.IRBuilder, square: list[ir.Value]) -> list[ir.Value]:
    """Row l of the result holds element l of every vector: as many vectors as lanes, exchanged in halves."""
    lanes = len(square)
    step = 1
    while step < lanes:
        # of vectors i and i + step, the blocks of `step` elements off the diagonal change places
        mixed = list(square)
        for i in (i for i in range(lanes) if not i & step):
            a, b = square[i], square[i + step]
            low = [j if not j & step else lanes + j - step for j in range(lanes)]
            high = [j + step if not j & step else lanes + j for j in range(lanes)]
            masks = [ir.Constant(ir.VectorType(ir.IntType(32), lanes), mask) for mask in (low, high)]
            mixed[i], mixed[i + step] = (builder.shuffle_vector(a, b, mask) for mask in masks)
        square, step = mixed, 2 * step
    return square


def _module(program: Program, lanes: int, carried: int | None) -> ir.Module:
    module = ir.Module(name=program.name)
    pointer = ir.PointerType(_F64)
    function = ir.Function(module, ir.FunctionType(ir.VoidType(), [pointer, pointer]), "program")
    for argument in function.args:
        argument.add_attribute("noalias")
    builder = ir.IRBuilder(function.append_basic_block())
    emitter = _Emitter(module, builder, lanes)

    def place(base: ir.Value, index: int) -> ir.Value:
        at = builder.gep(base, [ir.Constant(_I64, index * lanes)])
        return builder.bitcast(at, ir.PointerType(emitter.real))

    values = [builder.load(place(function.args[0], i), align=8) for i in range(program.n_inputs)]
    for name, operands, value in program.ops:
        values.append(emitter.emit(name, [values[o] for o in operands], value))
    outputs = [values[o] for o in program.outputs]
    by_lane = len(outputs) if carried is None or lanes == 1 else carried
    for i, value in enumerate(outputs[:by_lane]):
        builder.store(value, place(function.args[1], i), align=8)
    blocks = row_width(program, by_lane, lanes) // lanes
    for q in range(blocks):
        square = outputs[by_lane + q * lanes : by_lane + (q + 1) * lanes]
        square += [emitter.constant(emitter.real, 0.0)] * (lanes - len(square))
        for l, row in enumerate(_transposed(builder, square)):
            builder.store(row, place(function.args[1], by_lane + l * blocks + q), align=8)
    builder.ret_void()
    return module


@functools.cache
def _start_llvm() -> None:
    llvm.initialize_native_target()
    llvm.initialize_native_asmprinter()


def _machine_code(program: Program, lanes: int, carried: int | None) -> bytes:
    """Return the program's object file, from the private folder where it is kept or freshly compiled."""
    folder = cache_folder()
    kept = folder / f"{program.key}-{lanes}-{carried}.o" if folder else None
    if kept is not None and kept.exists():
        return kept.read_bytes()
    parsed = llvm.parse_assembly(str(_module(program, lanes, carried)))
    cpu, features = _cpu()
    target = llvm.Target.from_triple(llvm.get_process_triple())
    machine = target.create_target_machine(cpu=cpu, features=features, opt=2, reloc="pic", codemodel="default")
    code: bytes = machine.emit_object(parsed)
    if kept is not None:
        with tempfile.NamedTemporaryFile(dir=kept.parent, delete=False) as file:
            file.write(code)
        Path(file.name).replace(kept)
    return code


_LOADED: dict[tuple[str, int, int | None], tuple[int, Any]] = {}


def compile_program(program: Program, lanes: int = 1, carried: int | None = None) -> int:
    """Return the address of `void f(const double *inputs, double *outputs)`, value i of lane l at [i * lanes + l].

    Outputs from `carried` on, where given, are stored a lane after the other instead, so that what is kept of one
    subject is copied at once: output carried + j of lane l at [carried * lanes + l * row_width + j].
    """
    key = (program.key, lanes, carried)
    if key not in _LOADED:
        with global_compiler_lock:  # LLVM is not for two threads at once
            if key not in _LOADED:  # a second load would free the code that the first thread is running
                _LOADED[key] = _load(program, lanes, carried)
    return _LOADED[key][0]


def _load(program: Program, lanes: int, carried: int | None) -> tuple[int, Any]:
    """Machine code in memory: its address, and the engine that keeps it there."""
    _start_llvm()
    empty = llvm.parse_assembly("")
    empty.triple = llvm.get_process_triple()
    machine = llvm.Target.from_triple(empty.triple).create_target_machine()
    engine = llvm.create_mcjit_compiler(empty, machine)
    engine.add_object_file(llvm.ObjectFileRef.from_data(_machine_code(program, lanes, carried)))
    engine.finalize_object()
    return engine.get_function_address("program"), engine


@intrinsic  # type: ignore[untyped-decorator]
def call_program(typing: Any, address: Any, inputs: Any, outputs: Any) -> Any:  # noqa: ARG001 - numba's signature
    """Inside `jit` code: run the compiled program at `address` on two C-contiguous arrays of doubles."""

    def generate(context: Any, builder: Any, signature: Any, arguments: Any) -> Any:
        pointer = ir.PointerType(_F64)
        kind = ir.FunctionType(ir.VoidType(), [pointer, pointer])
        function = builder.inttoptr(arguments[0], kind.as_pointer())
        data = [
            context.make_array(array)(context, builder, value).data
            for array, value in zip(signature.args[1:], arguments[1:], strict=True)
        ]
        builder.call(function, [builder.bitcast(place, pointer) for place in data])
        return context.get_dummy_value()

    return types.void(types.int64, inputs, outputs), generate


@intrinsic  # type: ignore[untyped-decorator]
def fma(typing: Any, a: Any, b: Any, c: Any) -> Any:  # noqa: ARG001 - numba's signature
    """Inside `jit` code: a b + c with one rounding, on doubles."""

    def generate(context: Any, builder: Any, signature: Any, arguments: Any) -> Any:
        reals = [
            context.cast(builder, value, kind, types.float64)
            for value, kind in zip(arguments, signature.args, strict=True)
        ]
        return builder.fma(*reals)

    return types.float64(a, b, c), generate


@intrinsic  # type: ignore[untyped-decorator]
def horner(typing: Any, kept: Any, places: Any, orders: Any, times: Any, span: Any, out: Any, rooms: Any) -> Any:  # noqa: ARG001
    """Inside `jit` code: two polynomials of x = (t - start) inverse at 2 LANES times t, a fused operation a power.

    places = (first, second): the coefficients, rising powers, begin at kept[first] and kept[second]; span = (start,
    inverse); rooms = (at, apart): the times are times[at : at + 2 LANES], the first polynomial's values go to
    out[at : ...], the second's `apart` further on. Arrays are flat. Four sums are under way together, since each waits for its
    own last operation.
    """
    wide = ir.VectorType(_F64, LANES)

    def generate(context: Any, builder: Any, signature: Any, arguments: Any) -> Any:
        a, x, y = (context.make_array(signature.args[i])(context, builder, arguments[i]).data for i in (0, 3, 5))
        starts, ends, rooms_ = (cgutils.unpack_tuple(builder, arguments[i], 2) for i in (1, 4, 6))
        orders_, at_ = arguments[2], rooms_[0]
        kind = ir.FunctionType(wide, [wide] * 3)
        fused = cgutils.get_or_insert_function(builder.module, kind, f"llvm.fma.v{LANES}f64")
        same = ir.Constant(ir.VectorType(ir.IntType(32), LANES), [0] * LANES)
        nothing = ir.Constant(wide, ir.Undefined)

        def everywhere(number: Any) -> Any:
            one = builder.insert_element(nothing, number, ir.Constant(ir.IntType(32), 0))
            return builder.shuffle_vector(one, nothing, same)

        def whole(base: Any, index: Any) -> Any:
            return builder.bitcast(builder.gep(base, [index]), wide.as_pointer())

        def further(index: Any, by: int) -> Any:
            return builder.add(index, ir.Constant(_I64, by))

        start, inverse = (everywhere(number) for number in ends)
        loaded = [builder.load(whole(x, further(at_, h * LANES)), align=8) for h in (0, 1)]
        points = [builder.fmul(builder.fsub(t, start), inverse) for t in loaded]
        totals = [cgutils.alloca_once_value(builder, ir.Constant(wide, [0.0] * LANES)) for _ in range(4)]
        with cgutils.for_range(builder, orders_) as loop:
            k = builder.sub(further(orders_, -1), loop.index)
            for c in (0, 1):
                coefficient = everywhere(builder.load(builder.gep(a, [builder.add(starts[c], k)])))
                for h in (0, 1):
                    total = totals[2 * c + h]
                    builder.store(builder.call(fused, [builder.load(total), points[h], coefficient]), total)
        for c in (0, 1):
            for h in (0, 1):
                index = further(at_, h * LANES) if c == 0 else builder.add(further(at_, h * LANES), rooms_[1])
                builder.store(builder.load(totals[2 * c + h]), whole(y, index), align=8)
        return context.get_dummy_value()

    two, reals = numba.typeof((0, 0)), numba.typeof((0.0, 0.0))
    return types.void(kept, two, types.int64, times, reals, out, two), generate


@intrinsic  # type: ignore[untyped-decorator]
def copy_lanes(typing: Any, source: Any, at: Any, out: Any, to: Any, count: Any) -> Any:  # noqa: ARG001
    """Inside `jit` code: out[to + j] = source[at + j] for j < count, `count` a multiple of LANES; both arrays flat."""
    wide = ir.VectorType(_F64, LANES)

    def generate(context: Any, builder: Any, signature: Any, arguments: Any) -> Any:
        read, written = (context.make_array(signature.args[i])(context, builder, arguments[i]).data for i in (0, 2))
        blocks = builder.udiv(arguments[4], ir.Constant(_I64, LANES))
        with cgutils.for_range(builder, blocks) as loop:
            move = builder.mul(loop.index, ir.Constant(_I64, LANES))
            place = builder.gep(read, [builder.add(arguments[1], move)])
            value = builder.load(builder.bitcast(place, wide.as_pointer()), align=8)
            place = builder.gep(written, [builder.add(arguments[3], move)])
            builder.store(value, builder.bitcast(place, wide.as_pointer()), align=8)
        return context.get_dummy_value()

    return types.void(source, types.int64, out, types.int64, types.int64), generate


def run_compiled(program: Program, inputs: Any, outputs: Any, lanes: int = 1) -> None:
    """Run a program once from Python: contiguous float64 arrays of n_inputs x lanes and n_outputs x lanes."""
    kind = ctypes.CFUNCTYPE(None, ctypes.c_void_p, ctypes.c_void_p)
    kind(compile_program(program, lanes))(inputs.ctypes.data, outputs.ctypes.data)
