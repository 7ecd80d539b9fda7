"""A short way to write ONNX nodes with generated names; floor 3.

Names count up in the order of the calls, so the same calls give the same bytes.
"""

from __future__ import annotations

from typing import Any, Final

import numpy as np
import onnx
from numpy.typing import NDArray
from onnx import helper, numpy_helper

__all__ = ["IR_VERSION", "ML_OPSET", "OPSET", "Nodes", "typed"]

# What every scorer file declares: ScatterND with max and mul needs 18, the double TreeEnsemble ml 5.
OPSET: Final = 18
ML_OPSET: Final = 5
IR_VERSION: Final = 10


class Nodes:
    """Nodes and constants of one graph under construction; calling it adds a node.

    >>> g = Nodes("demo")
    >>> g("Add", "x", g.double(1.0))
    'demo_0'
    """

    def __init__(self, prefix: str) -> None:
        self.prefix = prefix
        self.nodes: list[onnx.NodeProto] = []
        self._constants: dict[tuple[bytes, str, tuple[int, ...]], onnx.TensorProto] = {}

    def __call__(
        self, op: str, *inputs: str, out: str | None = None, domain: str = "", **attributes: Any
    ) -> str:
        """Add a node with one output; returns the output's name."""
        name = out or f"{self.prefix}_{len(self.nodes)}"
        node = helper.make_node(op, list(inputs), [name], name=name, domain=domain, **attributes)
        self.nodes.append(node)
        return name

    def at_least(self, value: str, least: float) -> str:
        """Add a Clip from below; half the time of Max with a constant."""
        return self("Clip", value, self.scalar(least))

    def at_most(self, value: str, most: float) -> str:
        """Add a Clip from above."""
        return self("Clip", value, self.scalar(-float(np.finfo(float).max)), self.scalar(most))

    def split(self, value: str, parts: int, axis: int) -> list[str]:
        """Add a Split into equal parts; returns their names."""
        names = [f"{self.prefix}_{len(self.nodes)}_{i}" for i in range(parts)]
        self.nodes.append(
            helper.make_node("Split", [value], names, name=names[0], axis=axis, num_outputs=parts)
        )
        return names

    def constant(self, value: NDArray[Any]) -> str:
        """The name of a constant; equal constants share one."""
        value = np.asarray(value, order="C")
        key = (value.tobytes(), value.dtype.str, value.shape)
        if key not in self._constants:
            name = f"{self.prefix}_c{len(self._constants)}"
            self._constants[key] = numpy_helper.from_array(value, name)
        return str(self._constants[key].name)

    def double(self, value: Any) -> str:
        """The name of a double constant; a scalar has shape (1,)."""
        return self.constant(np.atleast_1d(np.asarray(value, dtype=np.float64)))

    def scalar(self, value: float) -> str:
        """The name of a double constant without dimensions, as Clip wants its bounds."""
        return self.constant(np.array(value, dtype=np.float64))

    def single(self, value: Any) -> str:
        """The name of a float32 constant; a scalar has shape (1,)."""
        return self.constant(np.atleast_1d(np.asarray(value, dtype=np.float32)))

    def whole(self, *values: int) -> str:
        """The name of an int64 constant of shape (len(values),)."""
        return self.constant(np.asarray(values, dtype=np.int64))

    @property
    def initializers(self) -> list[onnx.TensorProto]:
        """The constants, in order of first use."""
        return list(self._constants.values())


def typed(name: str, element: int, shape: list[str | int]) -> onnx.ValueInfoProto:
    """An input or output of a graph; a text in `shape` names a free dimension."""
    return helper.make_tensor_value_info(name, element, shape)
