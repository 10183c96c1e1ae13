"""Checks on import: what the physics of a passive array demands of the fields that were read."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

import numpy as np

from vop.errors import InputError
from vop.fields import FieldSource
from vop.metadata import Metadata
from vop.sarmodel import SarModel

#: A voxel sum of a field of finite accuracy may exceed the watt by this much before it is refused.
_PASSIVITY_ROUNDING = 1e-4


@dataclass(frozen=True)
class PowerChecks:
    """Power by channel, and what does not add up.

    absorbed_eigenvalues_w : (n,) ascending, of the absorbed-power matrix, W per |w|².
    absorbed_w : (n,) absorbed power of each channel driven alone with |w| = 1.
    accepted_w : (n,) 1 − Σ_k |S_kc|², or None without an S-matrix.
    most_absorbed_beyond_accepted_w : largest eigenvalue of P − (I − SᴴS), or None; above zero the
        fields absorb more than S lets in.
    lines : the same in words, with numbers.
    warnings : what somebody must account for.
    """

    absorbed_eigenvalues_w: np.ndarray
    absorbed_w: np.ndarray
    accepted_w: np.ndarray | None
    most_absorbed_beyond_accepted_w: float | None
    lines: tuple[str, ...]
    warnings: tuple[str, ...] = field(default=())

    def record(self) -> dict[str, Any]:
        """Plain JSON values, for metadata."""
        return {
            "absorbed_eigenvalues_w": [float(v) for v in self.absorbed_eigenvalues_w],
            "absorbed_w": [float(v) for v in self.absorbed_w],
            "accepted_w": None if self.accepted_w is None else [float(v) for v in self.accepted_w],
            "most_absorbed_beyond_accepted_w": self.most_absorbed_beyond_accepted_w,
        }


def check_power(
    absorbed: np.ndarray,
    quantity: str,
    scattering: np.ndarray | None = None,
    *,
    account: str | None = None,
    waiver: str | None = None,
) -> PowerChecks:
    """Passivity, and the power balance of each channel against the S-matrix.

    For forward-power excitations a passive array cannot absorb more than it is given:
    P = ∫ σ/2 conj(E_i)E_j dV ⪯ I − SᴴS ⪯ I. The check is one-sided: SAR that is too low passes.

    Parameters
    ----------
    absorbed : (n, n) complex, P in W per |w|².
    quantity : reference of the excitation; only "forward power" and "accepted power" bound P.
    scattering : (n, n) complex S-matrix of the same ports, or None.
    account : the engineer's words on where accepted but not absorbed power goes, or None.
    waiver : the engineer's reason to accept a violation of passivity, or None.

    Raises
    ------
    InputError
        Where passivity is violated without a waiver.
    """
    absorbed = np.asarray(absorbed, dtype=np.complex128)
    values = np.linalg.eigvalsh(absorbed)
    own = absorbed.diagonal().real
    lines = [f"absorbed power, eigenvalues: {values[0]:.4g} to {values[-1]:.4g} W per |w|²"]
    warnings: list[str] = []
    if quantity not in ("forward power", "accepted power"):
        warnings.append(f"reference is {quantity}: passivity cannot be checked without the port impedances")
        return PowerChecks(values, own, None, None, tuple(lines), tuple(warnings))
    if values[-1] > 1.0 + _PASSIVITY_ROUNDING:
        text = (
            f"passivity violated: the absorbed-power matrix has an eigenvalue of {values[-1]:.4g} W per "
            "watt, a passive array cannot exceed 1; check peak/rms (a factor of 2), the unit of "
            "length or of E, and the reference of the excitation"
        )
        if waiver is None:
            raise InputError(text + ', or state passivity_waiver = "reason" under [input]')
        warnings.append(f"{text}; accepted by the engineer: {waiver}")
    else:
        lines.append(f"passivity: holds, {values[-1]:.4g} ≤ 1 W/W (necessary, far from sufficient)")
    if scattering is None or quantity != "forward power":
        warnings.append(
            "no S-matrix was read: absorbed power was not compared with accepted power, so "
            "SAR that is too low would not be noticed"
        )
        return PowerChecks(values, own, None, None, tuple(lines), tuple(warnings))
    inside = np.eye(len(own)) - scattering.conj().T @ scattering
    accepted = inside.diagonal().real
    remainder = accepted - own
    beyond = float(np.linalg.eigvalsh(absorbed - inside)[-1])
    for c in range(len(own)):
        lines.append(
            f"channel {c + 1}: accepted {accepted[c]:.4g} W/W (1 − Σ|S|²), absorbed {own[c]:.4g}, "
            f"unexplained {remainder[c]:.4g} ({100 * remainder[c] / accepted[c]:.0f} % of accepted)"
        )
    lines.append(f"reciprocity of S: |S − Sᵀ| ≤ {np.abs(scattering - scattering.T).max():.2g}")
    if beyond > 0:
        warnings.append(
            f"some excitation absorbs {beyond:.3g} W per W more than S lets in; S or the fields "
            "are inaccurate, or their references differ"
        )
    share = remainder / accepted
    worst = int(np.argmax(np.abs(share)))
    words = (
        f"accepted power that is not absorbed in tissue: {100 * share.min():.0f} to "
        f"{100 * share.max():.0f} % by channel (largest at channel {worst + 1})"
    )
    if account:
        lines.append(f"{words}; accounted for by the engineer: {account}")
    else:
        warnings.append(
            f"{words}; nobody has accounted for it (radiation, losses of the array, "
            'inaccuracy of S): state power_account = "…" under [input]'
        )
    return PowerChecks(values, own, accepted, beyond, tuple(lines), tuple(warnings))


def checked_metadata(
    model: SarModel,
    source: FieldSource,
    *,
    account: str | None = None,
    waiver: str | None = None,
) -> Metadata:
    """Metadata of a freshly built model with the outcome of :func:`check_power` in it.

    Raises
    ------
    InputError
        Where passivity is violated without a waiver.
    """
    checks = check_power(
        model.global_matrices["absorbed power"],
        model.metadata.reference.quantity,
        source.scattering,
        account=account,
        waiver=waiver,
    )
    return model.metadata.with_warnings(*checks.warnings).with_details(
        import_checks=checks.record(), import_check_lines=list(checks.lines)
    )


def tissue_masses_kg(source: FieldSource) -> dict[str, float]:
    """Mass by tissue name, kg; without labels the whole body under "body"."""
    tissue = source.tissue
    mass = source.grid.volumes_m3() * tissue.density_kg_m3
    if tissue.label is None:
        return {"body": float(mass.sum())}
    sums = np.bincount(tissue.label.ravel(), weights=mass.ravel())
    return {tissue.names.get(i, f"label {i}"): float(m) for i, m in enumerate(sums) if m > 0}
