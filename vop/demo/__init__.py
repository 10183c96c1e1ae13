"""Invented arrays around invented body parts, from physics in closed form."""

from vop.demo.array import DemoArray
from vop.demo.body import Ball
from vop.demo.layered_sphere import Elements, Layer, LayeredSphere, Solution
from vop.demo.power import ArrayPower
from vop.demo.write import compute_demo, write_demo

__all__ = [
    "ArrayPower",
    "Ball",
    "DemoArray",
    "Elements",
    "Layer",
    "LayeredSphere",
    "Solution",
    "compute_demo",
    "write_demo",
]
