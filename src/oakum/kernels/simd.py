"""Vectors of bytes for numba: helpers that emit LLVM IR, and the intrinsics that kernels share.

numba has no vector types and widens uint8 arithmetic to 64 bits, so the inner loops of the kernels are
emitted as LLVM IR on vectors of bytes. Addresses are plain integers (`intp`) and nothing checks them: only
sizes that were validated in Python may reach a kernel. Every load and store is emitted for any alignment.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import Any, TypeAlias

from llvmlite import ir
from numba.core import cgutils, types
from numba.extending import intrinsic as _numba_intrinsic

from oakum.kernels import tiers
from oakum.kernels.arrays import Arrays

I1 = ir.IntType(1)
I8 = ir.IntType(8)
I16 = ir.IntType(16)
I32 = ir.IntType(32)
I64 = ir.IntType(64)

Builder: TypeAlias = ir.IRBuilder
Value: TypeAlias = ir.Value


ARRAYS = types.NamedUniTuple(types.intp, len(Arrays._fields), Arrays)  # type: ignore[attr-defined]
"""numba's type of `Arrays`."""


def intrinsic(function: Callable[..., Any]) -> Callable[..., Any]:
    """numba's `intrinsic`, typed."""
    return _numba_intrinsic(function)  # type: ignore[no-any-return]


def signature(count: int) -> Any:
    """The type of an intrinsic that takes `count` addresses or sizes and returns nothing."""
    return types.void(*[types.intp] * count)


def nothing(context: Any) -> Value:
    """What the code generator of such an intrinsic returns."""
    return context.get_dummy_value()


def byte_vector(lanes: int) -> ir.VectorType:
    return ir.VectorType(I8, lanes)


def load(builder: Builder, address: Value, kind: ir.Type, offset: int = 0) -> Value:
    """What is at `address + offset` (an integer), at any alignment."""
    pointer = builder.inttoptr(plus(builder, address, offset), ir.PointerType())
    return builder.load(pointer, typ=kind, align=1)


def store(builder: Builder, value: Value, address: Value, offset: int = 0) -> None:
    builder.store(value, builder.inttoptr(plus(builder, address, offset), ir.PointerType()), align=1)


def plus(builder: Builder, address: Value, offset: int) -> Value:
    return builder.add(address, I64(offset)) if offset else address


def splat(builder: Builder, scalar: Value, lanes: int) -> Value:
    """A vector with `scalar` in each of its lanes."""
    kind = ir.VectorType(scalar.type, lanes)
    one = builder.insert_element(ir.Constant(kind, ir.Undefined), scalar, I32(0))
    zeros = ir.Constant(ir.VectorType(I32, lanes), None)
    return builder.shuffle_vector(one, ir.Constant(kind, ir.Undefined), zeros)


def constant_bytes(value: int, lanes: int) -> Value:
    """A vector with the byte `value` in each of its lanes."""
    return ir.Constant(byte_vector(lanes), [I8(value)] * lanes)


def call(builder: Builder, name: str, result: ir.Type, arguments: Sequence[Value]) -> Value:
    """The LLVM intrinsic `name`, applied. A name that LLVM does not know ends the process."""
    function_type = ir.FunctionType(result, [argument.type for argument in arguments])
    return builder.call(cgutils.get_or_insert_function(builder.module, function_type, name), arguments)


def variable(builder: Builder, initial: Value) -> Value:
    """A place for a value that changes in a loop; LLVM keeps it in a register."""
    return cgutils.alloca_once_value(builder, initial)


def shuffle_lanes() -> int:
    """Bytes in the widest vector that the shuffle tier can use here. Part of what the cache is keyed on."""
    return 32 if "avx2" in tiers.target_features() else 16


def shuffle(builder: Builder, table: Value, index: Value) -> Value:
    """table[index] byte by byte; `table` is 16 bytes, `index` a vector of bytes below 16."""
    lanes = index.type.count
    if lanes == 32:
        doubled = ir.Constant(ir.VectorType(I32, 32), [I32(i % 16) for i in range(32)])
        table = builder.shuffle_vector(table, ir.Constant(table.type, ir.Undefined), doubled)
        return call(builder, "llvm.x86.avx2.pshuf.b", index.type, [table, index])
    if "ssse3" in tiers.target_features():
        return call(builder, "llvm.x86.ssse3.pshuf.b.128", index.type, [table, index])
    return call(builder, "llvm.aarch64.neon.tbl1.v16i8", index.type, [table, index])


def doubled(builder: Builder, vector: Value, reduction: Value) -> Value:
    """Each byte times x in GF(2^8); `reduction` has the field polynomial without x^8 in all lanes."""
    zero = ir.Constant(vector.type, None)
    overflow = builder.sext(builder.icmp_signed("<", vector, zero), vector.type)
    return builder.xor(builder.add(vector, vector), builder.and_(overflow, reduction))


@intrinsic
def copy(typingctx: Any, target: Any, source: Any, size: Any) -> Any:
    """copy(target, source, size): `size` bytes from one address to another; they may not overlap."""

    def generate(context: Any, builder: Builder, sig: Any, arguments: Sequence[Value]) -> Value:
        target, source, size = arguments
        pointers = [builder.inttoptr(address, ir.PointerType(I8)) for address in (target, source)]
        cgutils.raw_memcpy(builder, *pointers, size, itemsize=1)
        return nothing(context)

    return signature(3), generate


@intrinsic
def clear(typingctx: Any, target: Any, size: Any) -> Any:
    """clear(target, size): `size` zero bytes at an address."""

    def generate(context: Any, builder: Builder, sig: Any, arguments: Sequence[Value]) -> Value:
        target, size = arguments
        cgutils.memset(builder, builder.inttoptr(target, ir.PointerType(I8)), size, 0)
        return nothing(context)

    return signature(2), generate
