"""Limits of SAR, and local matrices as fractions of them.

Limits of IEC 60601-2-33 in W/kg. Marks: (read) in secondary sources, never in the standard's text;
(memory) recalled. Check both against the edition that applies before relying on them.
"""

from __future__ import annotations

import os
import tomllib
from collections.abc import Mapping
from dataclasses import asdict, dataclass, field, replace
from pathlib import Path
from typing import Any

import numpy as np

from vop.cubes import CubeKind, VoxelStatus
from vop.errors import InputError
from vop.hermitian import U64, identity, round_outward, traces
from vop.kernels.regions import least_over_used
from vop.metadata import FRACTION_OF_LIMIT, LOCAL_SAR
from vop.progress import Progress, silent
from vop.regions import Region, Regions
from vop.sarmodel import CHUNK_ROWS, SarModel

_REGIONS = tuple(r.name.lower() for r in Region)
_READ, _MEMORY = "read in secondary sources", "memory"


@dataclass(frozen=True)
class Window:
    """Averaging over ``seconds`` must stay below ``factor`` times the limit."""

    seconds: float
    factor: float


@dataclass(frozen=True)
class LimitTable:
    """Limits of one operating mode, W/kg; None where a table sets none.

    local : region to limit of local SAR averaged over ``local_mass_kg`` of tissue.
    partial_body : (a, b), the limit a − b·r at r = exposed mass / patient mass.
    cooling : (from °C, W/kg per °C, floor): the whole-body limit falls above that ambient temperature.
    windows : averaging times with their factors, of the global limits and of the local ones.
    marks : row to what is known of its source.
    """

    mode: str
    source: str
    local: Mapping[str, float]
    local_mass_kg: float = 0.010
    whole_body: float | None = None
    head: float | None = None
    partial_body: tuple[float, float] | None = None
    cooling: tuple[float, float, float] | None = None
    windows: tuple[Window, ...] = (Window(360.0, 1.0),)
    marks: Mapping[str, str] = field(default_factory=dict)

    def __post_init__(self) -> None:
        if set(self.local) != set(_REGIONS):
            raise InputError(f"limits {self.mode!r}: local limits are needed for {', '.join(_REGIONS)}")
        values: dict[str, float | None] = {f"local {k}": v for k, v in self.local.items()}
        values |= {"whole body": self.whole_body, "head": self.head, "local mass": self.local_mass_kg}
        values |= {f"window of {w.seconds} s": min(w.seconds, w.factor) for w in self.windows}
        if self.partial_body is not None:
            a, b = self.partial_body
            values |= {"partial body at r = 0": a, "partial body at r = 1": a - b}
        for name, value in values.items():
            if value is not None and not (np.isfinite(value) and value > 0):
                raise InputError(f"limits {self.mode!r}: {name} is {value}; it must be positive and finite")
        if not self.windows:
            raise InputError(f"limits {self.mode!r}: at least one averaging window is needed")

    def partial_body_w_kg(self, exposed_over_patient_mass: float) -> float | None:
        """a − b·r.

        Raises
        ------
        InputError
            Where r is not within 0 < r ≤ 1.
        """
        r = float(exposed_over_patient_mass)
        if not 0 < r <= 1:
            raise InputError(f"exposed mass over patient mass is {r}; it lies between 0 and 1")
        return None if self.partial_body is None else self.partial_body[0] - self.partial_body[1] * r

    def at_ambient(self, temperature_c: float) -> LimitTable:
        """The table at an ambient temperature, °C."""
        if not np.isfinite(temperature_c):
            raise InputError(f"ambient temperature {temperature_c} °C is no number")
        if self.cooling is None or self.whole_body is None or temperature_c <= self.cooling[0]:
            return self
        start, slope, floor = self.cooling
        lowered = max(self.whole_body - slope * (temperature_c - start), floor)
        return replace(self, whole_body=lowered, mode=f"{self.mode} at {temperature_c:g} degC")

    def record(self) -> dict[str, Any]:
        """Plain JSON values."""
        return {**asdict(self), "windows": [asdict(w) for w in self.windows]}


_IEC_MARKS = {
    "whole_body": _READ,
    "partial_body": _READ,
    "head": _READ,
    "local": f"{_MEMORY}; for local transmit coils",
    "window of 360 s": _READ,
    "window of 10 s": f"{_READ}; whether it holds for the local rows: check",
    "cooling": _READ,
}
_IEC = "IEC 60601-2-33, quoted from secondary sources and memory: check against the edition that applies"
_IEC_WINDOWS = (Window(360.0, 1.0), Window(10.0, 2.0))

NORMAL = LimitTable(
    mode="normal",
    source=_IEC,
    local={"head": 10.0, "trunk": 10.0, "extremity": 20.0},
    whole_body=2.0,
    head=3.2,
    partial_body=(10.0, 8.0),
    windows=_IEC_WINDOWS,
    marks={k: v for k, v in _IEC_MARKS.items() if k != "cooling"},
)
FIRST_LEVEL = LimitTable(
    mode="first level",
    source=_IEC,
    local={"head": 20.0, "trunk": 20.0, "extremity": 40.0},
    whole_body=4.0,
    head=3.2,
    partial_body=(10.0, 6.0),
    cooling=(25.0, 0.25, 2.0),
    windows=_IEC_WINDOWS,
    marks=_IEC_MARKS,
)
BUILT_IN = {table.mode: table for table in (NORMAL, FIRST_LEVEL)}

