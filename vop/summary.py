"""Plain text about models, sets and jobs: what the commands print and what lies in the job folder."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from pathlib import Path
from typing import Any

import h5py
import numpy as np

from vop import __version__
from vop.fields import FieldSource
from vop.job import Job
from vop.sarmodel import FORMAT as MODEL_FORMAT
from vop.sarmodel import SarModel
from vop.storage import file_digest
from vop.vopset import FORMAT as SET_FORMAT
from vop.vopset import VopSet

CAUTION = (
    "CAUTION  This is a computation, not a licence. Simulation error, differences between model and",
    "patient, and calibration of the transmit chain are not covered by it. Results need review by",
    "qualified people; local rules and licensed practice decide.",
)


def source_lines(source: FieldSource) -> list[str]:
    """What an export holds and how it is read."""
    from vop.checks import tissue_masses_kg

    grid, conventions = source.grid, source.conventions
    z, y, x = grid.edges_m
    kind = "uniform" if grid.is_uniform() else "graded"
    body = int(source.tissue.body.sum())
    lines = [
        f"grid        {grid.shape[2]} × {grid.shape[1]} × {grid.shape[0]} cells (x, y, z), {kind}; "
        f"x {x[0]:g} … {x[-1]:g} m, y {y[0]:g} … {y[-1]:g} m, z {z[0]:g} … {z[-1]:g} m",
        f"fields      {source.n_channels} channels ({', '.join(source.channel_names)}), "
        f"{source.centring}-centred, {source.frequency_hz / 1e6:.6g} MHz",
    ]
    for name in ("phasor", "time_sign", "reference"):
        by = conventions.stated_by.get(name, "caller")
        lines.append(f"{name:<12}{getattr(conventions, name)} (stated by {by})")
    lines.append(f"body        {body} voxels of {source.tissue.body.size}")
    for name, mass in tissue_masses_kg(source).items():
        lines.append(f"  {name:<18} {1000 * mass:10.2f} g")
    if source.scattering is not None:
        lines.append(
            f"S-matrix    {source.n_channels} ports, {source.z0_ohm:g} Ω, "
            f"|S11| = {abs(source.scattering[0, 0]):.4f}"
        )
    lines += [f"note        {note}" for note in source.notes]
    return lines


def inspect_source(source: FieldSource) -> list[str]:
    """:func:`source_lines`, and the power checks, without refusing what they find."""
    from vop.build import absorbed_power
    from vop.checks import check_power

    checks = check_power(
        absorbed_power(source), source.conventions.reference, source.scattering, waiver="inspection only"
    )
    return [*source_lines(source), "power", *_indent(checks.lines), *_warnings(checks.warnings)]


def inspect_file(path: Path) -> list[str] | None:
    """What a model or set file of ours holds; None where it is neither."""
    try:
        with h5py.File(path, "r") as handle:
            kind = handle.attrs.get("format")
    except OSError:
        return None
    if kind == MODEL_FORMAT:
        return model_lines(SarModel.load(path))
    if kind == SET_FORMAT:
        return set_lines(VopSet.load(path))
    return None


def model_lines(model: SarModel) -> list[str]:
    """What a model holds."""
    meta = model.metadata
    lines = [
        f"model       {len(model)} local matrices, {model.n_channels} channels, "
        f"{meta.matrix_unit}, w in {meta.reference.unit} ({meta.reference.quantity})"
    ]
    if model.cubes is not None:
        mass = model.cubes.average_mass_kg
        what = "points, no averaging" if mass is None else f"{1000 * mass:g} g"
        lines.append(f"averaging   {what}, rule {model.cubes.rule}")
        lines += [f"  {name:<34} {count:>9}" for name, count in model.cubes.counts().items()]
        lines += [f"  note: {note}" for note in model.cubes.notes]
    own = [name for name in model.global_matrices if name.startswith("forward power ")]
    for name in sorted(set(model.global_matrices) - set(own)):
        largest = float(np.linalg.eigvalsh(model.global_matrices[name])[-1])
        unit = model.global_units.get(name, "not stated")
        lines.append(f"global      {name}: largest eigenvalue {largest:.6g}, unit {unit}")
    if own:
        lines.append(f"global      forward power of each of {len(own)} channels")
    lines.append(f"digest      {model.digest()}")
    return [*lines, *_warnings(meta.warnings)]


def set_lines(vop_set: VopSet) -> list[str]:
    """What a set holds."""
    unit = vop_set.metadata.matrix_unit
    return [
        f"set         {len(vop_set)} VOPs, {vop_set.n_channels} channels, method {vop_set.method}",
        f"bound       ε = {vop_set.overestimation:g}: overestimation at most "
        f"{vop_set.overestimation * vop_set.worst_case:.6g} {unit} along S",
        f"worst case  {vop_set.worst_case:.8g} {unit}",
        f"digest      {vop_set.digest()}",
        *_warnings(vop_set.metadata.warnings),
    ]


def job_summary(
    job: Job,
    model: SarModel,
    vop_set: VopSet,
    proof: Mapping[str, Any],
    exports: Mapping[str, Path],
    check_lines: Iterable[str],
) -> str:
    """The text of summary.txt: open warnings first, then what was read, made, proved, handed off."""
    details = model.metadata.details
    domain = model.metadata.domain
    read = details["source"]
    stated = read["conventions"]
    lines = [
        f"vop {__version__}: summary of {job.file.name}",
        "",
        *CAUTION,
        "",
        *(_warnings(vop_set.metadata.warnings) or ["no open warnings"]),
        "",
        "READ",
        f"  path        {job.input_path.name}",
        *(
            f"  {name:<12}{stated[name]} (stated by {stated['stated_by'].get(name, 'caller')})"
            for name in ("phasor", "time_sign", "reference")
        ),
        *(f"  file        {name}  SHA-256 {value}" for name, value in sorted(read["files"].items())),
        f"  domain      coil {domain.coil}; plug {domain.plug}; B0 {domain.b0_direction}; "
        f"bodies {_listed(domain.bodies)}; positions {_listed(domain.positions)}; "
        f"limits {domain.limits_mode}; expiry {domain.expiry}",
        "",
        "POWER",
        *_indent(check_lines),
        "",
        "MODEL",
        *_indent(line for line in model_lines(model.with_metadata(_without_warnings(model.metadata)))),
        "",
        "SET",
        *_indent(set_lines(vop_set)[:4]),
        "",
        "PROOF",
        *_indent(proof["summary"]),
        "",
        "HAND-OFF",
        *(
            f"  {name:<8} {path.name}  {path.stat().st_size} bytes  SHA-256 {file_digest(path)}"
            for name, path in exports.items()
        ),
        *([] if exports else ["  none: the set is not proved"]),
    ]
    return "\n".join(lines) + "\n"


def _listed(names: Iterable[str]) -> str:
    return ", ".join(names) or "not stated"


def _without_warnings(metadata: Any) -> Any:
    from dataclasses import replace

    return replace(metadata, warnings=())


def _warnings(warnings: Iterable[str]) -> list[str]:
    return [f"WARNING  {text}" for text in warnings]


def _indent(lines: Iterable[str]) -> list[str]:
    return [f"  {line}" for line in lines]


__all__ = [
    "CAUTION",
    "inspect_file",
    "inspect_source",
    "job_summary",
    "model_lines",
    "set_lines",
    "source_lines",
]
