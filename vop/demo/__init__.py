"""An invented array around an invented body part, from physics in closed form."""

from vop.demo.array import DemoArray
from vop.demo.layered_sphere import Elements, Layer, LayeredSphere, Solution
from vop.demo.write import write_demo

__all__ = ["DemoArray", "Elements", "Layer", "LayeredSphere", "Solution", "write_demo"]
