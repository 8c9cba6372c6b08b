"""Explicit lanes: eight numbers in one register, for kernels whose inner loop a compiler does not vectorise by itself.

Registered with numba as one type for each kind of element: float64, float32, int64, int32, and the truth values that a
comparison gives. A processor with shorter registers takes each in parts: slower, never different in kind.
"""

from __future__ import annotations

import operator
from collections.abc import Callable
from typing import Any

from llvmlite import binding, ir
from numba.core import cgutils, types
from numba.core.types.containers import Tuple
from numba.core.typing.templates import AbstractTemplate, infer_global, signature
from numba.extending import intrinsic, lower_builtin, models, register_model

__all__ = [
    "LANES",
    "OCTAVE_BITS",
    "any_of",
    "both",
    "broad",
    "gather",
    "held",
    "interval",
    "larger",
    "largest",
    "later_lanes",
    "load",
    "low_bits",
    "real",
    "reciprocal",
    "select",
    "smaller",
    "splat",
    "square_root",
    "store",
    "total",
    "upper_half",
]

LANES = 8
OCTAVE_BITS = {64: 8, 32: 10}  # by size of the number: an octave has 2^bits intervals of a table
_FUSE = ("contract",)
_KINDS: dict[Any, Any] = {
    types.float64: ir.DoubleType(),
    types.float32: ir.FloatType(),
    types.int64: ir.IntType(64),
    types.int32: ir.IntType(32),
    types.boolean: ir.IntType(1),
}
_REAL_OF_WHOLE: dict[Any, Any] = {types.int64: types.float64, types.int32: types.float32}
_index = ir.IntType(32)
_CONVERTS_LONG = binding.get_host_cpu_features().get("avx512dq", False) or not binding.get_default_triple().startswith(
    "x86"
)


class _Lanes(types.Type):
    """Eight elements of one kind."""

    def __init__(self, element: types.Type) -> None:
        self.element = element
        super().__init__(name=f"Lanes({element})")

    @property
    def is_float(self) -> bool:
        return self.element in (types.float64, types.float32)


@register_model(_Lanes)
class _LanesModel(models.PrimitiveModel):  # type: ignore[misc]
    def __init__(self, manager: Any, fe_type: Any) -> None:
        super().__init__(manager, fe_type, _ir(fe_type.element))


def _ir(element: types.Type) -> ir.VectorType:
    return ir.VectorType(_KINDS[element], LANES)


def _spread(builder: Any, value: Any) -> Any:
    """One number in all lanes."""
    vector = ir.VectorType(value.type, LANES)
    one = builder.insert_element(ir.Constant(vector, ir.Undefined), value, _index(0))
    zeros = ir.Constant(ir.VectorType(_index, LANES), [0] * LANES)
    return builder.shuffle_vector(one, ir.Constant(vector, ir.Undefined), zeros)


def _call(builder: Any, name: str, result: Any, *args: Any) -> Any:
    kind = ir.FunctionType(result, [arg.type for arg in args])
    return builder.call(cgutils.get_or_insert_function(builder.module, kind, name), args)


