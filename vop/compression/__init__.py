"""From all local matrices to few that bound them: the methods, behind one function."""

from vop.compression.driver import METHODS, compress

__all__ = ["METHODS", "compress"]
