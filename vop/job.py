"""The job file: what is to be done, in TOML, checked to the last key before anything is read."""

from __future__ import annotations

import difflib
import os
import tomllib
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from vop.errors import InputError
from vop.metadata import Domain

_DOMAIN_KEYS = ("coil", "plug", "b0_direction", "bodies", "positions", "limits_mode", "expiry")

#: Section to key to type; "options" of a reader are its own and checked by it.
_SCHEMA: dict[str, dict[str, type | tuple[type, ...]]] = {
    "input": {
        "path": str,
        "reader": str,
        "phasor": str,
        "time_sign": str,
        "reference": str,
        "options": dict,
        "power_account": str,
        "passivity_waiver": str,
    },
    "domain": {
        "coil": str,
        "plug": str,
        "b0_direction": str,
        "bodies": list,
        "positions": list,
        "limits_mode": str,
        "expiry": str,
    },
    "model": {"average_mass_kg": (int, float), "rule": str, "combine": str},
    "regions": {"file": str, "patient_mass_kg": (int, float), "exposed": str},
    "limits": {"table": str},
    "compress": {"overestimation": (int, float), "method": str},
    "export": {"formats": list},
    "output": {"folder": str},
}


@dataclass(frozen=True)
class Job:
    """One job, with paths made absolute against the job file's folder.

    ``average_mass_kg`` is None for point matrices (0 in the file).
    """

    file: Path
    text: str
    input_path: Path
    reader: str | None
    reader_options: Mapping[str, Any]
    power_account: str | None
    passivity_waiver: str | None
    domain: Mapping[str, Any]
    average_mass_kg: float | None
    model_options: Mapping[str, Any]
    regions_file: Path | None
    patient_mass_kg: float | None
    exposed_file: Path | None
    limits_table: str | Path | None
    overestimation: float
    method: str
    formats: tuple[str, ...]
    folder: Path
    extra: Mapping[str, Any] = field(default_factory=dict)

    def settle_domain(self, frequency_hz: float, b0_direction: str | None) -> Domain:
        """The domain of use, from the job and what the export states.

        Raises
        ------
        InputError
            Where the two contradict each other.
        """
        given = dict(self.domain)
        stated = given.get("b0_direction")
        if b0_direction and stated and b0_direction != stated:
            raise InputError(
                f"{self.file}: [domain] b0_direction is {stated!r}, the export states "
                f"{b0_direction!r}; correct whichever is wrong"
            )
        given["b0_direction"] = stated or b0_direction or "not stated"
        for name in ("bodies", "positions"):
            given[name] = tuple(str(v) for v in given.get(name, ()))
        return Domain(frequency_hz=frequency_hz, **given)


def load_job(path: str | os.PathLike[str]) -> Job:
    """Read and check a job file.

    Raises
    ------
    InputError
        Where it is missing, no TOML, or holds a key or a value that it should not; the text names
        the section and the key.
    """
    file = Path(path)
    try:
        text = file.read_text(encoding="utf-8")
        raw = tomllib.loads(text)
    except OSError as error:
        raise InputError(f"cannot read {file}: {error.strerror or error}") from error
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as error:
        raise InputError(f"{file}: not a TOML file: {error}") from error
    _check(file, raw)
    section: dict[str, dict[str, Any]] = {name: raw.get(name, {}) for name in _SCHEMA}
    if "path" not in section["input"]:
        raise InputError(f"{file}: [input] path is missing: the file or folder that the simulator exported")
    base = file.resolve().parent
    mass = section["model"].get("average_mass_kg", 0.010)
    if not 0 <= mass < 100:
        raise InputError(f"{file}: [model] average_mass_kg = {mass}: kilograms, 0.010 for 10 g, 0 for points")
    options = dict(section["input"].get("options", {}))
    options |= {k: section["input"][k] for k in ("phasor", "time_sign", "reference") if k in section["input"]}
    formats = tuple(section["export"].get("formats", ["hdf5"]))
    if not all(isinstance(f, str) for f in formats) or len(set(formats)) != len(formats):
        raise InputError(f"{file}: [export] formats should be a list of different names, found {formats}")
    return Job(
        file=file,
        text=text,
        input_path=base / section["input"]["path"],
        reader=section["input"].get("reader"),
        reader_options=options,
        power_account=section["input"].get("power_account"),
        passivity_waiver=section["input"].get("passivity_waiver"),
        domain={k: v for k, v in section["domain"].items() if k in _DOMAIN_KEYS},
        average_mass_kg=float(mass) or None,
        model_options={k: v for k, v in section["model"].items() if k != "average_mass_kg"},
        regions_file=base / section["regions"]["file"] if "file" in section["regions"] else None,
        patient_mass_kg=section["regions"].get("patient_mass_kg"),
        exposed_file=base / section["regions"]["exposed"] if "exposed" in section["regions"] else None,
        limits_table=_table(section["limits"].get("table"), base),
        overestimation=float(section["compress"].get("overestimation", 0.05)),
        method=section["compress"].get("method", "clustering"),
        formats=formats,
        folder=base / section["output"].get("folder", "result"),
    )


def _table(name: str | None, base: Path) -> str | Path | None:
    # A mode of the standard by its name, else a file beside the job.
    return base / name if name is not None and name.endswith(".toml") else name


def _check(file: Path, raw: Mapping[str, Any]) -> None:
    for name, body in raw.items():
        if name not in _SCHEMA:
            raise InputError(
                f"{file}: section [{name}] is not known{_nearest(name, _SCHEMA)}; known: {', '.join(_SCHEMA)}"
            )
        if not isinstance(body, dict):
            raise InputError(f"{file}: [{name}] should be a section, found {body!r}")
        for key, value in body.items():
            wanted = _SCHEMA[name].get(key)
            if wanted is None:
                raise InputError(
                    f"{file}: [{name}] {key} is not known{_nearest(key, _SCHEMA[name])}; "
                    f"known: {', '.join(_SCHEMA[name])}"
                )
            if not isinstance(value, wanted) or isinstance(value, bool):
                kind = "a number" if isinstance(wanted, tuple) else f"a {wanted.__name__}"
                raise InputError(f"{file}: [{name}] {key} should be {kind}, found {value!r}")


def _nearest(name: str, known: Mapping[str, Any]) -> str:
    close = difflib.get_close_matches(name, known, 1)
    return f" (did you mean {close[0]!r}?)" if close else ""