def _arithmetic(python_operator: Callable[..., Any], on_floats: str, on_wholes: str) -> None:
    @infer_global(python_operator)
    class _Typing(AbstractTemplate):  # type: ignore[misc]
        def generic(self, args: Any, kws: Any) -> Any:
            lanes = [arg for arg in args if isinstance(arg, _Lanes)]
            if len(lanes) == 2 and lanes[0] == lanes[1]:
                return signature(lanes[0], *args)
            if len(lanes) == 1 and len(args) == 2:
                scalar = types.float64 if lanes[0].is_float else types.int64
                return signature(lanes[0], *[arg if isinstance(arg, _Lanes) else scalar for arg in args])
            return None

    def lower(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        result, operands = sig.return_type, []
        for kind, value in zip(sig.args, args, strict=True):
            if isinstance(kind, _Lanes):
                operands.append(value)
            else:
                operands.append(_spread(builder, context.cast(builder, value, kind, result.element)))
        if result.is_float:
            return getattr(builder, on_floats)(*operands, flags=_FUSE)
        return getattr(builder, on_wholes)(*operands)

    for kinds in ((_Lanes, _Lanes), (_Lanes, types.Number), (types.Number, _Lanes)):
        lower_builtin(python_operator, *kinds)(lower)


for _operator, _on_floats, _on_wholes in (
    (operator.add, "fadd", "add"),
    (operator.sub, "fsub", "sub"),
    (operator.mul, "fmul", "mul"),
):
    _arithmetic(_operator, _on_floats, _on_wholes)


def _address(context: Any, builder: Any, array_type: Any, array: Any, index: Any) -> Any:
    data = context.make_array(array_type)(context, builder, array).data
    return builder.bitcast(builder.gep(data, [index]), _ir(array_type.dtype).as_pointer())


@intrinsic
def load(typing: Any, array: Any, index: Any) -> Any:
    """Eight consecutive elements of a contiguous array."""

    def build(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        align = array.dtype.bitwidth // 8
        return builder.load(_address(context, builder, array, *args), align=align)

    return _Lanes(array.dtype)(array, types.intp), build


@intrinsic
def store(typing: Any, array: Any, index: Any, value: Any) -> Any:
    """Write eight consecutive elements of a contiguous array."""

    def build(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        align = array.dtype.bitwidth // 8
        builder.store(args[2], _address(context, builder, array, args[0], args[1]), align=align)
        return context.get_dummy_value()

    return types.void(array, types.intp, _Lanes(array.dtype)), build


@intrinsic
def gather(typing: Any, array: Any, indices: Any) -> Any:
    """Elements of a contiguous array, one for each lane; indices : eight int32."""

    def build(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        kind, always = _ir(array.dtype), ir.Constant(_ir(types.boolean), [1] * LANES)
        data = context.make_array(array)(context, builder, args[0]).data
        places = builder.gep(data, [args[1]], source_etype=kind.element)
        places.type = ir.VectorType(data.type, LANES)  # indices in lanes give addresses in lanes
        name = f"llvm.masked.gather.v{LANES}f{array.dtype.bitwidth}.v{LANES}p0"
        align = _index(array.dtype.bitwidth // 8)
        return _call(builder, name, kind, places, align, always, ir.Constant(kind, ir.Undefined))

    return _Lanes(array.dtype)(array, indices), build


@intrinsic
def splat(typing: Any, value: Any) -> Any:
    """The same number in every lane."""

    def build(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        return _spread(builder, args[0])

    return _Lanes(value)(value), build


@intrinsic
def real(typing: Any, wholes: Any) -> Any:
    """Whole numbers as floating-point ones of the same size; of 64 bits the upper 52 count."""
    element = wholes.element

    def build(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        kind = _ir(_REAL_OF_WHOLE[element])
        if element == types.int32 or _CONVERTS_LONG:
            return builder.sitofp(args[0], kind)
        # by bits: (n + 2^63) >> 12 is the mantissa of 2^52 + 2^51 + n/2^12
        flipped = builder.xor(args[0], _spread(builder, ir.IntType(64)(1 << 63)))
        mantissa = builder.lshr(flipped, _spread(builder, ir.IntType(64)(12)))
        bits = builder.or_(mantissa, _spread(builder, ir.IntType(64)(0x433 << 52)))
        offset = _spread(builder, ir.DoubleType()(2.0**52 + 2.0**51))
        return builder.fmul(
            builder.fsub(builder.bitcast(bits, kind), offset), _spread(builder, ir.DoubleType()(4096.0))
        )

    return _Lanes(_REAL_OF_WHOLE[element])(wholes), build


@intrinsic
def low_bits(typing: Any, value: Any) -> Any:
    """Numbers within +-2^51 rounded to whole ones, times 2^14, as int64: it wraps where the number passes 2^50."""

    def build(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        shifted = builder.fadd(args[0], _spread(builder, ir.DoubleType()(1.5 * 2.0**52)))
        bits = builder.bitcast(shifted, _ir(types.int64))
        return builder.shl(bits, _spread(builder, ir.IntType(64)(14)))

    return _Lanes(types.int64)(_Lanes(types.float64)), build


@intrinsic
def upper_half(typing: Any, wholes: Any) -> Any:
    """The upper 32 bits of 64."""

    def build(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        return builder.trunc(builder.lshr(args[0], _spread(builder, ir.IntType(64)(32))), _ir(types.int32))

    return _Lanes(types.int32)(_Lanes(types.int64)), build


@intrinsic
def interval(typing: Any, value: Any) -> Any:
    """Number of the interval a positive number is in, int32, and its distance from the interval's lower end.

    Intervals are numbered on through the octaves, each of which is divided evenly.
    """
    size = value.element.bitwidth
    rest = {64: 52, 32: 23}[size] - OCTAVE_BITS[size]
    integer = ir.VectorType(ir.IntType(size), LANES)

    def build(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        whole = builder.bitcast(args[0], integer)
        number = builder.lshr(whole, ir.Constant(integer, [rest] * LANES))
        end = builder.and_(whole, ir.Constant(integer, [-(2**rest)] * LANES))
        number = builder.trunc(number, _ir(types.int32)) if size == 64 else number
        beyond = builder.fsub(args[0], builder.bitcast(end, args[0].type))
        return context.make_tuple(builder, sig.return_type, [number, beyond])

    return Tuple((_Lanes(types.int32), value))(value), build


@intrinsic
def held(typing: Any, value: Any, least: Any, most: Any) -> Any:
    """int32 lanes held between two numbers."""

    def build(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        value, least, most = args[0], *(_spread(builder, builder.trunc(bound, _index)) for bound in args[1:])
        value = builder.select(builder.icmp_signed(">", value, least), value, least)
        return builder.select(builder.icmp_signed("<", value, most), value, most)

    return value(value, types.intp, types.intp), build


@intrinsic
def broad(typing: Any, value: Any) -> Any:
    """The same numbers as float64."""

    def build(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        return args[0] if value.element == types.float64 else builder.fpext(args[0], _ir(types.float64))

    return _Lanes(types.float64)(value), build


@intrinsic
def reciprocal(typing: Any, value: Any) -> Any:
    """1/value. In float64 to 2e-14 of it: the float32 quotient and one Newton step, cheaper than a division."""

    def build(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        one = _spread(builder, ir.FloatType()(1.0))
        if value.element == types.float32:
            return builder.fdiv(one, args[0])
        guess = builder.fpext(builder.fdiv(one, builder.fptrunc(args[0], one.type)), args[0].type)
        error = builder.fsub(
            _spread(builder, ir.DoubleType()(1.0)), builder.fmul(args[0], guess, flags=_FUSE), flags=_FUSE
        )
        return builder.fadd(guess, builder.fmul(guess, error, flags=_FUSE), flags=_FUSE)

    return value(value), build


@intrinsic
def square_root(typing: Any, value: Any) -> Any:
    """Square root of every lane."""

    def build(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        return _call(builder, f"llvm.sqrt.v{LANES}f{value.element.bitwidth}", args[0].type, args[0])

    return value(value), build


@intrinsic
def smaller(typing: Any, left: Any, right: Any) -> Any:
    """Lanes where left < right; false where either is not a number."""

    def build(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        return builder.fcmp_ordered("<", *args)

    return _Lanes(types.boolean)(left, left), build


@intrinsic
def both(typing: Any, left: Any, right: Any) -> Any:
    """Lanes that are true in both."""

    def build(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        return builder.and_(*args)

    return left(left, left), build


@intrinsic
def later_lanes(typing: Any, lane: Any) -> Any:
    """True in the lanes behind the given one: the partners inside a group that come later."""

    def build(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        narrow = builder.trunc(args[0], _index)
        order = ir.Constant(_ir(types.int32), list(range(LANES)))
        return builder.icmp_signed(">", order, _spread(builder, narrow))

    return _Lanes(types.boolean)(types.intp), build


@intrinsic
def select(typing: Any, mask: Any, chosen: Any, otherwise: Any) -> Any:
    """`chosen` where the mask is true, `otherwise` elsewhere."""

    def build(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        return builder.select(*args)

    return chosen(mask, chosen, chosen), build


@intrinsic
def any_of(typing: Any, mask: Any) -> Any:
    """Whether any lane is true."""

    def build(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        packed = builder.bitcast(args[0], ir.IntType(LANES))
        return builder.icmp_unsigned("!=", packed, ir.IntType(LANES)(0))

    return types.boolean(mask), build


@intrinsic
def larger(typing: Any, left: Any, right: Any) -> Any:
    """The larger of two numbers in every lane."""

    def build(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        return builder.select(builder.fcmp_ordered(">", *args), *args)

    return left(left, left), build


def _fold(builder: Any, value: Any, join: Callable[[Any, Any], Any]) -> Any:
    """Lane 0 after joining the upper half of the lanes onto the lower, until one is left."""
    width = LANES
    while width > 1:
        width //= 2
        low, high = (
            ir.Constant(ir.VectorType(_index, width), list(range(first, first + width))) for first in (0, width)
        )
        nothing = ir.Constant(value.type, ir.Undefined)
        value = join(builder.shuffle_vector(value, nothing, low), builder.shuffle_vector(value, nothing, high))
    return builder.extract_element(value, _index(0))


@intrinsic
def largest(typing: Any, value: Any) -> Any:
    """The largest number of the lanes."""

    def build(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        return _fold(builder, args[0], lambda a, b: builder.select(builder.fcmp_ordered(">", a, b), a, b))

    return value.element(value), build


@intrinsic
def total(typing: Any, value: Any) -> Any:
    """Sum over the lanes, always in the same order."""

    def build(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        return _fold(builder, args[0], builder.fadd)

    return value.element(value), build
