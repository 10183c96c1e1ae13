"""Write the demo: an export folder in the layout "channel-hdf5", a job file, and a word of caution."""

from __future__ import annotations

import json
import os
import textwrap
from contextlib import suppress
from dataclasses import dataclass
from pathlib import Path

import h5py
import numpy as np

from vop.demo.array import DemoArray
from vop.demo.body import Ball
from vop.demo.layered_sphere import Elements, Solution
from vop.demo.power import ArrayPower
from vop.errors import InputError, OutputError
from vop.progress import Progress, silent
from vop.storage import atomic_path, write_text

NOTE = (
    "INVENTED DATA. Computed from an invented array around an invented, ball-shaped body part; nothing "
    "was measured, nothing is of a real body or device. Not for use on people."
)
#: First line of the S-matrix; tells a file of ours from anybody else's.
_S_COMMENT = "! INVENTED. Zero, exactly, by construction: an ideal lossless network matches and decouples"
#: Elements this close to the skin would need hundreds of harmonics.
_LEAST_GAP_M = 0.003
_B0 = "+z"


@dataclass(frozen=True, eq=False)
class DemoFields:
    """What :func:`compute_demo` found.

    axis_m : (N,) cell centres from the ball's centre, alike along x, y and z.
    label : (N, N, N) uint8, (z, y, x), 0 outside, else 1 + number of the layer.
    electric, magnetic : (C, 3, V) complex64, V/m and A/m per √W of forward power, peak, e^{+jωt}, at
        the V voxels with a label, in the order of ``np.nonzero(label)``.
    power : where 1 W of forward power goes, from the solver's modes; its parts add up to the unit matrix.
    voxel_absorbed_w : (C, C) complex128, the sum of σ|E|²/2 over the voxels, W/W; it should be
        ``power.absorbed_w`` but for the staircase.
    """

    axis_m: np.ndarray
    label: np.ndarray
    electric: np.ndarray
    magnetic: np.ndarray
    power: ArrayPower
    voxel_absorbed_w: np.ndarray


def compute_demo(
    ball: Ball, array: DemoArray, step_m: float = 0.00325, progress: Progress = silent
) -> DemoFields:
    """Fields of every channel for 1 W of forward power.

    Raises
    ------
    InputError
        Where the array touches the ball, or the voxels are so coarse that they absorb more than is sent.
    """
    if not 0 < step_m < ball.radius_m / 4:
        raise InputError(f"voxels of {step_m:g} m do not resolve a ball of radius {ball.radius_m:g} m")
    elements, owner = array.elements()
    elements = Elements(elements.position_m - np.array(ball.shift_m), elements.moment)
    gap = float(elements.distance_m().min()) - ball.radius_m
    if gap < _LEAST_GAP_M:
        raise InputError(
            f"the array comes within {1e3 * gap:.1f} mm of {ball.name}; at least "
            f"{1e3 * _LEAST_GAP_M:g} mm are needed"
        )
    solution = Solution.around(ball.sphere(array.frequency_hz), elements)
    power = ArrayPower.of(solution, elements, owner, array.loss_ohm)
    drive = power.decoupled_currents()
    axis, label = ball.voxels(step_m)
    z, y, x = np.nonzero(label)
    points = np.stack([axis[x], axis[y], axis[z]], axis=1)
    e, h = solution.field(elements, owner, array.n_channels, points, progress=progress)
    e = np.einsum("cd,cav->dav", drive, e)
    sigma = np.array([0.0, *(layer.conductivity_s_m for layer in solution.sphere.layers)])[label[label > 0]]
    voxels = 0.5 * step_m**3 * np.einsum("iav,v,jav->ij", e.conj(), sigma, e, optimize=True)
    most = float(np.linalg.eigvalsh(voxels)[-1])
    if most > 1:
        raise InputError(
            f"voxels of {1e3 * step_m:g} mm are too coarse for these layers: their sum absorbs {most:.4f} W "
            "of 1 W, which is impossible; take another voxel size, or give the channels some loss_ohm"
        )
    return DemoFields(
        axis,
        label,
        e.astype(np.complex64),
        np.einsum("cd,cav->dav", drive, h).astype(np.complex64),
        power.under(drive),
        voxels,
    )


