"""Eight real numbers as one value inside compiled functions: LLVM's <8 x double>, which it splits for narrower CPUs.

Arrays are flat C-contiguous float64; `load` and `store` address them by element and check nothing.
Source: LLVM Language Reference, "Vector Type" and its llvm.* intrinsics; numba's extension interface.
"""

import operator
from collections.abc import Callable
from typing import Any

from llvmlite import ir
from numba import types
from numba.core import cgutils
from numba.core.datamodel import models
from numba.core.typing.templates import ConcreteTemplate, infer_global, signature
from numba.extending import intrinsic as _typed_intrinsic
from numba.extending import lower_builtin, lower_cast, register_model

LANES = 8
intrinsic: Any = _typed_intrinsic
"""Its type would demand the typing context of every call."""
_F64 = ir.DoubleType()
_VECTOR = ir.VectorType(_F64, LANES)
_MASK = ir.VectorType(ir.IntType(1), LANES)
_INDICES = ir.VectorType(ir.IntType(64), LANES)
_ALIGN = 8


class _Vector(types.Type):
    """Eight float64."""


class _Mask(types.Type):
    """Eight truth values."""


vector = _Vector("float64x8")
mask = _Mask("boolx8")


@register_model(_Vector)
class _VectorModel(models.PrimitiveModel):
    def __init__(self, dmm: Any, fe_type: Any) -> None:
        super().__init__(dmm, fe_type, _VECTOR)


@register_model(_Mask)
class _MaskModel(models.PrimitiveModel):
    def __init__(self, dmm: Any, fe_type: Any) -> None:
        super().__init__(dmm, fe_type, _MASK)


def _splat(builder: Any, value: Any) -> Any:
    """The scalar in every lane."""
    one = builder.insert_element(ir.Constant(_VECTOR, ir.Undefined), value, ir.Constant(ir.IntType(32), 0))
    lanes = ir.Constant(ir.VectorType(ir.IntType(32), LANES), [0] * LANES)
    return builder.shuffle_vector(one, ir.Constant(_VECTOR, ir.Undefined), lanes)


@lower_cast(types.Float, vector)
def _float_to_vector(context: Any, builder: Any, source: Any, target: Any, value: Any) -> Any:
    return _splat(builder, context.cast(builder, value, source, types.float64))


# ---- operators ---------------------------------------------------------------------------------------------------


