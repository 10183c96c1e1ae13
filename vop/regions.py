"""Regions of the body that limits tell apart, and SAR of whole regions as matrices.

Every tissue voxel lies in the head, the trunk or an extremity. Beside that it may be *excluded*: then no
limit is asked of its own averaged SAR, while its mass and power stay in the cubes of its neighbours and
in every global matrix.
"""

from __future__ import annotations

import os
import tomllib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from enum import IntEnum
from pathlib import Path
from typing import Any

import numpy as np

from vop.averaging.samples import read_samples
from vop.errors import InputError
from vop.fields import FieldSource, Tissue
from vop.grid import RectilinearGrid
from vop.hermitian import pack, packed_entries, unpack
from vop.kernels.regions import region_powers
from vop.progress import Progress, silent

_TILE = 32


class Region(IntEnum):
    """Code of a voxel's region; 0 is background."""

    HEAD = 1
    TRUNK = 2
    EXTREMITY = 3


EXCLUDED = "excluded"
_NAMES = {r.name.lower(): r for r in Region}


@dataclass(frozen=True, eq=False)
class Regions:
    """Region by voxel.

    code : (nz, ny, nx) uint8, :class:`Region`, 0 outside tissue.
    excluded : (nz, ny, nx) bool.
    reasons : why voxels are excluded, in words.
    """

    code: np.ndarray
    excluded: np.ndarray
    reasons: tuple[str, ...] = ()

    def __post_init__(self) -> None:
        code, excluded = np.asarray(self.code), np.asarray(self.excluded)
        if code.ndim != 3 or code.shape != excluded.shape or excluded.dtype != bool:
            raise InputError(
                f"regions: code {code.dtype} {code.shape} and excluded {excluded.dtype} {excluded.shape} "
                "should be integers and bools of one shape (z, y, x)"
            )
        if code.dtype.kind not in "ui" or not np.isin(code, (0, *Region)).all():
            codes = ", ".join(f"{int(r)} {r.name.lower()}" for r in Region)
            raise InputError(f"regions: codes should be 0 (background), {codes}")
        object.__setattr__(self, "code", code.astype(np.uint8))
        excluded = excluded & (code > 0)
        object.__setattr__(self, "excluded", excluded)
        if excluded.any() and not any(r.strip() for r in self.reasons):
            raise InputError(
                f"regions: {int(excluded.sum())} voxels are excluded and no reason is given; state one"
            )

    @classmethod
    def everywhere(cls, tissue: Tissue, region: Region) -> Regions:
        """The whole body as one region."""
        code = np.where(tissue.body, region, 0).astype(np.uint8)
        return cls(code, np.zeros(code.shape, dtype=bool))

    def check_covers(self, tissue: Tissue) -> None:
        """Every tissue voxel has a region.

        Raises
        ------
        InputError
            Where the shapes differ, or names how many voxels have none and one of them.
        """
        if self.code.shape != tissue.body.shape:
            raise InputError(f"regions {self.code.shape} and tissue {tissue.body.shape} differ in shape")
        lost = tissue.body & (self.code == 0)
        if lost.any():
            at = [int(i) for i in np.argwhere(lost)[0]]
            tissues = ""
            if tissue.label is not None:
                found = np.unique(tissue.label[lost])[:8]
                tissues = f", tissue {', '.join(repr(tissue.names.get(int(i), int(i))) for i in found)}"
            raise InputError(
                f"regions: {int(lost.sum())} tissue voxels have no region, the first at [z, y, x] = {at}"
                f"{tissues}; add a rule for them or a default"
            )

    def warnings(self) -> tuple[str, ...]:
        """What must head every report: exclusions, with their reasons."""
        count = int(self.excluded.sum())
        if not count:
            return ()
        return (
            f"EXCLUDED from limits: {count} of {int((self.code > 0).sum())} tissue voxels "
            f"({'; '.join(self.reasons)}); their mass and power still count for their neighbours",
        )

    def counts(self) -> dict[str, int]:
        """Voxels by region, and excluded ones, for the record."""
        out = {r.name.lower(): int((self.code == r).sum()) for r in Region}
        return {**out, EXCLUDED: int(self.excluded.sum())}


