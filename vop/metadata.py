"""What a number means: references, domain and provenance, carried by every file.

All classes are plain frozen data that convert to and from JSON-like dictionaries.
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping
from dataclasses import asdict, dataclass, field, fields, replace
from typing import Any

from vop.errors import ConventionError, InputError

#: What |w_c|² or w_c is, by reference, with the unit of w_c.
REFERENCES = {
    "forward power": "sqrt(W)",
    "accepted power": "sqrt(W)",
    "port voltage": "V",
    "port current": "A",
}
PHASORS = ("peak", "rms")
#: What wᴴQw is: W/kg, or a fraction of the limit that applies (1 is the limit).
LOCAL_SAR, FRACTION_OF_LIMIT = "local SAR", "fraction of limit"
MEASURES = (LOCAL_SAR, FRACTION_OF_LIMIT)
TIME_SIGNS = ("+", "-")

#: The convention of everything after reading; written into every file.
PHASE_CONVENTION = "SAR = w^H Q w; Q_ij = sigma/(2 rho) conj(E_i) E_j; time factor exp(+j omega t)"


@dataclass(frozen=True)
class Conventions:
    """How an export wrote its phasors, and who said so.

    phasor: "peak" or "rms"; time_sign: "+" for e^{+jωt}, "-" for e^{−jωt}; reference: a key of
    :data:`REFERENCES`. ``stated_by`` names, for each of the three, "file", "option" or "recipe".
    None of the three has a default: each changes SAR by a factor, or conjugates Q.

    Raises
    ------
    ConventionError
        Where one is missing or is not a known value.
    """

    phasor: str
    time_sign: str
    reference: str
    stated_by: Mapping[str, str] = field(default_factory=dict)

    def __post_init__(self) -> None:
        for name, known in (
            ("phasor", PHASORS),
            ("time_sign", TIME_SIGNS),
            ("reference", tuple(REFERENCES)),
        ):
            value = getattr(self, name)
            if value not in known:
                choices = ", ".join(repr(k) for k in known)
                raise ConventionError(f"{name} {value!r} is not known; choose one of {choices}")

    @classmethod
    def settle(
        cls, where: str, stated_in_file: Mapping[str, str | None], options: Mapping[str, str | None]
    ) -> Conventions:
        """Combine what a file states with what the user states; refuse silence and contradiction.

        Parameters
        ----------
        where : the export, for the error text.
        stated_in_file, options : values for "phasor", "time_sign", "reference", or None.
        """
        values: dict[str, str] = {}
        stated_by: dict[str, str] = {}
        known = {"phasor": PHASORS, "time_sign": TIME_SIGNS, "reference": tuple(REFERENCES)}
        missing = []
        for name, choices in known.items():
            in_file, option = stated_in_file.get(name), options.get(name)
            if in_file is not None and option is not None and in_file != option:
                raise ConventionError(
                    f"{where}: the file states {name} = {in_file!r}, the option says {option!r}; "
                    "correct whichever is wrong"
                )
            value = option if in_file is None else in_file
            if value is None:
                missing.append(f"{name} ({' | '.join(choices)})")
                continue
            values[name] = value
            stated_by[name] = "option" if in_file is None else "file"
        if missing:
            raise ConventionError(
                f"{where}: the export does not state {', '.join(missing)}; these change SAR by a "
                "factor and are never assumed: state them as options or under [input] in the job file"
            )
        return cls(**values, stated_by=stated_by)


@dataclass(frozen=True)
class Reference:
    """The excitation that w = 1 stands for: a quantity, a plane, an impedance, the other ports.

    phasor : "peak" or "rms" where w are voltages or currents, a factor of two in SAR; powers have none.
    """

    quantity: str
    plane: str = "not stated"
    z0_ohm: float | None = None
    other_ports: str = "not stated"
    phasor: str = "not stated"

    def __post_init__(self) -> None:
        if self.quantity not in REFERENCES:
            choices = ", ".join(repr(k) for k in REFERENCES)
            raise ConventionError(f"reference {self.quantity!r} is not known; choose one of {choices}")
        if self.phasor not in (*PHASORS, "not stated"):
            raise ConventionError(f"phasor {self.phasor!r} of the excitation: state 'peak' or 'rms'")

    @property
    def unit(self) -> str:
        """Unit of one entry of w."""
        return REFERENCES[self.quantity]

    @property
    def sar_unit(self) -> str:
        """Unit of Q: W/kg per unit of |w|²."""
        return {"sqrt(W)": "W/kg per W", "V": "W/kg per V^2", "A": "W/kg per A^2"}[self.unit]


@dataclass(frozen=True)
class Domain:
    """Where a set may be used; a consumer refuses outside it. "not stated" is itself a warning."""

    coil: str = "not stated"
    plug: str = "not stated"
    frequency_hz: float | None = None
    b0_direction: str = "not stated"
    bodies: tuple[str, ...] = ()
    positions: tuple[str, ...] = ()
    limits_mode: str = "not stated"
    expiry: str = "not stated"

    def __post_init__(self) -> None:
        if self.b0_direction not in ("+z", "-z", "not stated"):
            raise ConventionError(f"b0_direction {self.b0_direction!r}: state '+z' or '-z'")

    def not_stated(self) -> list[str]:
        """Names of the entries that nobody stated."""
        return [f.name for f in fields(self) if getattr(self, f.name) in ("not stated", None, ())]


@dataclass(frozen=True)
class Metadata:
    """Everything beside the numbers of a model or a set.

    ``details`` holds what the step that made the file wants to record (averaging rule, counts,
    compression settings, digests of inputs); plain JSON values only. ``measure`` is one of
    :data:`MEASURES`.
    """

    reference: Reference
    channel_names: tuple[str, ...]
    domain: Domain = field(default_factory=Domain)
    warnings: tuple[str, ...] = ()
    details: Mapping[str, Any] = field(default_factory=dict)
    measure: str = LOCAL_SAR

    def __post_init__(self) -> None:
        if self.measure not in MEASURES:
            raise InputError(f"measure {self.measure!r} is not known; known: {', '.join(MEASURES)}")

    @property
    def matrix_unit(self) -> str:
        """Unit of the matrices, per unit of |w|²."""
        unit = self.reference.sar_unit
        return unit if self.measure == LOCAL_SAR else unit.replace("W/kg", self.measure)

    def with_details(self, **more: Any) -> Metadata:
        """A copy whose ``details`` gained ``more``."""
        return replace(self, details={**self.details, **more})

    def with_warnings(self, *more: str) -> Metadata:
        """A copy with further warnings, each kept once."""
        return replace(self, warnings=tuple(dict.fromkeys((*self.warnings, *more))))

    def to_json(self) -> str:
        """Canonical JSON text: sorted keys, no white space, so that equal data digest equally."""
        return json.dumps(asdict(self), sort_keys=True, separators=(",", ":"), allow_nan=False)

    @classmethod
    def from_json(cls, text: str) -> Metadata:
        """Inverse of :meth:`to_json`.

        Raises
        ------
        InputError
            Where the text is not what :meth:`to_json` writes.
        """
        try:
            raw = json.loads(text)
            domain = {**raw["domain"]}
            for name in ("bodies", "positions"):
                domain[name] = tuple(domain[name])
            return cls(
                reference=Reference(**raw["reference"]),
                channel_names=tuple(str(c) for c in raw["channel_names"]),
                domain=Domain(**domain),
                warnings=tuple(str(w) for w in raw["warnings"]),
                details=dict(raw["details"]),
                measure=raw.get("measure", LOCAL_SAR),
            )
        except (ValueError, KeyError, TypeError, AttributeError) as error:
            raise InputError(f"metadata are not what this version writes: {error}") from error


def digest(*parts: bytes | str | memoryview) -> str:
    """SHA-256, hexadecimal, of the parts one after another."""
    sha = hashlib.sha256()
    for part in parts:
        sha.update(part.encode() if isinstance(part, str) else part)
    return sha.hexdigest()
