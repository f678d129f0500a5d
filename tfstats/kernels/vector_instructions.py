"""The few steps that plain code cannot word so that the compiler finds the vector instructions, beside plain versions.

Each function but `trailing_zeros` has a version with the ending `_plainly` that gives the same bytes; a kernel
chooses by a flag, set from
`wide_vectors` unless the caller says otherwise.  The vectors are the compiler's own, of any processor; a processor
whose
registers are short gets several instructions for one.
"""

from __future__ import annotations

import platform

import numpy as np
from llvmlite import binding, ir
from numba.core import cgutils, types
from numba.extending import intrinsic

from tfstats.kernels.compile_policy import inlined

__all__ = [
    "beyond_words",
    "beyond_words_plainly",
    "overlapping_runs",
    "overlapping_runs_plainly",
    "packed_window",
    "packed_window_plainly",
    "sum_of_first",
    "sum_of_first_plainly",
    "trailing_zeros",
    "wide_vectors",
]

_INT64 = ir.IntType(64)
_INT32 = ir.IntType(32)
_INT16 = ir.IntType(16)
_BIT = ir.IntType(1)

BLOCK = 128  # points of a table row
LANES = 16  # values of a window
LOOK_BACK = 32  # runs that are compared at once


def wide_vectors() -> bool:
    """Whether this processor has vectors that pay for the vector versions: AVX2 or better, or those of any 64-bit
    ARM."""
    return platform.machine().lower() in ("arm64", "aarch64") or bool(binding.get_host_cpu_features().get("avx2"))


def _data(context, builder, array_type, array):
    return context.make_array(array_type)(context, builder, value=array).data


def _load_vector(builder, data, index, kind, count):
    pointer = builder.bitcast(builder.gep(data, [index]), ir.VectorType(kind, count).as_pointer())
    vector = builder.load(pointer)
    vector.align = 2 if kind is _INT16 else 4
    return vector


def _splat(builder, value, count):
    vector = ir.VectorType(value.type, count)
    one = builder.insert_element(ir.Constant(vector, ir.Undefined), value, _INT32(0))
    return builder.shuffle_vector(
        one, ir.Constant(vector, ir.Undefined), ir.Constant(ir.VectorType(_INT32, count), [0] * count)
    )


@intrinsic
def trailing_zeros(typing_context, word):
    """Number of zero bits below the lowest set bit of a uint64; 64 when none is set."""

    def generate(context, builder, signature, arguments):
        kind = ir.FunctionType(_INT64, [_INT64, _BIT])
        function = builder.module.declare_intrinsic("llvm.cttz", [_INT64], kind)
        return builder.call(function, [arguments[0], _BIT(0)])

    return types.int64(types.uint64), generate


@intrinsic
def beyond_words(typing_context, table, entries, first, groups, threshold):
    """Which of 128 points have a sum of table rows that is above the threshold in size: two words of 64 bits.

    table int16 (rows * 128,); entries int32: rows entries[first] .. entries[first + groups - 1] are added.
    """

    def generate(context, builder, signature, arguments):
        data = _data(context, builder, signature.args[0], arguments[0])
        numbers = _data(context, builder, signature.args[1], arguments[1])
        first, groups, threshold = arguments[2:]
        vector = ir.VectorType(_INT16, 64)

        def rows_of(index):
            entry = builder.sext(builder.load(builder.gep(numbers, [index])), _INT64)
            at = builder.shl(entry, _INT64(7))
            return [_load_vector(builder, data, builder.add(at, _INT64(64 * half)), _INT16, 64) for half in (0, 1)]

        sums = [cgutils.alloca_once_value(builder, value) for value in rows_of(first)]
        with cgutils.for_range(builder, builder.sub(groups, _INT64(1))) as loop:
            more = rows_of(builder.add(builder.add(first, loop.index), _INT64(1)))
            for slot, value in zip(sums, more, strict=True):
                builder.store(builder.add(builder.load(slot), value), slot)
        limit = _splat(builder, builder.trunc(threshold, _INT16), 64)
        kind = ir.FunctionType(vector, [vector, _BIT])
        size = cgutils.get_or_insert_function(builder.module, kind, "llvm.abs.v64i16")
        words = []
        for slot in sums:
            beyond = builder.icmp_signed(">", builder.call(size, [builder.load(slot), _BIT(0)]), limit)
            words.append(builder.bitcast(beyond, _INT64))
        return context.make_tuple(builder, signature.return_type, words)

    result = types.UniTuple(types.uint64, 2)
    return result(table, entries, types.int64, types.int64, types.int64), generate