def load_regions(path: str | os.PathLike[str], grid: RectilinearGrid, tissue: Tissue) -> Regions:
    """Regions from a TOML file of rules.

    ``default = "trunk"`` (optional) and any number of ``[[rule]]``; a later rule wins. A rule has
    ``region`` ("head", "trunk", "extremity", or "excluded", which needs a ``reason`` and leaves the region
    as it is) and selectors, which a voxel must all meet: ``tissues`` (names or label numbers), ``box_m``
    ([x0, x1, y0, y1, z0, z1], metres, of voxel centres), ``mask`` (NPY file of bools or integers
    (z, y, x), nonzero selects, beside the rules file).

    Raises
    ------
    InputError
        Where the file is missing or no TOML, a key or value is not known, a rule selects nothing, or
        tissue is left without a region.
    """
    file = Path(path)
    try:
        raw = tomllib.loads(file.read_text(encoding="utf-8"))
    except OSError as error:
        raise InputError(f"cannot read {file}: {error.strerror or error}") from error
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as error:
        raise InputError(f"{file}: not a TOML file: {error}") from error
    rules = raw.pop("rule", [])
    default = raw.pop("default", None)
    if raw or not isinstance(rules, list):
        raise InputError(f"{file}: only 'default' and [[rule]] are known, found {', '.join(raw) or rules!r}")
    if default is not None and default not in _NAMES:
        raise InputError(f"{file}: default {default!r} should be one of {', '.join(_NAMES)}")
    code = np.where(tissue.body, _NAMES.get(default, 0), 0).astype(np.uint8)
    excluded = np.zeros(code.shape, dtype=bool)
    reasons = []
    for number, rule in enumerate(rules, 1):
        where = f"{file}: rule {number}"
        region, selected = _selected(where, rule, grid, tissue, file.parent)
        if region == EXCLUDED:
            excluded |= selected
            reasons.append(str(rule["reason"]))
        else:
            code[selected] = _NAMES[region]
    regions = Regions(code, excluded, tuple(reasons))
    regions.check_covers(tissue)
    return regions


def load_exposed(path: str | os.PathLike[str], grid: RectilinearGrid) -> np.ndarray:
    """The exposed part of the body, (nz, ny, nx) bool, from an NPY file of bools or integers (z, y, x).

    Raises
    ------
    InputError
        Where the file is missing, no such array, or of another shape than the grid.
    """
    return _mask(str(path), Path(path), grid.shape)


def _selected(
    where: str, rule: Any, grid: RectilinearGrid, tissue: Tissue, folder: Path
) -> tuple[str, np.ndarray]:
    known = {"region", "reason", "tissues", "box_m", "mask"}
    if not isinstance(rule, dict) or not set(rule) <= known or "region" not in rule:
        raise InputError(f"{where}: needs 'region', may have {', '.join(sorted(known))}; found {rule!r}")
    region = rule["region"]
    if region not in (*_NAMES, EXCLUDED):
        raise InputError(f"{where}: region {region!r} should be {', '.join(_NAMES)} or {EXCLUDED}")
    if region == EXCLUDED and not (isinstance(rule.get("reason"), str) and rule["reason"].strip()):
        raise InputError(f'{where}: to exclude voxels state reason = "…"; it heads every report')
    if not known & set(rule) & {"tissues", "box_m", "mask"}:
        raise InputError(f"{where}: selects nothing; give tissues, box_m or mask")
    chosen = tissue.body.copy()
    if "tissues" in rule:
        chosen &= _of_tissues(where, rule["tissues"], tissue)
    if "box_m" in rule:
        chosen &= _in_box(where, rule["box_m"], grid)
    if "mask" in rule:
        chosen &= _mask(where, folder / str(rule["mask"]), chosen.shape)
    if not chosen.any():
        raise InputError(f"{where}: selects no tissue voxel; check names, metres and masks")
    return region, chosen


def _of_tissues(where: str, wanted: Any, tissue: Tissue) -> np.ndarray:
    if tissue.label is None:
        raise InputError(f"{where}: the export has no tissue labels; use box_m or mask")
    by_name = {name: label for label, name in tissue.names.items()}
    labels = []
    for item in wanted if isinstance(wanted, list) else [wanted]:
        if isinstance(item, str) and item in by_name:
            labels.append(by_name[item])
        elif isinstance(item, int) and not isinstance(item, bool):
            labels.append(item)
        else:
            raise InputError(f"{where}: tissue {item!r} is not known; known: {', '.join(by_name)}")
    return np.isin(tissue.label, labels)


def _in_box(where: str, box: Any, grid: RectilinearGrid) -> np.ndarray:
    if (
        not isinstance(box, list)
        or len(box) != 6
        or not all(isinstance(v, (int, float)) and not isinstance(v, bool) for v in box)
        or not all(box[a] < box[a + 1] for a in (0, 2, 4))
    ):
        raise InputError(f"{where}: box_m should be [x0, x1, y0, y1, z0, z1] in metres, ascending pairs")
    z, y, x = ((c >= box[a]) & (c <= box[a + 1]) for c, a in zip(grid.centres_m, (4, 2, 0), strict=True))
    return z[:, None, None] & y[None, :, None] & x[None, None, :]


def _mask(where: str, path: Path, shape: tuple[int, ...]) -> np.ndarray:
    try:
        mask = np.load(path, allow_pickle=False)
    except (OSError, ValueError, EOFError) as error:
        raise InputError(f"{where}: mask {path} is not readable as NPY: {error}") from error
    if not isinstance(mask, np.ndarray) or mask.shape != shape or mask.dtype.kind not in "bui":
        raise InputError(f"{where}: mask {path} should be bools or integers of shape {shape} (z, y, x)")
    return mask != 0


@dataclass(frozen=True, eq=False)
class GlobalMatrices:
    """Matrices of whole volumes, and what they were divided by.

    matrices : name to (n, n) complex128. units : name to unit. record : masses in kg, plain JSON values.
    """

    matrices: Mapping[str, np.ndarray]
    units: Mapping[str, str]
    record: Mapping[str, Any]


