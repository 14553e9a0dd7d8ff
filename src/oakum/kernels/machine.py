"""Compiled kernels as machine code: bytes that can be kept in a file, and run without the compiler.

Loading them takes a part of LLVM, but not numba, whose import takes longer than many a job. The code of a
kernel refers to nothing outside of itself but the C library's functions for memory.

A function is called as numba has it: int32 f(result *, error **, arguments ...), and returns 0. A number is
an argument of 64 bits, a tuple one for each of its fields, and an array 5 + 2 * ndim: two addresses of
numba's own memory management, which are null here, size, size of an element, address, shape, and strides.
"""

from __future__ import annotations

import ctypes
import json
from collections.abc import Sequence
from typing import Any, TypeAlias

import numpy as np

Kind: TypeAlias = int | tuple[str, int, bool, bool] | None
"""Of an argument: None for a number, the length of a tuple, or an array's element type, its dimensions,
whether its rows follow each other without gaps, and whether it is written."""


def packed(symbol: str, kinds: Sequence[Kind], returns: bool, code: bytes) -> bytes:
    """What `Code` is made from: the code and how to call it."""
    return json.dumps([symbol, kinds, returns]).encode() + b"\n" + code


class Code:
    """A compiled kernel, in memory. Calls release the GIL."""

    def __init__(self, content: bytes) -> None:
        """From what `packed` gave. Raises an exception of any kind for anything else."""
        head, _, code = content.partition(b"\n")
        symbol, kinds, self._returns = json.loads(head)
        self._kinds: list[Kind] = [tuple(k) if isinstance(k, list) else k for k in kinds]
        self._engine = _engine(code)
        address = self._engine.get_function_address(symbol)
        if not address:
            raise ValueError(f"there is no {symbol} in this code")
        count = sum(map(_size, self._kinds))
        arguments = [ctypes.c_void_p] * 2 + [ctypes.c_int64] * count
        self._function = ctypes.CFUNCTYPE(ctypes.c_int32, *arguments)(address)

    def __call__(self, *arguments: Any) -> int | None:
        """TypeError for arguments of another kind, RuntimeError where the code ends with an error."""
        words: list[int] = []
        for kind, argument in zip(self._kinds, arguments, strict=True):
            if kind is None:
                words.append(int(argument))
            elif isinstance(kind, int):
                words += argument
            else:
                words += _words_of(argument, *kind)
        room = (ctypes.c_int64 * 2)()
        place = ctypes.addressof(room)
        if self._function(place, place + 8, *words):
            raise RuntimeError("a kernel failed")
        return room[0] if self._returns else None


def _size(kind: Kind) -> int:
    """64-bit arguments that one of Python's becomes."""
    if kind is None:
        return 1
    return kind if isinstance(kind, int) else 5 + 2 * kind[1]


def _words_of(array: Any, element: str, dimensions: int, dense: bool, written: bool) -> tuple[int, ...]:
    """An array, as arguments."""
    if not isinstance(array, np.ndarray) or array.dtype != element or array.ndim != dimensions:
        raise TypeError(f"not an array of {element} with {dimensions} dimensions")
    flags = array.flags
    if (dense and not flags.c_contiguous) or (written and not flags.writeable):
        raise TypeError("an array whose rows have gaps, or that cannot be written")
    return (0, 0, array.size, array.itemsize, array.ctypes.data, *array.shape, *array.strides)


def _engine(code: bytes) -> Any:
    """LLVM's loader with a piece of object code in it."""
    import llvmlite.binding as llvm

    llvm.initialize_native_target()
    llvm.initialize_native_asmprinter()
    target = llvm.Target.from_triple(llvm.get_process_triple())
    machine = target.create_target_machine(jit=True, codemodel="jitdefault")
    engine = llvm.create_mcjit_compiler(llvm.parse_assembly(""), machine)
    engine.add_object_file(llvm.ObjectFileRef.from_data(code))
    engine.finalize_object()
    return engine