def write_demo(
    folder: str | os.PathLike[str],
    *,
    ball: Ball | None = None,
    array: DemoArray | None = None,
    step_m: float = 0.00325,
    magnetic: bool = True,
    force: bool = False,
    progress: Progress = silent,
) -> Path:
    """Compute the fields of an invented array and write them as an export with its job.

    JOB.toml comes last: a folder without it is unfinished.

    Parameters
    ----------
    folder : made if it does not exist; must be empty unless ``force``.
    ball, array : what to compute; by default 8 channels around a ball of 146 mm.
    step_m : voxel size.
    magnetic : write H, too.
    force : replace an earlier demo in the folder. Channel files of anybody else are never removed.

    Returns
    -------
    Path of JOB.toml.

    Raises
    ------
    OutputError
        Where the folder holds something and not ``force``, or cannot be written.
    InputError
        As :func:`compute_demo`.
    """
    folder, ball, array = Path(folder), ball or Ball(), array or DemoArray()
    export, job = folder / "export", folder / "JOB.toml"
    try:
        if folder.exists() and (not folder.is_dir() or any(folder.iterdir())) and not force:
            raise OutputError(f"{folder} is not an empty folder; choose another, or use --force")
        earlier = _earlier_files(export) if force else []
        export.mkdir(parents=True, exist_ok=True)
        found = compute_demo(ball, array, step_m, progress)
        for file in [job, *earlier]:
            file.unlink(missing_ok=True)
    except OSError as error:
        raise OutputError(f"cannot write to the folder {folder}: {error.strerror or error}") from error
    write_text(folder / "README.txt", _readme(ball, array, found), force=force)
    for channel in range(array.n_channels):
        with (
            atomic_path(export / f"channel_{channel + 1:02d}.h5", force) as path,
            h5py.File(path, "w") as handle,
        ):
            _write_channel(handle, ball, array, found, channel, magnetic)
        progress("demo: files", channel + 1, array.n_channels)
    with atomic_path(export / "tissue.h5", force) as path, h5py.File(path, "w") as handle:
        _write_tissue(handle, ball, found)
    write_text(export / f"array.s{array.n_channels}p", _touchstone(array), force=force)
    write_text(job, _job(ball, array), force=force)
    return job


def _earlier_files(export: Path) -> list[Path]:
    """Files of an earlier demo, which might have had more channels.

    Raises OutputError where a channel file is not ours: the reader would mix it with the new ones.
    """
    ours = []
    for file in sorted(export.glob("channel_*.h5")):
        note = None
        with suppress(OSError), h5py.File(file, "r") as handle:
            note = handle.attrs.get("note")
        if note != NOTE:
            raise OutputError(f"{file} is not of a demo; choose another folder, or move it away")
        ours.append(file)
    for file in sorted(export.glob("*.s*p")):
        with open(file, encoding="utf-8", errors="replace") as text:
            if text.readline().rstrip("\n") == _S_COMMENT:
                ours.append(file)
    return ours


def _write_channel(
    handle: h5py.File, ball: Ball, array: DemoArray, found: DemoFields, channel: int, magnetic: bool
) -> None:
    for name, values in (("E", found.electric), ("H", found.magnetic)):
        if name == "H" and not magnetic:
            continue
        whole = np.zeros((3, *found.label.shape), dtype=np.complex64)
        whole[:, found.label > 0] = values[channel]
        for part, data in (("real", whole.real), ("imag", whole.imag)):
            handle.create_dataset(f"{name}/{part}", data=data, compression="gzip", compression_opts=1)
    _write_axes(handle, ball, found)
    handle.attrs["frequency"] = array.frequency_hz
    handle.attrs["incident_wave"] = [1.0, 0.0]
    handle.attrs.update(phasor="peak", time_sign="+", reference="forward power", b0_direction=_B0, note=NOTE)


