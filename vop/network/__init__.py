"""Ports, S-matrices and references of excitation."""

from vop.network.touchstone import Scattering, read_touchstone

__all__ = ["Scattering", "read_touchstone"]