@inlined
def beyond_words_plainly(table, entries, first, groups, threshold, sums, flags, packed):
    """The same as `beyond_words`; sums int16 (128,), flags uint8 (128,) and their view packed uint64 (16,) are
    working space."""
    at = np.int64(entries[first]) * BLOCK
    for k in range(BLOCK):
        sums[k] = table[at + k]
    for g in range(1, groups):
        at = np.int64(entries[first + g]) * BLOCK
        for k in range(BLOCK):
            sums[k] += table[at + k]
    for k in range(BLOCK):
        flags[k] = (sums[k] > threshold) | (sums[k] < -threshold)
    low = np.uint64(0)
    high = np.uint64(0)
    for j in range(8):
        low |= ((packed[j] * np.uint64(0x0102040810204080)) >> np.uint64(56)) << np.uint64(8 * j)
        high |= ((packed[j + 8] * np.uint64(0x0102040810204080)) >> np.uint64(56)) << np.uint64(8 * j)
    return low, high


@intrinsic
def packed_window(typing_context, table, entries, first, groups, offset, high, large, out, at):
    """Sums of table rows at 16 points: sizes to out[at .. at + 16], and two masks of 16 bits.

    table (rows * 128,) float32 or float64, entries as in `beyond_words`; offset: the first point in the block.
    First mask: size above
    high[offset + k] and not above large; second mask: the sum is negative.
    """

    def generate(context, builder, signature, arguments):
        array_types = signature.args
        data = _data(context, builder, array_types[0], arguments[0])
        numbers = _data(context, builder, array_types[1], arguments[1])
        _table, _entries, first, groups, offset, _high, large, _out, at = arguments
        kind = context.get_value_type(array_types[0].dtype)
        vector = ir.VectorType(kind, LANES)

        def row_of(index):
            entry = builder.sext(builder.load(builder.gep(numbers, [index])), _INT64)
            return _load_vector(builder, data, builder.add(builder.shl(entry, _INT64(7)), offset), kind, LANES)

        slot = cgutils.alloca_once_value(builder, row_of(first))
        with cgutils.for_range(builder, builder.sub(groups, _INT64(1))) as loop:
            more = row_of(builder.add(builder.add(first, loop.index), _INT64(1)))
            builder.store(builder.fadd(builder.load(slot), more), slot)
        total = builder.load(slot)
        name = "llvm.fabs.v16f32" if kind == ir.FloatType() else "llvm.fabs.v16f64"
        absolute = cgutils.get_or_insert_function(builder.module, ir.FunctionType(vector, [vector]), name)
        size = builder.call(absolute, [total])
        out_data = _data(context, builder, array_types[7], arguments[7])
        pointer = builder.bitcast(builder.gep(out_data, [at]), vector.as_pointer())
        builder.store(size, pointer).align = 4
        limits = _load_vector(builder, _data(context, builder, array_types[5], arguments[5]), offset, kind, LANES)
        plain = builder.fcmp_ordered(">", size, limits)
        plain = builder.and_(plain, builder.fcmp_ordered("<=", size, _splat(builder, large, LANES)))
        negative = builder.fcmp_ordered("<", total, ir.Constant(vector, [0.0] * LANES))
        masks = [builder.zext(builder.bitcast(mask, _INT16), _INT64) for mask in (plain, negative)]
        return context.make_tuple(builder, signature.return_type, masks)

    whole = types.int64
    return types.UniTuple(types.uint64, 2)(table, entries, whole, whole, whole, high, table.dtype, out, whole), generate


