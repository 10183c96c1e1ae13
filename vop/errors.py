"""The one family of errors that the command line turns into one line and an exit code."""

from __future__ import annotations


class VopError(Exception):
    """Something a user can mend. The text names the place, the value, what was expected, and the cure."""


class InputError(VopError):
    """A file or array that cannot be what it claims: missing, truncated, NaN, indefinite, unequal."""


class ConventionError(VopError):
    """A convention that changes SAR by a factor (peak/rms, time sign, reference) was stated by nobody."""


class OutputError(VopError):
    """A result cannot be written: it exists already, or the disk is full or read-only."""


class PluginError(VopError):
    """A plugin is missing, broken, or was given an option that it does not know."""