def _register_operator(op: Any, result: types.Type, operand: types.Type, emit: Callable[[Any, Any, Any], Any]) -> None:
    """`op` of two vectors, or of a vector and a float; masks know no floats."""
    pairs = [(operand, operand)]
    if operand is vector:
        pairs += [(vector, types.float64), (types.float64, vector)]
    template = type(
        f"_{op.__name__}_{operand}", (ConcreteTemplate,), {"key": op, "cases": [signature(result, *p) for p in pairs]}
    )
    infer_global(op)(template)

    def lower(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        both = [context.cast(builder, value, kind, operand) for value, kind in zip(args, sig.args, strict=True)]
        return emit(builder, *both)

    for pair in pairs:
        lower_builtin(op, *pair)(lower)


def _compare(sign: str) -> Callable[[Any, Any, Any], Any]:
    return lambda b, x, y: b.fcmp_ordered(sign, x, y)


for _op, _emit in {
    operator.add: lambda b, x, y: b.fadd(x, y),
    operator.sub: lambda b, x, y: b.fsub(x, y),
    operator.mul: lambda b, x, y: b.fmul(x, y),
    operator.truediv: lambda b, x, y: b.fdiv(x, y),
}.items():
    _register_operator(_op, vector, vector, _emit)
for _op, _sign in {operator.lt: "<", operator.le: "<=", operator.gt: ">", operator.ge: ">=", operator.eq: "=="}.items():
    _register_operator(_op, mask, vector, _compare(_sign))
for _op, _emit in {operator.and_: lambda b, x, y: b.and_(x, y), operator.or_: lambda b, x, y: b.or_(x, y)}.items():
    _register_operator(_op, mask, mask, _emit)


@infer_global(operator.neg)
class _Negative(ConcreteTemplate):
    key = operator.neg
    cases = (signature(vector, vector),)


@lower_builtin(operator.neg, vector)
def _negative(context: Any, builder: Any, sig: Any, args: Any) -> Any:
    return builder.fneg(args[0])


# ---- memory ------------------------------------------------------------------------------------------------------


def _address(context: Any, builder: Any, kind: Any, array: Any, index: Any, pointee: Any) -> Any:
    data = context.make_array(kind)(context, builder, array).data
    return builder.bitcast(builder.gep(data, [index]), pointee.as_pointer())


@intrinsic
def load(typingctx: Any, array: Any, index: Any) -> Any:
    """Eight consecutive elements array[index], ..., array[index + 7]."""

    def emit(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        array, index = args
        return builder.load(_address(context, builder, sig.args[0], array, index, _VECTOR), align=_ALIGN)

    return vector(array, types.intp), emit


@intrinsic
def store(typingctx: Any, array: Any, index: Any, value: Any) -> Any:
    """Write a vector to array[index], ..., array[index + 7]."""

    def emit(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        array, index, value = args
        builder.store(value, _address(context, builder, sig.args[0], array, index, _VECTOR), align=_ALIGN)
        return context.get_dummy_value()

    return types.void(array, types.intp, vector), emit


@intrinsic
def gather(typingctx: Any, array: Any, base: Any, offsets: Any, index: Any) -> Any:
    """array[base + offsets[index + lane]] in every lane; offsets is a flat int64 array."""

    def emit(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        source, base, offsets, index = args
        data = context.make_array(sig.args[0])(context, builder, source).data
        where = builder.load(_address(context, builder, sig.args[2], offsets, index, _INDICES), align=_ALIGN)
        start = builder.gep(data, [base])
        result = ir.Constant(_VECTOR, ir.Undefined)
        for lane in range(LANES):
            number = ir.Constant(ir.IntType(32), lane)
            element = builder.load(builder.gep(start, [builder.extract_element(where, number)]))
            result = builder.insert_element(result, element, number)
        return result

    return vector(array, types.intp, offsets, types.intp), emit


# ---- functions ---------------------------------------------------------------------------------------------------


def _function(name: str, count: int, doc: str) -> Any:
    """Intrinsic llvm.<name> of `count` vectors; floats among the arguments are spread over the lanes."""

    def emit(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        kind = ir.FunctionType(_VECTOR, [_VECTOR] * count)
        return builder.call(cgutils.get_or_insert_function(builder.module, kind, f"llvm.{name}.v{LANES}f64"), args)

    kinds = [vector] * count
    if count == 1:

        def function(typingctx: Any, x: Any) -> Any:
            return vector(*kinds), emit
    elif count == 2:

        def function(typingctx: Any, x: Any, y: Any) -> Any:  # type: ignore[misc]
            return vector(*kinds), emit
    else:

        def function(typingctx: Any, x: Any, y: Any, z: Any) -> Any:  # type: ignore[misc]
            return vector(*kinds), emit

    function.__doc__ = doc
    return intrinsic(function)


fma = _function("fmuladd", 3, "x y + z, rounded once where the CPU can.")
sqrt = _function("sqrt", 1, "Square root.")
absolute = _function("fabs", 1, "|x|.")
copysign = _function("copysign", 2, "|x| with the sign of y.")
maximum = _function("maxnum", 2, "The larger of x and y.")
minimum = _function("minnum", 2, "The smaller of x and y.")
exp = _function("exp", 1, "e^x.")
sin = _function("sin", 1, "sin x.")
cos = _function("cos", 1, "cos x.")


@intrinsic
def splat(typingctx: Any, value: Any) -> Any:
    """A float in every lane."""
    return vector(types.float64), lambda context, builder, sig, args: _splat(builder, args[0])


@intrinsic
def select(typingctx: Any, condition: Any, x: Any, y: Any) -> Any:
    """x where the mask is true, else y."""
    return vector(mask, vector, vector), lambda context, builder, sig, args: builder.select(*args)


@intrinsic
def any_lane(typingctx: Any, condition: Any) -> Any:
    """True if a lane of the mask is true."""

    def emit(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        bits = builder.bitcast(args[0], ir.IntType(LANES))
        return builder.icmp_unsigned("!=", bits, ir.Constant(ir.IntType(LANES), 0))

    return types.boolean(mask), emit


def _reduction(name: str, doc: str) -> Any:
    def emit(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        lanes = [builder.extract_element(args[0], ir.Constant(ir.IntType(32), i)) for i in range(LANES)]
        while len(lanes) > 1:
            half = len(lanes) // 2
            lanes = [_COMBINE[name](builder, lanes[i], lanes[i + half]) for i in range(half)]
        return lanes[0]

    def function(typingctx: Any, x: Any) -> Any:
        return types.float64(vector), emit

    function.__doc__ = doc
    return intrinsic(function)


_COMBINE: dict[str, Callable[[Any, Any, Any], Any]] = {
    "add": lambda b, x, y: b.fadd(x, y),
    "max": lambda b, x, y: b.select(b.fcmp_ordered(">", x, y), x, y),
    "min": lambda b, x, y: b.select(b.fcmp_ordered("<", x, y), x, y),
}
lane_sum = _reduction("add", "Sum of the lanes, in a fixed order.")
lane_max = _reduction("max", "Largest lane.")
lane_min = _reduction("min", "Smallest lane.")
