"""Eight float32 at a time, where a loop of eight is too short for the compiler to see it; arguments arrive validated."""

from typing import Any

from llvmlite import ir
from numba import types
from numba.core import cgutils
from numba.extending import intrinsic

LANES = 8
SPAN = 16  # samples that `weigh` takes
_INDEX = ir.IntType(64)
_ZERO = ir.Constant(_INDEX, 0)
_VECTOR = ir.VectorType(ir.FloatType(), LANES)
_UNSET = ir.Constant(_VECTOR, ir.Undefined)


def _start(context: Any, builder: Any, array: Any, kind: Any, index: Any) -> Any:
    """Pointer to an entry of a contiguous array."""
    return builder.gep(context.make_array(kind)(context, builder, array).data, [index])


def _load(builder: Any, pointer: Any, offset: Any) -> Any:
    place = builder.bitcast(builder.gep(pointer, [offset]), _VECTOR.as_pointer())
    return builder.load(place, align=4)


def _store(builder: Any, vector: Any, pointer: Any, offset: Any) -> None:
    place = builder.bitcast(builder.gep(pointer, [offset]), _VECTOR.as_pointer())
    builder.store(vector, place, align=4)


def _mask(*places: int) -> Any:
    return ir.Constant(ir.VectorType(ir.IntType(32), LANES), list(places))


def _weigh(typing_context, samples, others, first, weights, row, out, outs, at):
    """``out[at + p] = sum over m of samples[first + m] * weights[row, m, p]`` for eight p; ``others`` to ``outs`` likewise.

    ``weights`` is flat, of `SPAN` rows of eight an entry.
    """

    def generate(context, builder, signature, args):
        kinds = signature.args
        rails = [_start(context, builder, args[n], kinds[n], args[2]) for n in (0, 1)]
        size = ir.Constant(_INDEX, SPAN * LANES)
        table = _start(context, builder, args[3], kinds[3], builder.mul(args[4], size))
        kind = ir.FunctionType(_VECTOR, [_VECTOR] * 3)
        multiply_add = cgutils.get_or_insert_function(builder.module, kind, f"llvm.fmuladd.v{LANES}f32")
        # two sums a rail: one would wait for itself at every step
        sums: list[list[Any]] = [[ir.Constant(_VECTOR, None)] * 2 for _ in rails]
        for m in range(SPAN):
            weight = _load(builder, table, ir.Constant(_INDEX, m * LANES))
            for total, rail in zip(sums, rails, strict=True):
                one = builder.load(builder.gep(rail, [ir.Constant(_INDEX, m)]))
                lane = builder.insert_element(_UNSET, one, ir.Constant(ir.IntType(32), 0))
                lanes = builder.shuffle_vector(lane, _UNSET, _mask(*[0] * LANES))
                total[m % 2] = builder.call(multiply_add, [lanes, weight, total[m % 2]])
        for total, n in zip(sums, (5, 6), strict=True):
            _store(builder, builder.fadd(*total), _start(context, builder, args[n], kinds[n], args[7]), _ZERO)
        return context.get_dummy_value()

    index = types.uint64
    return types.void(samples, others, index, weights, index, out, outs, index), generate


def _dot(typing_context, a, at, b, from_):
    """Sum over m of eight ``a[at + m] * b[from_ + m]``, in any order; the arrays' entries counted as they lie in memory."""

    def generate(context, builder, signature, args):
        kinds = signature.args
        left, right = (_load(builder, _start(context, builder, args[n], kinds[n], args[n + 1]), _ZERO) for n in (0, 2))
        products = builder.fmul(left, right)
        for step in (4, 2, 1):
            shifted = builder.shuffle_vector(products, _UNSET, _mask(*((lane + step) % LANES for lane in range(LANES))))
            products = builder.fadd(products, shifted)
        return builder.extract_element(products, ir.Constant(ir.IntType(32), 0))

    return types.float32(a, types.uint64, b, types.uint64), generate


def _turn_over(typing_context, lines, wave, column):
    """``wave[p, column + m] = lines[8 m + p]`` for eight p and m; ``wave`` has eight rows."""

    def generate(context, builder, signature, args):
        kinds = signature.args
        begin = _start(context, builder, args[0], kinds[0], _ZERO)
        rows = [_load(builder, begin, ir.Constant(_INDEX, LANES * m)) for m in range(LANES)]
        for step in (1, 2, 4):
            low = [lane for lane in range(LANES) if not lane & step]
            for m in low:
                a, b = rows[m], rows[m + step]
                keep = _mask(*(lane if not lane & step else LANES + lane - step for lane in range(LANES)))
                swap = _mask(*(lane + step if not lane & step else LANES + lane for lane in range(LANES)))
                rows[m], rows[m + step] = builder.shuffle_vector(a, b, keep), builder.shuffle_vector(a, b, swap)
        array = context.make_array(kinds[1])(context, builder, args[1])
        width = cgutils.unpack_tuple(builder, array.shape)[1]
        for p, row in enumerate(rows):
            offset = builder.add(builder.mul(width, ir.Constant(_INDEX, p)), args[2])
            _store(builder, row, array.data, offset)
        return context.get_dummy_value()

    return types.void(lines, wave, types.int64), generate


weigh: Any = intrinsic(_weigh)
dot: Any = intrinsic(_dot)
turn_over: Any = intrinsic(_turn_over)
