"""Explicit lanes: four doubles in one register, for kernels whose inner loop a compiler does not vectorise by itself.

Registered with numba as two types: `Lanes` (4 x float64) with + - * /, and `Mask` (4 x bool).
"""

from __future__ import annotations

import operator
from collections.abc import Callable
from typing import Any

from llvmlite import ir
from numba.core import cgutils, types
from numba.core.typing.templates import ConcreteTemplate, infer_global, signature
from numba.extending import intrinsic, lower_builtin, models, register_model

__all__ = [
    "WIDTH",
    "any_of",
    "both",
    "count",
    "larger",
    "largest",
    "later_lanes",
    "load",
    "select",
    "smaller",
    "splat",
    "square_root",
    "store",
    "total",
]

WIDTH = 4
_FUSE = ("contract",)
_index = ir.IntType(32)
_lanes_ir = ir.VectorType(ir.DoubleType(), WIDTH)
_mask_ir = ir.VectorType(ir.IntType(1), WIDTH)


class _Lanes(types.Type):
    def __init__(self) -> None:
        super().__init__(name="Lanes")


class _Mask(types.Type):
    def __init__(self) -> None:
        super().__init__(name="Mask")


@register_model(_Lanes)
class _LanesModel(models.PrimitiveModel):  # type: ignore[misc]
    def __init__(self, manager: Any, fe_type: Any) -> None:
        super().__init__(manager, fe_type, _lanes_ir)


@register_model(_Mask)
class _MaskModel(models.PrimitiveModel):  # type: ignore[misc]
    def __init__(self, manager: Any, fe_type: Any) -> None:
        super().__init__(manager, fe_type, _mask_ir)


_lanes, _mask = _Lanes(), _Mask()


def _arithmetic(python_operator: Callable[..., Any], instruction: str) -> None:
    @infer_global(python_operator)
    class _Typing(ConcreteTemplate):  # type: ignore[misc]
        cases = [signature(_lanes, _lanes, _lanes)]  # noqa: RUF012

    @lower_builtin(python_operator, _Lanes, _Lanes)
    def _lower(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        return getattr(builder, instruction)(*args, flags=_FUSE)


for _operator, _instruction in (
    (operator.add, "fadd"),
    (operator.sub, "fsub"),
    (operator.mul, "fmul"),
    (operator.truediv, "fdiv"),
):
    _arithmetic(_operator, _instruction)


def _address(context: Any, builder: Any, array_type: Any, array: Any, index: Any) -> Any:
    data = context.make_array(array_type)(context, builder, array).data
    return builder.bitcast(builder.gep(data, [index]), _lanes_ir.as_pointer())


@intrinsic
def load(typing: Any, array: Any, index: Any) -> Any:
    """Four consecutive elements of a contiguous float64 array."""

    def build(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        return builder.load(_address(context, builder, sig.args[0], *args), align=8)

    return _lanes(array, types.intp), build


@intrinsic
def store(typing: Any, array: Any, index: Any, value: Any) -> Any:
    """Write four consecutive elements of a contiguous float64 array."""

    def build(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        builder.store(args[2], _address(context, builder, sig.args[0], args[0], args[1]), align=8)
        return context.get_dummy_value()

    return types.void(array, types.intp, _lanes), build


@intrinsic
def splat(typing: Any, value: Any) -> Any:
    """The same number in every lane."""

    def build(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        one = builder.insert_element(ir.Constant(_lanes_ir, ir.Undefined), args[0], _index(0))
        zeros = ir.Constant(ir.VectorType(_index, WIDTH), [0] * WIDTH)
        return builder.shuffle_vector(one, ir.Constant(_lanes_ir, ir.Undefined), zeros)

    return _lanes(types.float64), build


@intrinsic
def smaller(typing: Any, left: Any, right: Any) -> Any:
    """Lanes where left < right; false where either is not a number."""

    def build(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        return builder.fcmp_ordered("<", *args)

    return _mask(_lanes, _lanes), build


@intrinsic
def both(typing: Any, left: Any, right: Any) -> Any:
    """Lanes that are in two masks."""

    def build(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        return builder.and_(*args)

    return _mask(_mask, _mask), build


@intrinsic
def later_lanes(typing: Any, lane: Any) -> Any:
    """Lanes behind the given one: the partners inside a group that come later."""

    def build(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        wide = ir.VectorType(ir.IntType(64), WIDTH)
        one = builder.insert_element(ir.Constant(wide, ir.Undefined), args[0], _index(0))
        zeros = ir.Constant(ir.VectorType(_index, WIDTH), [0] * WIDTH)
        all_of_it = builder.shuffle_vector(one, ir.Constant(wide, ir.Undefined), zeros)
        return builder.icmp_signed(">", ir.Constant(wide, list(range(WIDTH))), all_of_it)

    return _mask(types.intp), build


@intrinsic
def select(typing: Any, mask: Any, chosen: Any, otherwise: Any) -> Any:
    """`chosen` in the mask's lanes, `otherwise` in the others."""

    def build(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        return builder.select(*args)

    return _lanes(_mask, _lanes, _lanes), build


@intrinsic
def any_of(typing: Any, mask: Any) -> Any:
    """Whether any lane is in the mask."""

    def build(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        packed = builder.bitcast(args[0], ir.IntType(WIDTH))
        return builder.icmp_unsigned("!=", packed, ir.IntType(WIDTH)(0))

    return types.boolean(_mask), build


@intrinsic
def count(typing: Any, mask: Any) -> Any:
    """One in the mask's lanes, zero in the others."""

    def build(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        return builder.uitofp(args[0], _lanes_ir)

    return _lanes(_mask), build


@intrinsic
def square_root(typing: Any, value: Any) -> Any:
    """Square root of every lane."""

    def build(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        kind = ir.FunctionType(_lanes_ir, [_lanes_ir])
        return builder.call(cgutils.get_or_insert_function(builder.module, kind, f"llvm.sqrt.v{WIDTH}f64"), args)

    return _lanes(_lanes), build


@intrinsic
def larger(typing: Any, left: Any, right: Any) -> Any:
    """The larger of two numbers in every lane."""

    def build(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        return builder.select(builder.fcmp_ordered(">", *args), *args)

    return _lanes(_lanes, _lanes), build


@intrinsic
def largest(typing: Any, value: Any) -> Any:
    """The largest number of the lanes."""

    def build(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        result = builder.extract_element(args[0], _index(0))
        for lane in range(1, WIDTH):
            other = builder.extract_element(args[0], _index(lane))
            result = builder.select(builder.fcmp_ordered(">", result, other), result, other)
        return result

    return types.float64(_lanes), build


@intrinsic
def total(typing: Any, value: Any) -> Any:
    """Sum over the lanes, always in the same order."""

    def build(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        parts = [builder.extract_element(args[0], _index(lane)) for lane in range(WIDTH)]
        return builder.fadd(builder.fadd(parts[0], parts[2]), builder.fadd(parts[1], parts[3]))

    return types.float64(_lanes), build
