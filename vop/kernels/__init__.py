"""Compiled kernels: arrays in, arrays out; no I/O, no classes."""
