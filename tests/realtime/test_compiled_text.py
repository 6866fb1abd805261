"""The audio thread's code, as compiled, is read for what it calls: arithmetic, the clock, and nothing else.

A compile of its own: Numba cannot show the text of a function it took from the cache.
"""

from __future__ import annotations

import os
import re
import subprocess
import sys

import pytest

READ_TEXT = """
from liveres.kernels import block, callback
print(callback.audio_callback.inspect_llvm())
print("=== assembly ===")
print(block.advance.inspect_asm(block.advance.signatures[0]))
"""
PERMITTED = re.compile(
    r"_ZN7liveres7kernels\w+"  # our own kernels
    r"|llvm\.(fma|fabs|copysign|sqrt|pow|uadd\.with\.overflow|smax|smin|umin|umax|maxnum|minnum|masked|memset|is\.fpclass|x86\.sse|aarch64|vector)\S*"
    r"|clock_gettime|gettid|pow|memset"
    r"|NRT_incref|NRT_decref"  # of arrays nobody owns: see test_counting_references_of_borrowed_memory_does_nothing
)
ERROR_BRANCH = {
    "numba_gil_ensure", "numba_gil_release", "numba_unpickle", "numba_runtime_build_excinfo_struct", "numba_do_raise",
    "PyErr_Clear", "PyErr_SetNone", "PyErr_SetString", "PyErr_WriteUnraisable", "PyUnicode_FromString",
    "PyBytes_FromStringAndSize", "Py_DecRef", "NRT_Free",
}  # fmt: skip
# what Numba writes into every C function for an exception that our code, which raises none, cannot cause


def calls_by_function(ir: str) -> dict[str, set[str]]:
    """Names of the functions defined in LLVM text, with those each of them calls."""
    found = {}
    name = r'@("[^"]+"|[\w.$]+)\('
    for match in re.finditer(rf"^define [^\n]*?{name}[^\n]*\{{\n(.*?)^\}}", ir, re.M | re.S):
        found[match[1].strip('"')] = {one.strip('"') for one in re.findall(rf"\bcall [^\n]*?{name}", match[2])}
    return found


def reached_from(start: str, calls: dict[str, set[str]]) -> set[str]:
    """Defined functions that can be reached from ``start``, itself included."""
    reached, waiting = set(), [start]
    while waiting:
        name = waiting.pop()
        if name in calls and name not in reached:
            reached.add(name)
            waiting += calls[name]
    return reached


@pytest.fixture(scope="module")
def text(tmp_path_factory) -> tuple[str, str]:
    environment = {**os.environ, "NUMBA_CACHE_DIR": str(tmp_path_factory.mktemp("cache"))}
    child = subprocess.run([sys.executable, "-c", READ_TEXT], env=environment, capture_output=True, text=True, check=True)
    ir, assembly = child.stdout.split("=== assembly ===")
    return ir, assembly


def test_the_callback_reaches_no_interpreter_allocator_lock_or_print(text):
    """Any of them can wait for another thread, and a late block is heard by everyone in the room."""
    calls = calls_by_function(text[0])
    (start,) = (name for name in calls if name.startswith("cfunc.") and "audio_callback" in name)
    kernels = {name for name in reached_from(start, calls) if "liveres" in name and name != start}
    assert len(kernels) > 10
    for name in kernels:
        assert {callee for callee in calls[name] if not PERMITTED.fullmatch(callee)} == set(), name
    strange = {callee for callee in calls[start] if not PERMITTED.fullmatch(callee)}
    assert strange <= ERROR_BRANCH


def test_counting_references_of_borrowed_memory_does_nothing(text):
    """The callback's arrays are views of addresses, whose owner is null; for null both return at once."""
    for name in ("NRT_incref", "NRT_decref"):
        body = re.search(rf"^define [^\n]*@{name}\(ptr [^%\n]*(%[\w.]+)\)[^\n]*\{{\n(.*?)^\}}", text[0], re.M | re.S)
        first_block = body[2].split("\n\n")[0]
        assert f"icmp eq ptr {body[1]}, null" in first_block
        assert "call" not in first_block


def test_the_banks_are_vectorised(text):
    """A bank of thousands needs packed arithmetic, and losing it would pass every other test."""
    assert len(re.findall(r"\bvfn?m(?:add|sub)\d+pd\b|\bfml[as]\b", text[1])) > 40


def test_nothing_is_contracted_or_reordered_behind_our_back(text):
    """Fast-math flags would let results differ from one processor to the next."""
    assert not re.search(r"\b(fast|reassoc|contract|arcp|nsz|nnan|ninf|afn) (double|float)\b", text[0])


def test_the_reading_finds_what_it_looks_for():
    """A search that cannot find proves nothing."""
    ir = "define i32 @a(i8* %x) {\n  call void @b()\n}\ndefine void @b() {\n  %1 = call i8* @NRT_MemInfo_alloc(i64 1)\n}\n"
    calls = calls_by_function(ir)
    assert reached_from("a", calls) == {"a", "b"}
    assert not PERMITTED.fullmatch(next(iter(calls["b"])))
