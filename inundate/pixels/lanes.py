"""Sixty-four rows at once: one compare-and-choose step, written so that the compiler uses whole vector registers.

The step is generic LLVM code: it is right on every processor, and quick where one register (or two, or four) holds 64
bytes. Looking leaf values up has a plain form, and a quick one for processors that can look up 32 numbers held in two
registers (AVX-512).
"""

# ruff: noqa: ARG001 - the arguments of an intrinsic are the types of its call

from __future__ import annotations

from typing import Any

import numba as nb
from llvmlite import binding, ir
from numba.core import types
from numba.extending import intrinsic

LANES = 64
"""Rows handled by one step."""

_BYTE = ir.IntType(8)
_BYTES = ir.VectorType(_BYTE, LANES)
_INT = ir.IntType(32)


def _splat(builder: ir.IRBuilder, value: ir.Value, vector: ir.VectorType) -> ir.Value:
    empty = ir.Constant(vector, ir.Undefined)
    one = builder.insert_element(empty, value, ir.Constant(_INT, 0))
    return builder.shuffle_vector(one, empty, ir.Constant(ir.VectorType(_INT, LANES), [0] * LANES))


def _pointer(builder: ir.IRBuilder, data: ir.Value, offset: ir.Value, vector: ir.VectorType) -> ir.Value:
    return builder.bitcast(builder.gep(data, [offset]), vector.as_pointer())


@intrinsic  # type: ignore[untyped-decorator]
def choose(  # type: ignore[no-untyped-def]
    _typing,
    codes,
    code_at,
    threshold,
    bytes_,
    left_at,
    right_at,
    out_at,
):
    """``bytes_[out_at + r] = bytes_[(right_at if codes[code_at + r] > threshold else left_at) + r]`` for 64 ``r``.

    ``codes`` is a contiguous array of uint8 or uint16, ``threshold`` of the same type; ``bytes_`` is contiguous uint8.
    Offsets are uint64 elements. Nothing is checked: offsets must lie inside.
    """
    number = codes.dtype
    signature = types.void(codes, types.uint64, number, bytes_, types.uint64, types.uint64, types.uint64)
    lanes = ir.VectorType(ir.IntType(number.bitwidth), LANES)

    def generate(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        codes_, code_at_, threshold_, bytes__, left_, right_, out_ = args
        from_codes = context.make_array(sig.args[0])(context, builder, codes_).data
        data = context.make_array(sig.args[3])(context, builder, bytes__).data
        load = [
            builder.load(_pointer(builder, base, at, kind), align=1)
            for base, at, kind in ((from_codes, code_at_, lanes), (data, left_, _BYTES), (data, right_, _BYTES))
        ]
        above = builder.icmp_unsigned(">", load[0], _splat(builder, threshold_, lanes))
        chosen = builder.select(above, load[2], load[1])
        builder.store(chosen, _pointer(builder, data, out_, _BYTES), align=1)
        return context.get_dummy_value()

    return signature, generate


TABLE = 32
"""Leaf values in one look-up table."""
WIDE = bool(binding.get_host_cpu_features().get("avx512f", False)) and not getattr(nb.config, "CPU_NAME", None)
"""Whether this processor looks up 32 numbers in two registers."""

_PART = 16
_INTS = ir.VectorType(_INT, _PART)


@intrinsic  # type: ignore[untyped-decorator]
def add_looked_up(_typing, slots, at, table, table_at, total, total_at):  # type: ignore[no-untyped-def]
    """``total[total_at + r] += table[table_at + slots[at + r]]`` for 64 ``r``; only where ``WIDE``.

    ``slots`` is contiguous uint8 with values below 32, ``table`` and ``total`` are contiguous int32. Nothing is checked.
    """
    signature = types.void(slots, types.uint64, table, types.uint64, total, types.uint64)

    def generate(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        data = [context.make_array(sig.args[k])(context, builder, args[k]).data for k in (0, 2, 4)]
        kind = ir.FunctionType(_INTS, [_INTS, _INTS, _INTS])
        permute = builder.module.declare_intrinsic("llvm.x86.avx512.vpermi2var.d.512", (), kind)

        def place(base: ir.Value, start: ir.Value, step: int, vector: ir.VectorType) -> ir.Value:
            return _pointer(builder, base, builder.add(start, ir.Constant(ir.IntType(64), step)), vector)

        low, high = (builder.load(place(data[1], args[3], k, _INTS), align=1) for k in (0, _PART))
        for part in range(0, LANES, _PART):
            number = builder.load(place(data[0], args[1], part, ir.VectorType(_BYTE, _PART)), align=1)
            found = builder.call(permute, [low, builder.zext(number, _INTS), high])
            where = place(data[2], args[5], part, _INTS)
            builder.store(builder.add(builder.load(where, align=1), found), where, align=1)
        return context.get_dummy_value()

    return signature, generate
