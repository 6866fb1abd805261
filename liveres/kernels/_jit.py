"""How kernels are compiled: Numba's options, the compile cache, and the few machine instructions Numba lacks.

The only place with Numba options. Counters begin as int64(0): a bare 0 is a type of its own to Numba, for which it would
compile everything they are passed to once more. No fastmath: sums keep their order, so results keep their bits.

Cache: a per-user folder named by a hash of every kernel source, because Numba notices a change in a function's
own file only, and would go on running old code when a helper in another file changed. Where that folder cannot
be written a temporary one serves, for one process. NUMBA_CACHE_DIR, when set, is respected.
"""

from __future__ import annotations

import atexit
import contextlib
import functools
import hashlib
import os
import platform
import shutil
import sys
import tempfile
from collections.abc import Callable, Iterator
from pathlib import Path

import numba
from llvmlite import ir
from numba import types
from numba.core import cgutils
from numba.extending import intrinsic

_OPTIONS = {"error_model": "numpy", "fastmath": False, "boundscheck": False, "no_cfunc_wrapper": True}
# numpy: a division by zero gives infinity instead of an exception, which an audio thread may not raise;
# no_cfunc_wrapper: nobody calls kernels from C, and a wrapper less is quicker to compile

_X86 = platform.machine().lower() in ("x86_64", "amd64")
_ARM = platform.machine().lower() in ("aarch64", "arm64")
HAS_GETTID = sys.platform == "linux"
HAS_CLOCK = sys.platform in ("linux", "darwin")
_CLOCK_MONOTONIC = 6 if sys.platform == "darwin" else 1


_FROZEN = ("limits.py", "theory/poles.py", "theory/true_peak.py")
# other sources whose constants are compiled in


def cache_dir() -> Path:
    """Folder of the compile cache for exactly these kernel sources."""
    if os.environ.get("NUMBA_CACHE_DIR"):
        return Path(os.environ["NUMBA_CACHE_DIR"])
    digest = hashlib.sha256()
    package = Path(__file__).parents[1]
    for source in (*sorted(package.glob("kernels/*.py")), *(package / name for name in _FROZEN)):
        digest.update(source.read_bytes())
    home = os.environ.get("XDG_CACHE_HOME") or Path.home() / ".cache"
    folder = Path(home) / "liveres" / f"kernels-{digest.hexdigest()[:16]}"
    with contextlib.suppress(OSError):
        folder.mkdir(parents=True, exist_ok=True)
    if os.access(folder, os.W_OK):
        return folder
    # for this process alone: a name that others can guess would let them leave compiled code there for us
    return _temporary_folder()


@functools.cache
def _temporary_folder() -> Path:
    folder = tempfile.mkdtemp(prefix="liveres-")
    atexit.register(shutil.rmtree, folder, ignore_errors=True)
    return Path(folder)


def cache_is_cold(function: str = "block.advance") -> bool:
    """True when a function, by module and name, has yet to be compiled on this machine, which can take half a minute."""
    return not any(cache_dir().rglob(f"{function}*.nbc"))


@contextlib.contextmanager
def _own_cache() -> Iterator[None]:
    # Numba picks the folder when it decorates; the host program's own setting is put back
    before = numba.config.CACHE_DIR
    numba.config.CACHE_DIR = str(cache_dir())
    try:
        yield
    finally:
        numba.config.CACHE_DIR = before


def inner(function: Callable) -> Callable:
    """A kernel called by other kernels only; compiled into each caller."""
    return numba.njit(**_OPTIONS)(function)


def entry(*signatures: object) -> Callable:
    """A kernel called from Python: compiled at import for these signatures, cached on disk, runs without the GIL."""

    def decorate(function: Callable) -> Callable:
        with _own_cache():
            return numba.njit(list(signatures), cache=True, nogil=True, **_OPTIONS)(function)

    return decorate


def native_callback(signature: object) -> Callable:
    """A C function for the audio thread: compiled at import, cached on disk."""

    def decorate(function: Callable) -> Callable:
        with _own_cache():
            return numba.cfunc(signature, cache=True, error_model="numpy")(function)

    return decorate


@intrinsic
def pointer(typingctx, address):
    """The int64 ``address`` as a pointer, for carray."""

    def codegen(context, builder, signature, args):
        return builder.inttoptr(args[0], cgutils.voidptr_t)

    return types.voidptr(types.int64), codegen


@intrinsic
def is_null(typingctx, place):
    """Whether a pointer points nowhere."""

    def codegen(context, builder, signature, args):
        return builder.icmp_unsigned("==", builder.ptrtoint(args[0], ir.IntType(64)), ir.IntType(64)(0))

    return types.boolean(types.voidptr), codegen


@intrinsic
def square_root(typingctx, value):
    """Square root of a float64 without the check for negative values that would keep loops from vectorising."""

    def codegen(context, builder, signature, args):
        return builder.call(builder.module.declare_intrinsic("llvm.sqrt", [ir.DoubleType()]), args)

    return types.float64(types.float64), codegen


