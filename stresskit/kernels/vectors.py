"""Eight numbers worked on at once inside compiled loops: a type with plain operators.

A compiler told to work on eight neighbours does so only while it can see that rows do not overlap, and forgets it as
loops grow. ``Vec`` says it: ``load`` takes eight doubles of an array, ``+ - * /`` work place by place, numbers are
spread over all places, ``store`` writes them back. Every place is rounded as the scalar operation would be (IEEE 754,
no contraction into fused operations), whatever the width of the machine's registers: the same bits everywhere.
"""

from __future__ import annotations

import operator
from collections.abc import Callable
from typing import Any, cast

from llvmlite import ir
from numba.core import errors, types
from numba.core.extending import intrinsic, models, register_model
from numba.core.imputils import lower_builtin, lower_cast
from numba.core.typing.templates import AbstractTemplate, infer_global, signature

WIDTH = 8


def whole(columns: int) -> int:
    """The next multiple of eight."""
    return -(-columns // WIDTH) * WIDTH


_DOUBLES = ir.VectorType(ir.DoubleType(), WIDTH)
_WHOLE = ir.VectorType(ir.IntType(64), WIDTH)


class VecType(types.Type):
    """Eight doubles, as the compiler's type."""

    def __init__(self) -> None:
        super().__init__(name="Vec8")

    def can_convert_from(self, typingctx: Any, other: Any) -> Any:
        """Numbers become eight times themselves."""
        if isinstance(other, types.Integer | types.Float):
            return typingctx.can_convert(other, types.float64)
        return None


def _emitted(function: Callable[..., Any]) -> Callable[..., Any]:
    """A function whose machine code is given; called by compiled code without the typing context."""
    return cast("Callable[..., Any]", intrinsic(function))


#: For annotations: values of this type exist in compiled code only.
Vec = Any
VEC = VecType()


@register_model(VecType)
class _VecModel(models.PrimitiveModel):
    def __init__(self, manager: Any, kind: Any) -> None:
        super().__init__(manager, kind, _DOUBLES)


def _spread(builder: Any, value: Any) -> Any:
    """All eight places of the same number."""
    one = builder.insert_element(ir.Constant(_DOUBLES, ir.Undefined), value, ir.Constant(ir.IntType(32), 0))
    mask = ir.Constant(ir.VectorType(ir.IntType(32), WIDTH), [0] * WIDTH)
    return builder.shuffle_vector(one, ir.Constant(_DOUBLES, ir.Undefined), mask)


@lower_cast(types.Float, VEC)
@lower_cast(types.Integer, VEC)
def _number_to_vec(context: Any, builder: Any, kind: Any, _: Any, value: Any) -> Any:
    return _spread(builder, context.cast(builder, value, kind, types.float64))


def _operator(of: Callable[..., Any], emit: str) -> None:
    """Place by place, both sides Vec or one of them a number."""

    class Template(AbstractTemplate):
        def generic(self, args: Any, kws: Any) -> Any:
            known = all(isinstance(a, VecType | types.Integer | types.Float) for a in args)
            if known and not kws and any(isinstance(a, VecType) for a in args):
                return signature(VEC, VEC, VEC)
            return None

    infer_global(of)(Template)

    def lower(_: Any, builder: Any, __: Any, args: Any) -> Any:
        return getattr(builder, emit)(*args)

    lower_builtin(of, VEC, VEC)(lower)


for _of, _emit in (
    (operator.add, "fadd"),
    (operator.iadd, "fadd"),
    (operator.sub, "fsub"),
    (operator.isub, "fsub"),
    (operator.mul, "fmul"),
    (operator.imul, "fmul"),
    (operator.truediv, "fdiv"),
):
    _operator(_of, _emit)


def _place(context: Any, builder: Any, kind: Any, array: Any, at: Any, at_kind: Any) -> Any:
    """Address of eight doubles of a contiguous array from element ``at`` on."""
    data = context.make_array(kind)(context, builder, array).data
    index = context.cast(builder, at, at_kind, types.intp)
    return builder.bitcast(builder.gep(data, [index]), _DOUBLES.as_pointer())


def _contiguous(array: Any) -> None:
    """Refuses, while compiling, arrays whose neighbours do not lie side by side."""
    if not (isinstance(array, types.Array) and array.ndim == 1 and array.layout == "C"):
        raise errors.TypingError(f"eight neighbours of a contiguous array are asked for, given {array}")


@_emitted
def load(typingctx: Any, array: Any, at: Any) -> Any:
    """Eight neighbours of a one-dimensional array."""
    _contiguous(array)

    def make(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        return builder.load(_place(context, builder, sig.args[0], args[0], args[1], sig.args[1]), align=8)

    return VEC(array, at), make


@_emitted
def store(typingctx: Any, array: Any, at: Any, value: Any) -> Any:
    """Writes eight neighbours."""
    _contiguous(array)

    def make(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        place = _place(context, builder, sig.args[0], args[0], args[1], sig.args[1])
        builder.store(args[2], place, align=8)
        return context.get_dummy_value()

    return types.void(array, at, VEC), make


@_emitted
def nth(typingctx: Any, index: Any) -> Any:
    """The index, of which the compiler is told that it does not count from the end of an array: it does not look then."""

    def make(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        return builder.and_(args[0], ir.Constant(ir.IntType(64), (1 << 63) - 1))

    return types.int64(types.int64), make


@_emitted
def spread(typingctx: Any, value: Any) -> Any:
    """A number in all places."""
    return VEC(types.float64), lambda context, builder, sig, args: _spread(builder, args[0])


@_emitted
def eight_powers(typingctx: Any, value: Any) -> Any:
    """x, x^2, ... x^8 of a number: products of x, x^2 and x^4, no chain of eight."""

    def make(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        power, out = args[0], _spread(builder, args[0])
        for bit in range(3):
            has = ir.Constant(ir.VectorType(ir.IntType(1), WIDTH), [j >> bit & 1 for j in range(WIDTH)])
            ones = ir.Constant(_DOUBLES, [1.0] * WIDTH)
            out = builder.fmul(out, builder.select(has, _spread(builder, power), ones))
            power = builder.fmul(power, power)
        return out

    return VEC(types.float64), make


def _chosen(how: str) -> Any:
    def make(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        return builder.select(builder.fcmp_ordered(how, args[0], args[1]), args[2], args[3])

    return make


@_emitted
def where_less(typingctx: Any, x: Any, y: Any, yes: Any, no: Any) -> Any:
    """``yes`` where x < y, ``no`` elsewhere."""
    return VEC(VEC, VEC, VEC, VEC), _chosen("<")


@_emitted
def where_at_most(typingctx: Any, x: Any, y: Any, yes: Any, no: Any) -> Any:
    """``yes`` where x <= y, ``no`` elsewhere."""
    return VEC(VEC, VEC, VEC, VEC), _chosen("<=")


@_emitted
def times_two_to(typingctx: Any, x: Any, shifted: Any) -> Any:
    """x * 2^k for normal results, where ``shifted`` is k + 1.5 * 2^52: its last bits are k, added to the exponent of x."""

    def make(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        fifty_two = ir.Constant(_WHOLE, [52] * WIDTH)
        bits = builder.shl(builder.bitcast(args[1], _WHOLE), fifty_two)
        return builder.bitcast(builder.add(builder.bitcast(args[0], _WHOLE), bits), _DOUBLES)

    return VEC(VEC, VEC), make


@_emitted
def exponent_and_fraction(typingctx: Any, x: Any) -> Any:
    """(k, m) with x = m * 2^k, 1 <= m < 2, for positive normal numbers."""

    def make(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        def whole(value: int) -> Any:
            return ir.Constant(_WHOLE, [value] * WIDTH)

        bits = builder.bitcast(args[0], _WHOLE)
        # 2^52 + k + 1023 has these last bits; the bias is taken off as a double, which is exact
        raised = builder.bitcast(
            builder.or_(builder.lshr(bits, whole(52)), whole(0x4330000000000000)), _DOUBLES
        )
        k = builder.fsub(raised, ir.Constant(_DOUBLES, [2.0**52 + 1023.0] * WIDTH))
        fraction = builder.or_(builder.and_(bits, whole((1 << 52) - 1)), whole(1023 << 52))
        return context.make_tuple(builder, sig.return_type, [k, builder.bitcast(fraction, _DOUBLES)])

    return types.UniTuple(VEC, 2)(VEC), make


@_emitted
def times_plus(typingctx: Any, x: Any, y: Any, add: Any) -> Any:
    """x * y + add place by place, rounded once where the processor can do that in one step."""

    def make(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        kind = ir.FunctionType(_DOUBLES, [_DOUBLES] * 3)
        name = f"llvm.fmuladd.v{WIDTH}f64"
        return builder.call(builder.module.declare_intrinsic(name, fnty=kind), args)

    return VEC(VEC, VEC, VEC), make


#: Which of sixteen places of two vectors to take, for sums of neighbours one, two and four apart.
_ODD_EVEN = tuple(
    tuple(
        [
            p + q + 8 * side
            for q in range(0, 8, 2 * step)
            for side in (0, 1)
            for p in range(start, start + step)
        ]
    )
    for step in (1, 2, 4)
    for start in (0, step)
)


@_emitted
def sums_of_eight(typingctx: Any, a: Any, b: Any, c: Any, d: Any, e: Any, f: Any, g: Any, h: Any) -> Any:
    """The sum over the places of each of eight vectors, as one vector."""

    def make(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        rest = list(args)
        for step in range(3):
            masks = [
                ir.Constant(ir.VectorType(ir.IntType(32), WIDTH), list(m))
                for m in _ODD_EVEN[2 * step : 2 * step + 2]
            ]
            rest = [
                builder.fadd(*(builder.shuffle_vector(x, y, mask) for mask in masks))
                for x, y in zip(rest[::2], rest[1::2], strict=True)
            ]
        return rest[0]

    return VEC(*[VEC] * 8), make


@_emitted
def transposed(typingctx: Any, a: Any, b: Any, c: Any, d: Any, e: Any, f: Any, g: Any, h: Any) -> Any:
    """Eight vectors of the first places, of the second places, ... of eight vectors."""

    def make(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        rows = list(args)
        for step in (4, 2, 1):
            # one binary digit of the vector's number and of the place change their roles
            upper = [p if not p & step else WIDTH + p - step for p in range(WIDTH)]
            lower = [p + step if not p & step else WIDTH + p for p in range(WIDTH)]
            masks = [ir.Constant(ir.VectorType(ir.IntType(32), WIDTH), m) for m in (upper, lower)]
            for i in (i for i in range(WIDTH) if not i & step):
                pair = rows[i], rows[i + step]
                rows[i], rows[i + step] = (builder.shuffle_vector(*pair, mask) for mask in masks)
        return context.make_tuple(builder, sig.return_type, rows)

    return types.UniTuple(VEC, WIDTH)(*[VEC] * WIDTH), make