_KEYS: dict[str, type | tuple[type, ...]] = {
    "mode": str,
    "source": str,
    "local": dict,
    "local_mass_kg": (int, float),
    "whole_body": (int, float),
    "head": (int, float),
    "partial_body": list,
    "cooling": list,
    "windows": list,
    "marks": dict,
}


def load_limits(name_or_path: str | os.PathLike[str]) -> LimitTable:
    """A mode of IEC 60601-2-33 by name ("normal", "first level"), or a table from a TOML file.

    Keys of the file are the fields of :class:`LimitTable`: ``mode``, ``source`` and ``[local]`` with head,
    trunk and extremity are needed; ``partial_body = [a, b]``, ``cooling = [from, slope, floor]``,
    ``[[windows]]`` with seconds and factor.

    Raises
    ------
    InputError
        Where there is neither, or a key or value is not known.
    """
    if isinstance(name_or_path, str) and name_or_path in BUILT_IN:
        return BUILT_IN[name_or_path]
    file = Path(name_or_path)
    if not file.is_file():
        modes = ", ".join(repr(k) for k in BUILT_IN)
        raise InputError(f"limits {str(name_or_path)!r}: neither a mode ({modes}) nor a file")
    try:
        raw = tomllib.loads(file.read_text(encoding="utf-8"))
    except OSError as error:
        raise InputError(f"cannot read {file}: {error.strerror or error}") from error
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as error:
        raise InputError(f"{file}: not a TOML file: {error}") from error
    for key, value in raw.items():
        wanted = _KEYS.get(key)
        if wanted is None:
            raise InputError(f"{file}: {key} is not known; known: {', '.join(_KEYS)}")
        if not isinstance(value, wanted) or isinstance(value, bool):
            raise InputError(f"{file}: {key} = {value!r} is not of the right kind")
    missing = [k for k in ("mode", "source", "local") if k not in raw]
    if missing:
        raise InputError(f"{file}: {', '.join(missing)} missing; a limit needs its mode and its source")
    try:
        return LimitTable(
            mode=raw["mode"],
            source=raw["source"],
            local={str(k): float(v) for k, v in raw["local"].items()},
            local_mass_kg=float(raw.get("local_mass_kg", 0.010)),
            whole_body=_number(raw, "whole_body"),
            head=_number(raw, "head"),
            partial_body=_numbers(raw, "partial_body", 2),
            cooling=_numbers(raw, "cooling", 3),
            windows=tuple(
                Window(float(w["seconds"]), float(w["factor"]))
                for w in raw.get("windows", [{"seconds": 360, "factor": 1}])
            ),
            marks={str(k): str(v) for k, v in raw.get("marks", {}).items()},
        )
    except (TypeError, ValueError, KeyError) as error:
        raise InputError(f"{file}: a value is not of the right kind: {error}") from error
    except InputError as error:
        raise InputError(f"{file}: {error}") from error


def _number(raw: Mapping[str, Any], key: str) -> float | None:
    return float(raw[key]) if key in raw else None


def _numbers(raw: Mapping[str, Any], key: str, count: int) -> Any:
    if key not in raw:
        return None
    values = tuple(float(v) for v in raw[key])
    if len(values) != count:
        raise ValueError(f"{key} should be {count} numbers")
    return values


def cube_limits(model: SarModel, regions: Regions, limits: LimitTable) -> np.ndarray:
    """Limit of each local matrix, (N,) float64, W/kg; infinite where only excluded voxels are served.

    A cube gives its value to its own voxel and, if it is a valid centred cube, to every used voxel wholly
    inside it. The smallest limit among them binds: Q/L grows as L falls, so that the other voxels of the
    cube, whose limits are larger, are bound by the same matrix.

    Raises
    ------
    InputError
        Where the model has no cubes or another averaging mass, or the regions do not fit it.
    """
    return _own_and_binding(model, regions, limits)[1]


