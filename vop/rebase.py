"""Change of excitation from files: networks at the ports, or a matrix that somebody computed."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

import numpy as np

from vop.basis import change_basis
from vop.errors import InputError
from vop.metadata import Reference
from vop.network import PortChange, match_array, read_touchstone, terminate
from vop.progress import Progress, silent
from vop.sarmodel import SarModel


def rebase_by_network(
    model: SarModel,
    touchstone: Path,
    *,
    match: bool = False,
    closed: Sequence[str] = (),
    accuracy: float | None = None,
    progress: Progress = silent,
) -> tuple[SarModel, list[str]]:
    """Close ports, then match those that stay driven; one of the two or both.

    Parameters
    ----------
    model : referred to forward power at the ports of ``touchstone``, in the same order.
    closed : texts "PORT=OHM", ports numbered from 1, impedances as Python complex numbers or "inf".
    accuracy : bound δ on the spectral norm of the error of S; where it leaves more than a factor of two
        in power the change is refused.

    Returns
    -------
    (model, lines) : the model for the new ports, and what was done in words.

    Raises
    ------
    InputError
        Where the model is not referred to forward power, files or ports do not fit, or S is too
        inaccurate for what is asked.
    """
    if model.metadata.reference.quantity != "forward power":
        raise InputError(
            f"networks act on waves: the model is referred to {model.metadata.reference.quantity}, not "
            "to forward power; convert it with a matrix first (--transform)"
        )
    frequency = model.metadata.domain.frequency_hz
    if frequency is None:
        raise InputError("the model does not state its frequency; the S-matrix cannot be chosen")
    if not match and not closed:
        raise InputError("nothing to do: ask for matching or name ports to close")
    network = read_touchstone(touchstone, frequency)
    names = list(model.metadata.channel_names)
    if len(network.matrix) != len(names):
        raise InputError(f"{touchstone}: {len(network.matrix)} ports, the model has {len(names)} channels")
    impedances = dict(_impedance(text, len(names)) for text in closed)
    lines: list[str] = []
    s, transform = network.matrix, np.eye(len(names), dtype=np.complex128)
    if impedances:
        change = terminate(s, network.z0_ohm, impedances, accuracy=accuracy)
        lines += [f"port {p + 1} closed with {z:g} ohm" for p, z in sorted(impedances.items())]
        lines += _interval(change)
        names = [name for port, name in enumerate(names) if port not in impedances]
        s, transform, accuracy = change.scattering, change.transform, change.accuracy
    plane = "as before"
    if match:
        matched = match_array(s, network.z0_ohm, accuracy=accuracy)
        for name, section in zip(names, matched.sections, strict=True):
            parts = ", ".join(f"{k} {v:.4g}" for k, v in section.components(frequency).items())
            where = "shunt at the array" if section.shunt_at_load else "series at the array"
            lines.append(f"channel {name}: {parts}; {where}")
        lines += _interval(matched.change)
        transform = transform @ matched.change.transform
        plane = "amplifier side of the matching networks"
    made = change_basis(
        model,
        transform,
        reference=Reference("forward power", plane=plane, z0_ohm=network.z0_ohm, other_ports="matched loads"),
        channel_names=tuple(names),
        reason=f"{'; '.join(lines)} (by calculation from {touchstone.name})",
        progress=progress,
    )
    if accuracy is None:
        warning = (
            f"ports were changed by calculation from {touchstone.name}, whose accuracy nobody stated; near "
            "|S| = 1 such results are ill-conditioned"
        )
        made = made.with_metadata(made.metadata.with_warnings(warning))
    return made, lines


def rebase_by_matrix(
    model: SarModel,
    file: Path,
    names: str | None,
    reason: str | None,
    *,
    progress: Progress = silent,
) -> tuple[SarModel, list[str]]:
    """Apply T of an NPY file, w_old = T w_new; the reference stays what it is.

    Parameters
    ----------
    names : of the new channels, with commas; by default the old ones where T is square.
    reason : in words, for the record.

    Raises
    ------
    InputError
        Where the file is no matrix that fits, or names or reason are missing.
    """
    try:
        transform = np.load(file, allow_pickle=False)
    except (OSError, ValueError, EOFError) as error:
        raise InputError(f"{file}: not readable as an NPY array: {error}") from error
    old = model.metadata.channel_names
    if getattr(transform, "ndim", 0) != 2 or transform.shape[0] != len(old):
        raise InputError(f"{file}: T should have shape ({len(old)}, m), found {np.shape(transform)}")
    if names is None and transform.shape[1] != len(old):
        raise InputError(f"{file}: T has {transform.shape[1]} columns; name the new channels (--names)")
    if not reason:
        raise InputError("a change of basis goes into the safety file: say why (--reason)")
    made = change_basis(
        model,
        transform,
        reference=model.metadata.reference,
        channel_names=old if names is None else tuple(n.strip() for n in names.split(",")),
        reason=reason,
        progress=progress,
    )
    return made, [f"T of {file.name}, {transform.shape[0]} × {transform.shape[1]}: {reason}"]


def _impedance(text: str, ports: int) -> tuple[int, complex]:
    port, separator, value = text.partition("=")
    try:
        number, impedance = int(port), complex(value.replace(" ", ""))
    except ValueError:
        separator = ""
    if not separator or not 1 <= number <= ports:
        raise InputError(
            f"{text!r} should be PORT=OHM with a port from 1 to {ports}, such as 3=50 or 3=10+2j"
        )
    return number - 1, impedance


def _interval(change: PortChange) -> list[str]:
    if change.factor is None:
        return []
    return [
        f"power of the waves at the array, given the accuracy of S: {change.factor.low:.4g} to "
        f"{change.factor.high:.4g} of nominal"
    ]
