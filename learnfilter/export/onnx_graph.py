"""Build graphs in the open format ONNX node by node, with arithmetic that reads like NumPy's.

What is written is what runs: no program is traced, no pass rewrites it.  Constants are shared by content.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from typing import Any

import numpy as np
import onnx
from numpy.typing import ArrayLike, DTypeLike, NDArray
from onnx import TensorProto, helper, numpy_helper

OPSET, IR_VERSION = 28, 14  # the newest that onnx 1.23 and onnxruntime 1.32 both know
Size = int | str  # of an axis: fixed, or the name of one that is known when the graph runs
F32, F64, I64, BOOL = np.float32, np.float64, np.int64, np.bool_


class Value:
    """A tensor of a graph.  Arithmetic adds nodes; numbers beside a value take its kind.

    Attributes:
        graph: where it is computed.
        name: there.
        dtype: kind of number.
    """

    # NumPy scalars on the left hand leave arithmetic to this class
    __array_ufunc__ = None

    def __init__(self, graph: Graph, name: str, dtype: DTypeLike):
        self.graph, self.name, self.dtype = graph, name, np.dtype(dtype)

    def op(self, kind: str, *others: Any, dtype: DTypeLike | None = None, **attributes: Any) -> Value:
        """What one node makes of this value and others; of this value's kind unless `dtype` says so."""
        operands = [self.graph.value(other, self.dtype) for other in others]
        return self.graph.node(kind, [self, *operands], self.dtype if dtype is None else dtype, **attributes)

    def __add__(self, other: Any) -> Value:
        return self.op("Add", other)

    def __sub__(self, other: Any) -> Value:
        return self.op("Sub", other)

    def __mul__(self, other: Any) -> Value:
        return self.op("Mul", other)

    def __truediv__(self, other: Any) -> Value:
        return self.op("Div", other)

    def __mod__(self, other: Any) -> Value:
        """The remainder that has the divisor's sign, as Python's."""
        return self.op("Mod", other)

    def __matmul__(self, other: Any) -> Value:
        return self.op("MatMul", other)

    def __radd__(self, other: Any) -> Value:
        return self + other

    def __rmul__(self, other: Any) -> Value:
        return self * other

    def __rsub__(self, other: Any) -> Value:
        return self.graph.value(other, self.dtype) - self

    def __rtruediv__(self, other: Any) -> Value:
        return self.graph.value(other, self.dtype) / self

    def __and__(self, other: Any) -> Value:
        return self.op("And", other)

    def __or__(self, other: Any) -> Value:
        return self.op("Or", other)

    def __invert__(self) -> Value:
        return self.op("Not")

    def __gt__(self, other: Any) -> Value:
        return self.op("Greater", other, dtype=BOOL)

    def __ge__(self, other: Any) -> Value:
        return self.op("GreaterOrEqual", other, dtype=BOOL)

    def __lt__(self, other: Any) -> Value:
        return self.op("Less", other, dtype=BOOL)

    def __le__(self, other: Any) -> Value:
        return self.op("LessOrEqual", other, dtype=BOOL)

    def equals(self, other: Any) -> Value:
        return self.op("Equal", other, dtype=BOOL)

    def at_least(self, other: Any) -> Value:
        return self.op("Max", other)

    def at_most(self, other: Any) -> Value:
        return self.op("Min", other)

    def exp(self) -> Value:
        return self.op("Exp")

    def log(self) -> Value:
        return self.op("Log")

    def sqrt(self) -> Value:
        return self.op("Sqrt")

    def absolute(self) -> Value:
        return self.op("Abs")

    def rounded(self) -> Value:
        """To the nearest whole number, halves to even."""
        return self.op("Round")

    def is_nan(self) -> Value:
        return self.op("IsNaN", dtype=BOOL)

    def cast(self, dtype: DTypeLike) -> Value:
        return self.op("Cast", dtype=dtype, to=helper.np_dtype_to_tensor_dtype(np.dtype(dtype)))

    def where(self, then: Any, other: Any) -> Value:
        """`then` where this is true, `other` elsewhere; one of them at least a value."""
        dtype = then.dtype if isinstance(then, Value) else other.dtype
        chosen = [self.graph.value(given, dtype) for given in (then, other)]
        return self.op("Where", *chosen, dtype=dtype)

    def sum(self, *axes: int, keep: bool = False) -> Value:
        """Over the axes, or over all."""
        return self._reduced("ReduceSum", axes, keep)

    def mean(self, *axes: int, keep: bool = False) -> Value:
        return self._reduced("ReduceMean", axes, keep)

    def max(self, *axes: int, keep: bool = False) -> Value:
        return self._reduced("ReduceMax", axes, keep)

    def _reduced(self, kind: str, axes: Sequence[int], keep: bool) -> Value:
        over = [np.array(axes, I64)] if axes else []
        return self.op(kind, *over, keepdims=int(keep))

    def gather(self, index: Any, axis: int = 0) -> Value:
        """Entries along an axis; negative indices count from its end."""
        return self.op("Gather", self.graph.value(index, I64), axis=axis)

    def shaped(self, *sizes: int) -> Value:
        """The same numbers with other axes; -1 once for what is left, 0 for the size it has."""
        return self.op("Reshape", np.array(sizes, I64))

    def spread(self, *axes: int) -> Value:
        """With axes of one entry at these places of the result."""
        return self.op("Unsqueeze", np.array(axes, I64))

    def moved(self, *axes: int) -> Value:
        """Transposed: axis i of the result is axis `axes[i]`."""
        return self.op("Transpose", perm=list(axes))

    def padded(self, before: Sequence[int], after: Sequence[int], filling: ArrayLike) -> Value:
        """With entries of `filling` around it, so many before and after on each axis."""
        return self.op("Pad", np.array([*before, *after], I64), filling, mode="constant")

    def size(self, axis: int) -> Value:
        """Entries of an axis, a whole number."""
        return self.op("Shape", dtype=I64).gather(axis)