@intrinsic
def fma(typingctx, a, b, c):
    """a b + c rounded once: quicker and closer than two roundings, and the same bits on every processor."""

    def codegen(context, builder, signature, args):
        return builder.fma(*args)

    return types.float64(types.float64, types.float64, types.float64), codegen


@intrinsic
def exchange(typingctx, address, value):
    """Atomically store ``value`` at the int64 ``address`` and return what was there; acquire and release."""

    def codegen(context, builder, signature, args):
        place = builder.inttoptr(args[0], ir.IntType(64).as_pointer())
        return builder.atomic_rmw("xchg", place, args[1], "acq_rel")

    return types.int64(types.int64, types.int64), codegen


@intrinsic
def load_acquire(typingctx, address):
    """The int64 at ``address``; what was written before its store_release is then visible too."""

    def codegen(context, builder, signature, args):
        place = builder.inttoptr(args[0], ir.IntType(64).as_pointer())
        return builder.load_atomic(place, "acquire", 8)

    return types.int64(types.int64), codegen


@intrinsic
def store_release(typingctx, address, value):
    """Store ``value`` at the int64 ``address`` after everything written before it."""

    def codegen(context, builder, signature, args):
        place = builder.inttoptr(args[0], ir.IntType(64).as_pointer())
        builder.store_atomic(args[1], place, "release", 8)
        return context.get_dummy_value()

    return types.void(types.int64, types.int64), codegen


@intrinsic
def flush_denormals(typingctx):
    """Make denormal numbers count as zero on this thread; returns the former mode for restore_float_mode."""

    def codegen(context, builder, signature, args):
        int32, int64 = ir.IntType(32), ir.IntType(64)
        if _X86:
            place = cgutils.alloca_once(builder, int32)
            _call_x86(builder, "stmxcsr", place)
            before = builder.load(place)
            # bit 15 flushes results, bit 6 flushes operands (Intel SDM vol. 1, 10.2.3)
            builder.store(builder.or_(before, int32(0x8040)), place)
            _call_x86(builder, "ldmxcsr", place)
            return builder.zext(before, int64)
        if _ARM:
            getter = cgutils.get_or_insert_function(builder.module, ir.FunctionType(int64, []), "llvm.aarch64.get.fpcr")
            before = builder.call(getter, [])
            # bit 24, FZ (Arm Architecture Reference Manual, FPCR)
            _call_arm_set(builder, builder.or_(before, int64(1 << 24)))
            return before
        return int64(0)

    return types.int64(), codegen


@intrinsic
def restore_float_mode(typingctx, before):
    """Undo flush_denormals."""

    def codegen(context, builder, signature, args):
        if _X86:
            place = cgutils.alloca_once(builder, ir.IntType(32))
            builder.store(builder.trunc(args[0], ir.IntType(32)), place)
            _call_x86(builder, "ldmxcsr", place)
        elif _ARM:
            _call_arm_set(builder, args[0])
        return context.get_dummy_value()

    return types.void(types.int64), codegen


def _call_x86(builder, name, place):
    function_type = ir.FunctionType(ir.VoidType(), [cgutils.voidptr_t])
    function = cgutils.get_or_insert_function(builder.module, function_type, f"llvm.x86.sse.{name}")
    builder.call(function, [builder.bitcast(place, cgutils.voidptr_t)])


def _call_arm_set(builder, value):
    function_type = ir.FunctionType(ir.VoidType(), [ir.IntType(64)])
    function = cgutils.get_or_insert_function(builder.module, function_type, "llvm.aarch64.set.fpcr")
    builder.call(function, [value])


@intrinsic
def clock_ns(typingctx):
    """Monotonic time [ns] by the system's own clock_gettime; 0 where there is none."""

    def codegen(context, builder, signature, args):
        int64 = ir.IntType(64)
        if not HAS_CLOCK:
            return int64(0)
        pair = ir.ArrayType(int64, 2)
        place = cgutils.alloca_once(builder, pair)
        function_type = ir.FunctionType(ir.IntType(32), [ir.IntType(32), pair.as_pointer()])
        function = cgutils.get_or_insert_function(builder.module, function_type, "clock_gettime")
        builder.call(function, [ir.IntType(32)(_CLOCK_MONOTONIC), place])
        now = builder.load(place)
        seconds, nanoseconds = builder.extract_value(now, 0), builder.extract_value(now, 1)
        return builder.add(builder.mul(seconds, int64(1_000_000_000)), nanoseconds)

    return types.int64(), codegen


@intrinsic
def thread_id(typingctx):
    """The system's number of the calling thread; 0 where it cannot be asked."""

    def codegen(context, builder, signature, args):
        if not HAS_GETTID:
            return ir.IntType(64)(0)
        function_type = ir.FunctionType(ir.IntType(32), [])
        function = cgutils.get_or_insert_function(builder.module, function_type, "gettid")
        return builder.sext(builder.call(function, []), ir.IntType(64))

    return types.int64(), codegen
