"""Reading rows of small tables for eight paths at once.

A loop that picks a row for each path does not vectorise: compilers fetch the numbers one by one. Here eight rows are
loaded whole and turned by shuffles, so that the arithmetic after it runs on eight paths. No rounding depends on it.
"""

from typing import Any

from llvmlite import ir
from numba import extending, types

from hedgesim.kernels.jit import device

_intrinsic: Any = extending.intrinsic
LANES = 8
_DOUBLE, _INT32, _INT64 = ir.DoubleType(), ir.IntType(32), ir.IntType(64)
_V8 = ir.VectorType(_DOUBLE, LANES)
_V8_INT32 = ir.VectorType(_INT32, LANES)


@device
def whole_lanes(paths: int) -> int:
    """The next multiple of `LANES`."""
    return (paths + LANES - 1) // LANES * LANES


def _data(context: Any, builder: Any, array_type: Any, array: Any) -> Any:
    return context.make_array(array_type)(context, builder, value=array).data


def _load(builder: Any, pointer: Any, at: Any, vector: Any, align: int) -> Any:
    place = builder.bitcast(builder.gep(pointer, [at]), vector.as_pointer())
    return builder.load(place, align=align)


def _store(builder: Any, value: Any, pointer: Any, at: Any) -> None:
    builder.store(value, builder.bitcast(builder.gep(pointer, [at]), _V8.as_pointer()), align=8)


def _pick(builder: Any, a: Any, b: Any, lanes: list[int]) -> Any:
    return builder.shuffle_vector(a, b, ir.Constant(ir.VectorType(_INT32, len(lanes)), lanes))


def _turned(builder: Any, rows: list[Any]) -> list[Any]:
    """Columns of eight rows of eight, by three rounds of pairwise exchanges."""
    even = [0, 8, 2, 10, 4, 12, 6, 14]
    odd = [1, 9, 3, 11, 5, 13, 7, 15]
    first = [
        (_pick(builder, a, b, even), _pick(builder, a, b, odd)) for a, b in zip(rows[::2], rows[1::2], strict=True)
    ]
    low, high = [0, 1, 8, 9, 4, 5, 12, 13], [2, 3, 10, 11, 6, 7, 14, 15]
    second = []
    for k in (0, 2):
        second.append([_pick(builder, first[k][c], first[k + 1][c], part) for part in (low, high) for c in (0, 1)])
    upper, lower = [0, 1, 2, 3, 8, 9, 10, 11], [4, 5, 6, 7, 12, 13, 14, 15]
    halves = [
        [_pick(builder, a, b, part) for a, b in zip(second[0], second[1], strict=True)] for part in (upper, lower)
    ]
    return [*halves[0], *halves[1]]


@_intrinsic
def quintic_of_eight(
    typingctx: Any, table: Any, first: Any, cell: Any, part: Any, scale: Any, value: Any, slope: Any, at: Any
) -> Any:
    """For paths at .. at + 7: the quintic of table row first + cell and its derivative times scale, at part."""

    def codegen(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        kinds = signature.args
        rows_at, cell_at, part_at, value_at, slope_at = (
            _data(context, builder, kinds[k], args[k]) for k in (0, 2, 3, 5, 6)
        )
        at_ = args[7]
        cells = _load(builder, cell_at, at_, _V8_INT32, 4)
        u = _load(builder, part_at, at_, _V8, 8)
        rows = []
        for lane in range(LANES):
            index = builder.zext(builder.extract_element(cells, _INT32(lane)), _INT64)
            row = builder.shl(builder.add(args[1], index), _INT64(3))
            rows.append(_load(builder, rows_at, row, _V8, 8))
        c = _turned(builder, rows)
        fma = builder.module.globals.get("llvm.fma.v8f64") or ir.Function(
            builder.module, ir.FunctionType(_V8, [_V8, _V8, _V8]), "llvm.fma.v8f64"
        )
        f = builder.call(fma, [c[5], u, c[4]])
        d = builder.call(fma, [c[5], u, f])
        for k in (3, 2, 1):
            f = builder.call(fma, [f, u, c[k]])
            d = builder.call(fma, [d, u, f])
        f = builder.call(fma, [f, u, c[0]])
        spread = builder.insert_element(ir.Constant(_V8, ir.Undefined), args[4], _INT32(0))
        spread = _pick(builder, spread, spread, [0] * LANES)
        _store(builder, f, value_at, at_)
        _store(builder, builder.fmul(d, spread), slope_at, at_)
        return context.get_dummy_value()

    return types.void(table, types.int64, cell, part, types.float64, value, slope, types.int64), codegen


@_intrinsic
def strip_of_eight(typingctx: Any, strips: Any, raw: Any, out: Any, spare: Any, at: Any) -> Any:
    """For draws at .. at + 7: the normal of the draw's ziggurat strip, and how far it is inside the sure part.

    `strips` has a row (width, bound) for each level; the draw's low byte is the level, the next bit the sign, and 52
    bits above it are the place in the strip.
    """

    def codegen(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        strips_at, raw_at, out_at, spare_at = (_data(context, builder, signature.args[k], args[k]) for k in range(4))
        longs, pair = ir.VectorType(_INT64, LANES), ir.VectorType(_DOUBLE, 2)

        def every(number: int) -> Any:
            return ir.Constant(longs, [number] * LANES)

        r = _load(builder, raw_at, args[4], longs, 8)
        level = builder.and_(r, every(255))
        rows = []
        for lane in range(LANES):
            row = builder.shl(builder.extract_element(level, _INT32(lane)), _INT64(1))
            rows.append(_load(builder, strips_at, row, pair, 8))
        while len(rows) > 1:
            lanes = list(range(2 * rows[0].type.count))
            rows = [_pick(builder, a, b, lanes) for a, b in zip(rows[::2], rows[1::2], strict=True)]
        width = _pick(builder, rows[0], rows[0], list(range(0, 16, 2)))
        bound = _pick(builder, rows[0], rows[0], list(range(1, 16, 2)))
        whole = builder.sitofp(builder.and_(builder.lshr(r, every(9)), every(0x000FFFFFFFFFFFFF)), _V8)
        x = builder.bitcast(builder.fmul(whole, width), longs)
        sign = builder.shl(builder.and_(r, every(256)), every(55))
        _store(builder, builder.bitcast(builder.xor(x, sign), _V8), out_at, args[4])
        _store(builder, builder.fsub(bound, whole), spare_at, args[4])
        return context.get_dummy_value()

    return types.void(strips, raw, out, spare, types.int64), codegen