class Graph:
    """A graph under construction."""

    def __init__(self) -> None:
        self._nodes: list[onnx.NodeProto] = []
        self._inputs: list[onnx.ValueInfoProto] = []
        self._constants: dict[tuple, onnx.TensorProto] = {}
        self._names = 0

    def input(self, name: str, dtype: DTypeLike, *sizes: Size) -> Value:
        """A tensor that the caller hands in."""
        value = Value(self, name, dtype)
        self._inputs.append(_described(value, sizes))
        return value

    def value(self, given: Any, dtype: DTypeLike) -> Value:
        """A value as it is; arrays as they are; plain numbers as constants of a kind."""
        if isinstance(given, Value):
            return given
        return self.constant(given if isinstance(given, np.ndarray) else np.asarray(given, dtype))

    def constant(self, given: NDArray[Any]) -> Value:
        """A tensor that is part of the graph, once however often it is asked for."""
        array = np.ascontiguousarray(given).reshape(given.shape)  # what is contiguous has one axis at least
        key = (array.dtype, array.shape, array.tobytes())
        if key not in self._constants:
            self._constants[key] = numpy_helper.from_array(array, f"c{len(self._constants)}")
        return Value(self, self._constants[key].name, array.dtype)

    def node(self, kind: str, operands: Sequence[Value], dtype: DTypeLike, **attributes: Any) -> Value:
        """The one output of a new node."""
        out = self._fresh(dtype)
        names = [operand.name for operand in operands]
        self._nodes.append(helper.make_node(kind, names, [out.name], **attributes))
        return out

    def joined(self, values: Sequence[Value], axis: int) -> Value:
        """Values one after the other along an axis."""
        return self.node("Concat", values, values[0].dtype, axis=axis)

    def counted(self, count: Value | int) -> Value:
        """0, 1 ... count - 1."""
        bounds = [self.value(bound, I64) for bound in (0, count, 1)]
        return self.node("Range", bounds, I64)

    def filled(self, number: ArrayLike, dtype: DTypeLike, *sizes: Value | int) -> Value:
        """A tensor of one number."""
        shape = self.joined([self.value(size, I64).shaped(1) for size in sizes], 0)
        return self.value(number, dtype).op("Expand", shape)

    def repeated(
        self, count: Value, body: Callable[[Value, Value], Value], state: Value, *sizes: Size
    ) -> Value:
        """What a state of fixed shape becomes when `body(i, state)` replaces it for i = 0 ... count - 1."""
        inside = self._fresh(state.dtype)
        return self._loop(count, lambda turn: body(turn, inside), sizes, [(state, inside)])

    def collected(self, count: Value, body: Callable[[Value], Value], *sizes: Size) -> Value:
        """[count ...] what `body(i)`, always of these sizes, gives for i = 0 ... count - 1."""
        return self._loop(count, body, sizes, [])

    def _loop(
        self,
        count: Value,
        body: Callable[[Value], Value],
        sizes: Sequence[Size],
        states: Sequence[tuple[Value, Value]],
    ) -> Value:
        """A loop that carries states (before it, and inside) or, without one, collects what it computes."""
        outside, self._nodes = self._nodes, []
        turn, go_on = self._fresh(I64), self._fresh(BOOL)
        result, stay = body(turn), go_on.op("Identity")
        given = [_described(turn, ()), _described(go_on, ()), *(_described(own, sizes) for _, own in states)]
        made = [_described(stay, ()), _described(result, sizes)]
        loop = helper.make_graph(self._nodes, "body", given, made)
        self._nodes = outside
        operands = [count, self.constant(np.array(True)), *(before for before, _ in states)]
        return self.node("Loop", operands, result.dtype, body=loop)

    def model(self, outputs: Mapping[str, tuple[Value, Sequence[Size]]], facts: Mapping[str, str]) -> bytes:
        """The file's bytes, held to the format and to the shapes that follow from it.

        Args:
            outputs: name -> value and its axes.
            facts: the file's metadata.
        """
        described = []
        for name, (value, sizes) in outputs.items():
            self._nodes.append(helper.make_node("Identity", [value.name], [name]))
            described.append(_described(Value(self, name, value.dtype), sizes))
        graph = helper.make_graph(
            self._nodes, "learnfilter", self._inputs, described, list(self._constants.values())
        )
        opsets = [helper.make_opsetid("", OPSET)]
        model = helper.make_model(graph, opset_imports=opsets, ir_version=IR_VERSION)
        helper.set_model_props(model, dict(facts))
        onnx.checker.check_model(model, full_check=True)
        return model.SerializeToString(deterministic=True)

    def _fresh(self, dtype: DTypeLike) -> Value:
        self._names += 1
        return Value(self, f"v{self._names}", dtype)


def _described(value: Value, sizes: Sequence[Size]) -> onnx.ValueInfoProto:
    kind: TensorProto.DataType = helper.np_dtype_to_tensor_dtype(value.dtype)
    return helper.make_tensor_value_info(value.name, kind, list(sizes))
