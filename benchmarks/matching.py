"""Matching by calculation: peak SAR per forward and per accepted watt, before and after, and what ±δS does.

    python benchmarks/matching.py EXPORT --phasor peak --time-sign +

EXPORT is anything a reader opens that comes with an S-matrix. One L-section per port, all ports matched
at once (vop.network.match_array). Excitations: each channel alone, equal amplitudes with phases that go
once round, and the worst of all.
"""

from __future__ import annotations

from pathlib import Path

import click
import numpy as np

from vop.basis import change_basis
from vop.build import build_sar_model
from vop.errors import InputError
from vop.metadata import Reference
from vop.network import accepted_power, accepted_power_interval, l_sections, match_array
from vop.plugins import open_fields
from vop.sarmodel import SarModel

ACCURACIES = (1e-4, 3e-4, 1e-3, 1.5e-3, 2e-3, 3e-3, 1e-2)


def peak(model: SarModel, w: np.ndarray) -> float:
    """Largest wᴴQw over all matrices, W/kg."""
    return max(float(np.einsum("i,vij,j->v", w.conj(), q, w).real.max()) for q in _blocks(model))


def worst(model: SarModel, per: np.ndarray) -> float:
    """Largest SAR over matrices and excitations with wᴴ·per·w = 1."""
    root = np.linalg.inv(np.linalg.cholesky(per))
    return max(float(np.linalg.eigvalsh(root @ q @ root.conj().T)[:, -1].max()) for q in _blocks(model))


def _blocks(model: SarModel) -> list[np.ndarray]:
    return [model.matrices(slice(a, a + 8192)) for a in range(0, len(model), 8192)]


def report(title: str, model: SarModel, s: np.ndarray) -> None:
    """Rows of one state of the array."""
    n, accepted = len(s), accepted_power(s)
    absorbed = model.global_matrices["absorbed power"]
    click.echo(f"\n{title}")
    click.echo("excitation      accepted  absorbed   peak SAR, W/kg per W")
    click.echo("(1 W forward)        W/W       W/W    forward   accepted")
    alone = [(f"channel {c + 1}", np.eye(n)[c] + 0j) for c in range(n)]
    round_ = np.exp(2j * np.pi * np.arange(n) / n) / np.sqrt(n)
    for name, w in [*alone, ("phases +2π c/n", round_), ("phases −2π c/n", round_.conj())]:
        into = np.vdot(w, accepted @ w).real
        kept = np.vdot(w, absorbed @ w).real
        sar = peak(model, w)
        click.echo(f"{name:<15}{into:9.4f}{kept:10.4f}{sar:11.4f}{sar / into:11.4f}")
    click.echo(f"{'worst of all':<15}{'':19}{worst(model, np.eye(n)):11.4f}{worst(model, accepted):11.4f}")
    rest = np.linalg.eigvalsh(accepted - absorbed)
    click.echo(f"accepted − absorbed, eigenvalues: {rest[0]:.4f} to {rest[-1]:.4f} W/W")
    low, high = np.linalg.eigvalsh(accepted)[[0, -1]]
    click.echo(f"accepted, eigenvalues: {low:.4f} to {high:.4f} W/W")


@click.command()
@click.argument("export", type=click.Path(exists=True, path_type=Path))
@click.option("--phasor")
@click.option("--time-sign")
@click.option("--mass-g", default=10.0, show_default=True)
def main(export: Path, phasor: str | None, time_sign: str | None, mass_g: float) -> None:
    """Print the figures for EXPORT."""
    source = open_fields(export, phasor=phasor, time_sign=time_sign)
    s, z0 = source.scattering, source.z0_ohm
    if s is None or z0 is None:
        raise click.ClickException("the export brings no S-matrix")
    model = build_sar_model(source, mass_g / 1000 or None)
    report(f"as exported, Z0 = {z0:g} ohm", model, s)
    matched = match_array(s, z0)
    for c, part in enumerate(matched.sections):
        values = ", ".join(f"{k} {v:.3g}" for k, v in part.components(source.frequency_hz).items())
        count = len(l_sections(z0 * (1 + s[c, c]) / (1 - s[c, c]), z0))
        click.echo(f"port {c + 1}: {values} ({count} solutions)")
    after = change_basis(
        model,
        matched.change.transform,
        reference=Reference("forward power", plane="amplifier side of the matching networks", z0_ohm=z0),
        channel_names=model.metadata.channel_names,
        reason="L-section at every port",
    )
    report("matched, all networks in place", after, matched.change.scattering)
    click.echo(
        "\nbound δ on ‖δS‖₂: accepted power of channel 1 before matching, and ‖a‖² at the array after it"
    )
    for delta in ACCURACIES:
        w = np.eye(len(s))[0]
        bare = accepted_power_interval(s, delta, w)
        lifted = accepted_power_interval(s, delta, w, model.global_matrices["absorbed power"])
        try:
            change = match_array(s, z0, accuracy=delta).change
            assert change.factor is not None
            text = f"× {change.factor.low:.3f} to {change.factor.high:.3f}, ‖δS'‖ ≤ {change.accuracy:.3g}"
        except InputError:
            text = "refused: more than a factor of two"
        click.echo(
            f"δ = {delta:<7g} accepted {bare.low:.4f} … {bare.high:.4f} ({bare.spread:.2f}×), from absorbed "
            f"power {lifted.low:.4f} ({lifted.spread:.2f}×); matched: {text}"
        )


if __name__ == "__main__":
    main()