@inlined
def packed_window_plainly(table, entries, first, groups, offset, high, large, out, at, window):
    """The same as `packed_window`; window (16,) of the table's type is working space."""
    row = np.int64(entries[first]) * BLOCK + offset
    for k in range(LANES):
        window[k] = table[row + k]
    for g in range(1, groups):
        row = np.int64(entries[first + g]) * BLOCK + offset
        for k in range(LANES):
            window[k] += table[row + k]
    plain = np.uint64(0)
    negative = np.uint64(0)
    for k in range(LANES):
        size = abs(window[k])
        out[at + k] = size
        plain |= np.uint64(size > high[offset + k] and size <= large) << np.uint64(k)
        negative |= np.uint64(window[k] < 0) << np.uint64(k)
    return plain, negative


@intrinsic
def overlapping_runs(typing_context, starts, stops, first, low, high):
    """Which of the 32 runs first .. first + 32 overlap [low, high): bit k for run first + k.  starts, stops int32."""

    def generate(context, builder, signature, arguments):
        start_data, stop_data = (_data(context, builder, signature.args[i], arguments[i]) for i in (0, 1))
        low, high = (_splat(builder, builder.trunc(arguments[i], _INT32), LOOK_BACK) for i in (3, 4))
        before = builder.icmp_signed("<", _load_vector(builder, start_data, arguments[2], _INT32, LOOK_BACK), high)
        after = builder.icmp_signed(">", _load_vector(builder, stop_data, arguments[2], _INT32, LOOK_BACK), low)
        return builder.zext(builder.bitcast(builder.and_(before, after), _INT32), _INT64)

    whole = types.int64
    return types.uint64(starts, stops, whole, whole, whole), generate


@inlined
def overlapping_runs_plainly(starts, stops, first, low, high):
    """The same as `overlapping_runs`."""
    mask = np.uint64(0)
    for k in range(LOOK_BACK):
        mask |= np.uint64((starts[first + k] < high) & (stops[first + k] > low)) << np.uint64(k)
    return mask


@intrinsic
def sum_of_first(typing_context, values, first, length):
    """Sum of values[first .. first + length], length at most 16, by halving: lane k takes lane k + 8, then + 4, + 2,
    + 1.

    16 values must be there to read; those past the length count as 0.
    """

    def generate(context, builder, signature, arguments):
        data = _data(context, builder, signature.args[0], arguments[0])
        kind = context.get_value_type(signature.return_type)
        vector = ir.VectorType(kind, LANES)
        lanes = ir.Constant(ir.VectorType(_INT32, LANES), list(range(LANES)))
        wanted = builder.icmp_unsigned("<", lanes, _splat(builder, builder.trunc(arguments[2], _INT32), LANES))
        total = _load_vector(builder, data, arguments[1], kind, LANES)
        total = builder.select(wanted, total, ir.Constant(vector, [0.0] * LANES))
        count = LANES
        while count > 1:
            half = count // 2
            nothing = ir.Constant(ir.VectorType(kind, count), ir.Undefined)
            parts = [
                builder.shuffle_vector(
                    total, nothing, ir.Constant(ir.VectorType(_INT32, half), list(range(s, s + half)))
                )
                for s in (0, half)
            ]
            total = builder.fadd(*parts)
            count = half
        return builder.extract_element(total, _INT32(0))

    return values.dtype(values, types.int64, types.int64), generate


@inlined
def sum_of_first_plainly(values, first, length, window):
    """The same as `sum_of_first`; window (16,) of the values' type is working space."""
    for k in range(LANES):
        window[k] = values[first + k] if k < length else 0.0
    for k in range(8):
        window[k] += window[k + 8]
    for k in range(4):
        window[k] += window[k + 4]
    for k in range(2):
        window[k] += window[k + 2]
    return window[0] + window[1]
