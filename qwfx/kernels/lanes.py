"""Rows of a few numbers, one for each walker of a block, held in vector registers.

A compiled loop over the walkers of a block stays scalar where the compiler cannot tell whether two rows overlap in
memory, as is so wherever rows are looked up by index. Here such a row is a value of its own: an LLVM vector, or two
of them for complex numbers. Arrays are two-dimensional, in C order; a row is as long as the tuple `width`.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

from llvmlite import ir
from numba import types
from numba.extending import intrinsic, models, register_model

__all__ = ["divide", "equal", "larger", "load", "minus_product", "plus_product", "same", "size", "store", "times"]

emitted: Any = intrinsic
"""The same, for the type checker: what it makes has one argument less than what it is given."""


class Lanes(types.Type):
    """A row of `count` numbers."""

    def __init__(self, dtype: Any, count: int) -> None:
        self.dtype, self.count, self.is_complex = dtype, count, dtype == types.complex128
        super().__init__(f"Lanes({dtype}, {count})")


@register_model(Lanes)
class LanesModel(models.PrimitiveModel):
    """Real numbers: a vector. Complex ones: a pair of vectors."""

    def __init__(self, manager: Any, kind: Lanes) -> None:
        vector = ir.VectorType(ir.DoubleType(), kind.count)
        super().__init__(manager, kind, ir.LiteralStructType([vector, vector]) if kind.is_complex else vector)  # type: ignore[no-untyped-call]


def _parts(builder: Any, kind: Any, value: Any, count: int) -> list[Any]:
    """Real and, for complex numbers, imaginary part of lanes or of a number that all lanes share, as vectors."""
    if isinstance(kind, Lanes):
        return [builder.extract_value(value, k) for k in range(2)] if kind.is_complex else [value]
    if isinstance(kind, types.Complex):
        return [_spread(builder, builder.extract_value(value, k), count) for k in range(2)]
    if isinstance(kind, types.Integer):
        value = builder.sitofp(value, ir.DoubleType())
    return [_spread(builder, value, count)]


def _spread(builder: Any, number: Any, count: int) -> Any:
    index = ir.IntType(32)
    one = builder.insert_element(ir.Constant(ir.VectorType(number.type, count), ir.Undefined), number, index(0))
    return builder.shuffle_vector(one, one, ir.Constant(ir.VectorType(index, count), [0] * count))


def _whole(builder: Any, kind: Lanes, parts: list[Any]) -> Any:
    if not kind.is_complex:
        return parts[0]
    if len(parts) == 1:
        parts = [parts[0], ir.Constant(parts[0].type, [0.0] * kind.count)]
    pair = ir.Constant(ir.LiteralStructType([parts[0].type] * 2), ir.Undefined)
    return builder.insert_value(builder.insert_value(pair, parts[0], 0), parts[1], 1)


def _operation(emit: Callable[..., list[Any]], *kinds: Any, real: bool = False) -> Any:
    """Signature and code of an operation on lanes and numbers, of which the code for vectors is `emit`."""
    count = next(kind.count for kind in kinds if isinstance(kind, Lanes))
    is_complex = any(getattr(kind, "is_complex", isinstance(kind, types.Complex)) for kind in kinds) and not real
    result = Lanes(types.complex128 if is_complex else types.float64, count)

    def build(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        parts = (_parts(builder, kind, arg, count) for kind, arg in zip(kinds, args, strict=True))
        return _whole(builder, result, emit(builder, *parts))

    return result(*kinds), build


def _multiply(builder: Any, a: list[Any], x: list[Any]) -> list[Any]:
    if len(a) == 1 or len(x) == 1:
        few, many = (a, x) if len(a) == 1 else (x, a)
        return [builder.fmul(few[0], part) for part in many]
    re = builder.fsub(builder.fmul(a[0], x[0]), builder.fmul(a[1], x[1]))
    return [re, builder.fadd(builder.fmul(a[0], x[1]), builder.fmul(a[1], x[0]))]


def _combine(builder: Any, operation: Any, y: list[Any], z: list[Any]) -> list[Any]:
    nothing = ir.Constant(y[0].type, [-0.0] * y[0].type.count)
    y, z = (part + [nothing] * (max(len(y), len(z)) - len(part)) for part in (y, z))
    return [operation(a, b) for a, b in zip(y, z, strict=True)]


def _magnitude(builder: Any, x: Any) -> Any:
    bits = ir.VectorType(ir.IntType(64), x.type.count)
    without_sign = ir.Constant(bits, [2**63 - 1] * x.type.count)
    return builder.bitcast(builder.and_(builder.bitcast(x, bits), without_sign), x.type)


def _start(context: Any, builder: Any, kinds: Any, args: Any, count: int) -> tuple[Any, Any]:
    """Pointer to the first number of a row."""
    view = context.make_array(kinds[0])(context, builder, args[0])
    row = context.cast(builder, args[1], kinds[1], types.intp)
    offset = builder.mul(row, row.type(count * (2 if isinstance(kinds[0].dtype, types.Complex) else 1)))
    return builder.bitcast(view.data, ir.DoubleType().as_pointer()), offset


@emitted  # type: ignore[untyped-decorator]
def load(_context: Any, array: Any, row: Any, width: Any) -> Any:
    """Row `row` of an array."""
    result = Lanes(array.dtype, len(width))
    count = len(width)

    def build(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        start, offset = _start(context, builder, signature.args, args, count)
        parts = 1 + result.is_complex
        kind = ir.VectorType(ir.DoubleType(), count * parts)
        whole = builder.load(builder.bitcast(builder.gep(start, [offset]), kind.as_pointer()), align=8)
        if parts == 1:
            return whole
        index = ir.VectorType(ir.IntType(32), count)
        halves = [ir.Constant(index, [2 * k + part for k in range(count)]) for part in range(2)]
        return _whole(builder, result, [builder.shuffle_vector(whole, whole, half) for half in halves])

    return result(array, row, width), build


@emitted  # type: ignore[untyped-decorator]
def store(_context: Any, array: Any, row: Any, values: Any) -> Any:
    """Put lanes, of the same type, into row `row` of an array."""
    count = values.count

    def build(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        start, offset = _start(context, builder, signature.args, args, count)
        parts = _parts(builder, values, args[2], count)
        if len(parts) == 2:
            order = [k // 2 + count * (k % 2) for k in range(2 * count)]
            index = ir.Constant(ir.VectorType(ir.IntType(32), 2 * count), order)
            parts = [builder.shuffle_vector(*parts, index)]
        builder.store(parts[0], builder.bitcast(builder.gep(start, [offset]), parts[0].type.as_pointer()), align=8)
        return context.get_dummy_value()

    return types.none(array, row, values), build


@emitted  # type: ignore[untyped-decorator]
def same(_context: Any, array: Any, value: Any, width: Any) -> Any:
    """The real number `value` in all lanes, of the type of the array's numbers."""
    result = Lanes(array.dtype, len(width))

    def build(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        return _whole(builder, result, _parts(builder, value, args[1], result.count))

    return result(array, value, width), build


@emitted  # type: ignore[untyped-decorator]
def times(_context: Any, a: Any, x: Any) -> Any:
    """a x."""
    return _operation(_multiply, a, x)


@emitted  # type: ignore[untyped-decorator]
def plus_product(_context: Any, y: Any, a: Any, x: Any) -> Any:
    """y + a x."""
    return _operation(lambda b, y, a, x: _combine(b, b.fadd, y, _multiply(b, a, x)), y, a, x)


@emitted  # type: ignore[untyped-decorator]
def minus_product(_context: Any, y: Any, a: Any, x: Any) -> Any:
    """y - a x."""
    return _operation(lambda b, y, a, x: _combine(b, b.fsub, y, _multiply(b, a, x)), y, a, x)


@emitted  # type: ignore[untyped-decorator]
def size(_context: Any, x: Any) -> Any:
    """|x|, or |Re x| + |Im x|."""

    def emit(builder: Any, x: list[Any]) -> list[Any]:
        sizes = [_magnitude(builder, part) for part in x]
        return [sizes[0] if len(sizes) == 1 else builder.fadd(*sizes)]

    return _operation(emit, x, real=True)


@emitted  # type: ignore[untyped-decorator]
def divide(_context: Any, x: Any, y: Any) -> Any:
    """x / y, and 0 where y is 0. The complex one scales by the larger part of y, as Smith's method does."""

    def emit(builder: Any, x: list[Any], y: list[Any]) -> list[Any]:
        zero = ir.Constant(y[0].type, [0.0] * y[0].type.count)
        if len(y) == 1:
            vanishes = builder.fcmp_ordered("==", y[0], zero)
            return [builder.select(vanishes, zero, builder.fdiv(part, y[0])) for part in x]
        re, im = (_magnitude(builder, part) for part in y)
        scale = builder.select(builder.fcmp_ordered(">", re, im), re, im)
        a, b = (builder.fdiv(part, scale) for part in y)
        norm = builder.fmul(builder.fadd(builder.fmul(a, a), builder.fmul(b, b)), scale)
        quotient = _multiply(builder, x, [builder.fdiv(a, norm), builder.fdiv(builder.fneg(b), norm)])
        vanishes = builder.fcmp_ordered("==", scale, zero)
        return [builder.select(vanishes, zero, part) for part in quotient]

    return _operation(emit, x, y)


@emitted  # type: ignore[untyped-decorator]
def larger(_context: Any, a: Any, b: Any, yes: Any, no: Any) -> Any:
    """`yes` where a > b (both real), else `no` (of the same type)."""

    def emit(builder: Any, a: list[Any], b: list[Any], yes: list[Any], no: list[Any]) -> list[Any]:
        mask = builder.fcmp_ordered(">", a[0], b[0])
        return [builder.select(mask, *pair) for pair in zip(yes, no, strict=True)]

    return _operation(emit, a, b, yes, no)


@emitted  # type: ignore[untyped-decorator]
def equal(_context: Any, a: Any, b: Any, yes: Any, no: Any) -> Any:
    """`yes` where a = b (both real), else `no` (of the same type)."""

    def emit(builder: Any, a: list[Any], b: list[Any], yes: list[Any], no: list[Any]) -> list[Any]:
        mask = builder.fcmp_ordered("==", a[0], b[0])
        return [builder.select(mask, *pair) for pair in zip(yes, no, strict=True)]

    return _operation(emit, a, b, yes, no)