def _own_and_binding(model: SarModel, regions: Regions, limits: LimitTable) -> tuple[np.ndarray, np.ndarray]:
    """Limit of each cube's own voxel, and the one that binds its matrix, (N,) each."""
    cubes = model.cubes
    if cubes is None:
        raise InputError("limits: the model holds bare matrices without positions, no region can be told")
    mass = cubes.average_mass_kg
    if mass is None or abs(mass - limits.local_mass_kg) > 1e-9 * limits.local_mass_kg:
        found = "point SAR" if mass is None else f"SAR averaged over {1000 * mass:g} g"
        raise InputError(
            f"limits {limits.mode!r} hold for SAR averaged over {1000 * limits.local_mass_kg:g} g, the model "
            f"has {found}"
        )
    if regions.code.shape != cubes.status.shape:
        raise InputError(
            f"limits: regions {regions.code.shape} and model {cubes.status.shape} differ in shape"
        )
    lost = (cubes.status != VoxelStatus.BACKGROUND) & (regions.code == 0)
    if lost.any():
        at = [int(i) for i in np.argwhere(lost)[0]]
        raise InputError(
            f"limits: {int(lost.sum())} tissue voxels of the model have no region, the first at "
            f"[z, y, x] = {at}"
        )
    table = np.array([np.inf, *(limits.local[name] for name in _REGIONS)])
    volume = table[regions.code]
    volume[regions.excluded] = np.inf
    own = volume.ravel()[cubes.voxel]
    centred = np.flatnonzero(cubes.kind == CubeKind.CENTRED)
    least = own[centred]
    ez, ey, ex = cubes.grid.edges_m
    least_over_used(cubes.box_m[centred], cubes.status == VoxelStatus.USED, volume, ez, ey, ex, least)
    binding = own.copy()
    binding[centred] = least
    return own, binding


def as_fraction_of_limit(
    model: SarModel, regions: Regions, limits: LimitTable, progress: Progress = silent
) -> SarModel:
    """Each matrix divided by its limit, so that one set serves unequal limits: wᴴQ'w ≤ 1 is allowed.

    Matrices that serve excluded voxels only are left out; global matrices stay in their units. The model
    says in its metadata, and first among its warnings, what its numbers are.

    Parameters
    ----------
    regions : of the model's own grid. limits : for the averaging mass of the model.

    Raises
    ------
    InputError
        As :func:`cube_limits`; where the model holds fractions already, states another mode of limits,
        or everything is excluded.
    """
    if model.metadata.measure != LOCAL_SAR:
        raise InputError(f"limits: the model holds {model.metadata.measure} already")
    domain = model.metadata.domain
    if domain.limits_mode not in ("not stated", limits.mode):
        raise InputError(
            f"limits: the model is for mode {domain.limits_mode!r}, the table for {limits.mode!r}"
        )
    own, limit = _own_and_binding(model, regions, limits)
    rows: np.ndarray = np.flatnonzero(np.isfinite(limit))
    if not rows.size:
        raise InputError("limits: every voxel is excluded; there is nothing to bound")
    packed = np.empty((len(rows), model.packed.shape[1]), np.float32)
    one = identity(model.n_channels)
    for start in range(0, len(rows), CHUNK_ROWS):
        part = rows[start : start + CHUNK_ROWS]
        quotient = np.asarray(model.packed[part], dtype=np.float64) / limit[part, None]
        # A division errs by 2⁻⁵³ of each entry, ‖·‖_F and so ‖·‖ by at most √2·2⁻⁵³ of the trace.
        quotient += 2 * U64 * traces(quotient)[:, None] * one
        packed[start : start + len(part)] = round_outward(quotient)
        progress("fractions of limits", start + len(part), len(rows))
    record = {
        "limits": limits.record(),
        "voxels": regions.counts(),
        "exclusions": list(regions.reasons),
        "matrices_by_limit": {f"{v:g} W/kg": int((limit == v).sum()) for v in np.unique(limit[rows])},
        "matrices_bound_by_a_voxel_they_serve": int((limit < own).sum()),
        "matrices_left_out": int(len(limit) - len(rows)),
    }
    heads = (
        *regions.warnings(),
        f"numbers are fractions of the local limits of mode {limits.mode!r}, not W/kg: 1 is the limit "
        f"({limits.source})",
    )
    metadata = model.metadata.with_details(fraction_of_limit=record)
    metadata = replace(
        metadata,
        measure=FRACTION_OF_LIMIT,
        domain=replace(domain, limits_mode=limits.mode),
        warnings=tuple(dict.fromkeys((*heads, *metadata.warnings))),
    )
    cubes = None if model.cubes is None else model.cubes.take(rows)
    return replace(model, packed=packed, cubes=cubes, metadata=metadata)


def global_fractions(
    matrices: Mapping[str, np.ndarray],
    limits: LimitTable,
    exposed_over_patient_mass: float | None = None,
) -> dict[str, np.ndarray]:
    """ "whole body", "head" and "partial body" divided by their limits, (n, n) complex128 each.

    Parameters
    ----------
    matrices : as of :func:`vop.regions.global_matrices_by_region`; those without a limit are left out.
    exposed_over_patient_mass : r of the partial-body limit, needed where it is asked.

    Raises
    ------
    InputError
        Where the partial body has a matrix and a limit, and r is missing or out of range.
    """
    found: dict[str, float | None] = {"whole body": limits.whole_body, "head": limits.head}
    if "partial body" in matrices and limits.partial_body is not None:
        if exposed_over_patient_mass is None:
            raise InputError(
                "limits: the partial-body limit depends on exposed mass / patient mass; state it"
            )
        found["partial body"] = limits.partial_body_w_kg(exposed_over_patient_mass)
    return {
        name: np.asarray(matrices[name], dtype=np.complex128) / limit
        for name, limit in found.items()
        if limit is not None and name in matrices
    }
