"""Plugins: how readers and exporters are found, and the two contracts that they fulfil.

There is one door, for the built-in ones too: the entry-point groups ``vop.readers`` and
``vop.exporters``. An entry point names an object that fulfils :class:`Reader` or :class:`Exporter`.
A plugin that fails to load is reported and skipped.
"""

from __future__ import annotations

import difflib
import inspect
import os
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from functools import cache
from importlib.metadata import entry_points
from pathlib import Path
from typing import TYPE_CHECKING, Any, Protocol, runtime_checkable

from vop.errors import InputError, PluginError

if TYPE_CHECKING:
    import numpy as np

    from vop.fields import FieldSource
    from vop.vopset import VopSet

READERS = "vop.readers"
EXPORTERS = "vop.exporters"


@runtime_checkable
class Reader(Protocol):
    """Reads one export layout.

    description : one line for ``vop plugins``.
    """

    description: str

    def recognises(self, path: Path) -> bool:
        """Whether ``path`` (file or folder) looks like this layout; cheap, and never raises."""
        ...

    def open(self, path: Path, **options: Any) -> FieldSource:
        """Open lazily. Options are explicit keyword-only parameters, so that a typing error is one.

        Raises :class:`vop.errors.VopError` for whatever a user can mend.
        """
        ...


@runtime_checkable
class Exporter(Protocol):
    """Writes one hand-off format; what it writes must read back to the same bits.

    description : one line for ``vop plugins``; suffix : of the file name, with its dot.
    """

    description: str
    suffix: str

    def write(self, vop_set: VopSet, path: Path) -> None:
        """Write the *delivered* VOPs with units, conventions, bound and digest to ``path``."""
        ...

    def read_matrices(self, path: Path) -> np.ndarray:
        """(K, n, n) complex128 as a consumer of the file gets them; equal to ``vop_set.matrices``."""
        ...


@dataclass(frozen=True)
class Plugin:
    """One entry point: what it gave, or why it gave nothing."""

    name: str
    group: str
    package: str
    target: Any = None
    fault: str | None = None


@cache
def installed(group: str) -> tuple[Plugin, ...]:
    """All plugins of a group, sorted by name; the broken ones carry their fault.

    Two of one name are both faulty: which of them would win depends on the order of installation.
    """
    contract: type = Reader if group == READERS else Exporter
    found = []
    points = sorted(entry_points(group=group), key=lambda p: (p.name, p.value))
    names = [point.name for point in points]
    for point in points:
        package = point.dist.name if point.dist is not None else "unknown package"
        target, fault = None, None
        if names.count(point.name) > 1:
            fault = f"the name {point.name!r} is claimed by more than one package"
        else:
            try:
                target = point.load()
            except Exception as error:  # a third party's module may fail in any way
                fault = f"{type(error).__name__}: {str(error).splitlines()[0] if str(error) else ''}"
            else:
                if not isinstance(target, contract):
                    target, fault = None, f"{point.value} does not fulfil {contract.__name__}"
        found.append(Plugin(point.name, group, package, target, fault))
    return tuple(found)


def names(group: str) -> list[str]:
    """Names of the working plugins of a group."""
    return [p.name for p in installed(group) if p.fault is None]


def find(group: str, name: str) -> Any:
    """The plugin of that name.

    Raises
    ------
    PluginError
        Where there is none, or it is broken; the text lists what is installed.
    """
    kind = "reader" if group == READERS else "exporter"
    for plugin in installed(group):
        if plugin.name == name:
            if plugin.fault is not None:
                raise PluginError(f"{kind} {name!r} of {plugin.package} does not load: {plugin.fault}")
            return plugin.target
    raise PluginError(
        f"no {kind} is called {name!r}{_nearest(name, names(group))}; "
        f"installed: {', '.join(names(group)) or 'none'}"
    )


def open_fields(path: str | os.PathLike[str], reader: str | None = None, **options: Any) -> FieldSource:
    """Open an export with the reader that recognises it, or the one that is named.

    Parameters
    ----------
    path : file or folder.
    reader : name of a reader plugin (``vop plugins`` lists them), or None to let them look.
    options : of that reader. Peak/rms, time sign and excitation reference have no defaults: where
        the export does not state them, pass ``phasor`` ("peak" or "rms"), ``time_sign`` ("+" for
        e^{+jωt} or "-") and ``reference`` (a key of :data:`vop.metadata.REFERENCES`).

    Raises
    ------
    InputError, PluginError, ConventionError
        Where nothing is there, no or several readers recognise it, an option is unknown, or a
        convention is stated by nobody.
    """
    path = Path(path)
    if not path.exists():
        raise InputError(f"{path}: no such file or folder")
    if reader is None:
        hits = [p.name for p in installed(READERS) if p.target is not None and p.target.recognises(path)]
        if len(hits) != 1:
            raise PluginError(
                f"{path}: {'several readers recognise' if hits else 'no reader recognises'} this"
                f"{': ' + ', '.join(hits) if hits else ''}; name one with --reader "
                f"(installed: {', '.join(names(READERS)) or 'none'}{_broken()})"
            )
        reader = hits[0]
    target = find(READERS, reader)
    check_options(f"reader {reader!r}", target.open, options)
    source: FieldSource = target.open(path, **options)
    return source


def reader_options(target: Reader) -> Mapping[str, inspect.Parameter]:
    """The explicit keyword-only options of a reader."""
    parameters = inspect.signature(target.open).parameters
    return {k: p for k, p in parameters.items() if p.kind is inspect.Parameter.KEYWORD_ONLY}


def check_options(what: str, function: Callable[..., Any], options: Mapping[str, Any]) -> None:
    """Raise PluginError for an option that ``function`` does not take by keyword."""
    known = [
        k
        for k, p in inspect.signature(function).parameters.items()
        if p.kind is inspect.Parameter.KEYWORD_ONLY
    ]
    for name in options:
        if name not in known:
            raise PluginError(
                f"{what} has no option {name!r}{_nearest(name, known)}; "
                f"it takes: {', '.join(known) or 'none'}"
            )


def _nearest(name: str, known: list[str]) -> str:
    close = difflib.get_close_matches(name, known, 1)
    return f" (did you mean {close[0]!r}?)" if close else ""


def _broken() -> str:
    broken = [p.name for p in installed(READERS) if p.fault is not None]
    return f"; broken: {', '.join(broken)}" if broken else ""