def global_matrices_by_region(
    source: FieldSource,
    regions: Regions | None = None,
    *,
    exposed: np.ndarray | None = None,
    patient_mass_kg: float | None = None,
    combine: str = "outer",
    absorbed: np.ndarray | None = None,
    progress: Progress = silent,
) -> GlobalMatrices:
    """SAR of the whole body, the head and the exposed part, and powers, as matrices.

    Power ∫ σ/2 conj(E_i) E_j dV of each part over its mass, in one pass over the fields, excluded voxels
    included. Names: "absorbed power"; "whole body"; "head", "trunk" and "extremity" where ``regions`` has
    them; "partial body" where ``exposed`` is given; "forward power NAME" of each channel, for
    forward-power excitations (after a change of basis it is still that of the old channel).

    Parameters
    ----------
    regions : by voxel, or None.
    exposed : (nz, ny, nx) bool, the part of the patient in the effective volume of the transmit coil
        (IEC 60601-2-33 defines it by 95 % of the absorbed power of a homogeneous filling; memory).
    patient_mass_kg : what whole-body SAR is averaged over; by default the mass of the model, which a
        body cut off by the grid makes too small and the SAR too large, never too small.
    absorbed : (n, n), the absorbed power of the whole body where it is known already; without regions
        and an exposed part no field is then read.

    Raises
    ------
    InputError
        Where shapes differ, tissue has no region, the field is not finite in tissue, or the patient is
        lighter than the model.
    """
    grid, tissue, n = source.grid, source.tissue, source.n_channels
    part = np.zeros(grid.shape, np.uint8)
    if regions is not None:
        regions.check_covers(tissue)
        part += regions.code
    if exposed is not None:
        exposed = np.asarray(exposed)
        if exposed.shape != grid.shape or exposed.dtype != bool or not (exposed & tissue.body).any():
            raise InputError(f"exposed part: should be bools {grid.shape} (z, y, x) and hold some tissue")
        part += np.uint8(4) * exposed
    if absorbed is not None and regions is None and exposed is None:
        powers = np.concatenate([pack(absorbed)[None], np.zeros((7, n * n))])
    else:
        powers = _powers_by_part(source, part, combine, progress)
    mass = tissue.density_kg_m3.astype(np.float64) * grid.volumes_m3()
    masses = np.bincount(part.ravel(), weights=mass.ravel(), minlength=8)
    total = float(masses.sum())
    patient = total if patient_mass_kg is None else float(patient_mass_kg)
    if not patient >= total * (1 - 1e-9):
        raise InputError(
            f"patient mass {patient:g} kg is less than the {total:.4g} kg of the model; give the mass of the "
            "whole patient, or leave it out"
        )
    codes = np.arange(8)
    groups = {"whole body": (codes >= 0, patient)}
    if exposed is not None:
        groups["partial body"] = (codes >= 4, float(masses[4:].sum()))
    for region in Region:
        inside = codes % 4 == region
        if masses[inside].sum() > 0:
            groups[region.name.lower()] = (inside, float(masses[inside].sum()))
    matrices = {"absorbed power": unpack(powers.sum(axis=0))}
    for name, (inside, kilograms) in groups.items():
        matrices[name] = unpack(powers[inside].sum(axis=0) / kilograms)
    units = {name: "W/kg per |w|^2" for name in groups} | {"absorbed power": "W per |w|^2"}
    if source.conventions.reference == "forward power":
        for c, name in enumerate(source.channel_names):
            one = f"forward power {name.replace('/', '_')}"
            matrices[one], units[one] = np.diag((np.arange(n) == c) + 0j), "W per |w|^2"
    record = {
        "mass_kg": {name: kilograms for name, (_, kilograms) in groups.items()},
        "model_mass_kg": total,
        "patient_mass_kg": "that of the model" if patient_mass_kg is None else patient,
    }
    if exposed is not None:
        record["exposed_over_patient_mass"] = groups["partial body"][1] / patient
    return GlobalMatrices(matrices, units, record)


def _powers_by_part(source: FieldSource, part: np.ndarray, combine: str, progress: Progress) -> np.ndarray:
    """Packed absorbed power of the cells with part = 0 … 7, (8, n²) float64."""
    grid, tissue = source.grid, source.tissue
    powers = np.zeros((8, source.n_channels**2))
    first, second, imaginary = packed_entries(source.n_channels)
    boxes = list(_boxes(grid))
    for done, box in enumerate(boxes, 1):
        if tissue.body[box].any():
            e, offsets, starts = read_samples(source, box, combine)
            weight = 0.5 * tissue.conductivity_s_m[box].astype(np.float64) * grid.volumes_m3(box)
            here = np.ascontiguousarray(part[box])
            region_powers(e, offsets, starts, weight, here, first, second, imaginary, powers)
        progress("global matrices", done, len(boxes))
    return powers


def _boxes(grid: RectilinearGrid) -> Sequence[tuple[slice, slice, slice]]:
    z, y, x = ([slice(a, min(a + _TILE, s)) for a in range(0, s, _TILE)] for s in grid.shape)
    return [(k, j, i) for k in z for j in y for i in x]