def _write_tissue(handle: h5py.File, ball: Ball, found: DemoFields) -> None:
    layers = ball.sphere(1.0).layers
    handle.create_dataset("label", data=found.label, compression="gzip")
    handle["names"] = ["background", *(layer.name for layer in layers)]
    handle["conductivity"] = [0.0, *(layer.conductivity_s_m for layer in layers)]
    handle["density"] = [0.0, *(layer.density_kg_m3 for layer in layers)]
    _write_axes(handle, ball, found)
    handle.attrs["note"] = NOTE


def _write_axes(handle: h5py.File, ball: Ball, found: DemoFields) -> None:
    for name, shift in zip("xyz", ball.shift_m, strict=True):
        handle[f"axes/{name}"] = found.axis_m + shift


def _touchstone(array: DemoArray) -> str:
    zeros = "\n".join(" ".join(["0 0"] * array.n_channels) for _ in range(array.n_channels))
    return (
        f"{_S_COMMENT}\n! the channels, so that forward power is accepted power.\n"
        f"# Hz S RI R 50\n{array.frequency_hz:.0f} {zeros}\n"
    )


def _readme(ball: Ball, array: DemoArray, found: DemoFields) -> str:
    tissues = ", ".join([tissue for tissue, _ in ball.shells] + [ball.core])
    solved, summed = (np.linalg.eigvalsh(p)[-1] for p in (found.power.absorbed_w, found.voxel_absorbed_w))
    paragraphs = (
        NOTE,
        f"What it is: {array.n_channels} channels, {_kinds(array)}, bent around {ball.name}, of "
        f"{2e3 * ball.radius_m:g} mm, at {array.frequency_hz / 1e6:g} MHz. Tissues from the surface inwards: "
        f"{tissues}; their values are quoted from memory of public tables and good enough for invented data "
        "only.",
        "How it was made: Maxwell's equations for short current elements outside a layered lossy sphere, "
        "solved in closed form (vector spherical harmonics); each voxel takes the tissue and the field of "
        f"its centre. Forward power is {_spent(array)} power, from the solution itself: an ideal lossless "
        f"network is taken to match and decouple the channels, so that array.s{array.n_channels}p is zero "
        f"by construction. The most that any excitation has absorbed, of 1 W: {solved:.4f} W by the "
        f"solution, {summed:.4f} W by the sum over the voxels.",
        "export/ holds one HDF5 file per channel, tissue.h5 and the S-matrix: peak phasors, exp(+jωt), V/m "
        f"and A/m for 1 W of forward power, main field along {_B0}. JOB.toml says what to do with it: "
        "vop run JOB.toml",
    )
    return "\n\n".join(textwrap.fill(paragraph, 100) for paragraph in paragraphs) + "\n"


def _kinds(array: DemoArray) -> str:
    return " and ".join(f"{kind}s" for kind in array.kinds)


def _spent(array: DemoArray) -> str:
    return "radiated plus absorbed" if not array.loss_ohm else "radiated plus absorbed plus lost"


def _job(ball: Ball, array: DemoArray) -> str:
    """The job file; texts go through JSON, whose quoting TOML shares."""

    def quoted(text: str) -> str:
        return json.dumps(text, ensure_ascii=False)

    account = "radiated; the invented channels and their network are free of loss"
    if array.loss_ohm:
        account = f"radiated, and lost in {array.loss_ohm:g} ohm of each invented channel"
    x, y, z = (1e3 * v for v in ball.shift_m)
    position = "centred" if not any(ball.shift_m) else f"shifted by ({x:g}, {y:g}, {z:g}) mm"
    return f"""\
# INVENTED DATA: see README.txt.
[input]
path = "export"
reader = "channel-hdf5"
power_account = {quoted(account)}

[domain]
coil = {quoted(f"{array.n_channels} bent {_kinds(array)}, invented")}
plug = "behind an ideal decoupling network, invented"
b0_direction = "{_B0}"
bodies = [{quoted(ball.name)}]
positions = [{quoted(position)}]
limits_mode = "none: not for use on people"
expiry = "not for use on people"

[model]
average_mass_kg = 0.010

[compress]
overestimation = 0.05
method = "clustering"

[export]
formats = ["hdf5", "mat5"]

[output]
folder = "result"
"""
