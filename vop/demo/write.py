"""Write the demo: an export folder in the layout "channel-hdf5", a job file, and a word of caution."""

from __future__ import annotations

import os
from pathlib import Path

import h5py
import numpy as np

from vop.demo.array import DemoArray, decoupled_currents, resistance_matrix
from vop.demo.layered_sphere import Solution
from vop.errors import OutputError
from vop.progress import Progress, silent
from vop.storage import atomic_path, write_text

NOTE = (
    "INVENTED DATA. Computed from an invented array around an invented, ball-shaped body part; nothing "
    "was measured, nothing is of a real body or device. Not for use on people."
)
#: Degrees of the harmonics; at 12 mm from the skin of a 73 mm ball the last is 1e-6 of the first there.
_DEGREES = 90
#: Points per call of the field sum; only progress depends on it.
_STEP = 8192

JOB = """\
# Invented data: see README.txt.
[input]
path = "export"
reader = "channel-hdf5"
power_account = "radiated; the invented strips and their network are free of loss"

[domain]
coil = "eight bent strips, invented"
plug = "behind an ideal decoupling network, invented"
b0_direction = "+z"
bodies = ["layered ball, invented"]
positions = ["the only one"]
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


def write_demo(
    folder: str | os.PathLike[str],
    *,
    array: DemoArray | None = None,
    step_m: float = 0.00325,
    force: bool = False,
    progress: Progress = silent,
) -> Path:
    """Compute the fields of an invented array and write them as an export with its job.

    Parameters
    ----------
    folder : made if it does not exist; must be empty unless ``force``.
    array : what to compute; the default has 8 channels.
    step_m : voxel size.

    Returns
    -------
    Path of JOB.toml.

    Raises
    ------
    OutputError
        Where the folder holds something and not ``force``, or cannot be written.
    """
    folder, array = Path(folder), array or DemoArray()
    export = folder / "export"
    try:
        if folder.exists() and (not folder.is_dir() or any(folder.iterdir())) and not force:
            raise OutputError(f"{folder} is not an empty folder; choose another, or use --force")
        export.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise OutputError(f"cannot make the folder {export}: {error.strerror or error}") from error
    axis, label = _voxels(array, step_m)
    fields = _fields(array, axis, label, progress)
    for channel, e in enumerate(fields):
        with (
            atomic_path(export / f"channel_{channel + 1:02d}.h5", True) as path,
            h5py.File(path, "w") as handle,
        ):
            _write_channel(handle, array, axis, label, e)
    with atomic_path(export / "tissue.h5", True) as path, h5py.File(path, "w") as handle:
        _write_tissue(handle, array, axis, label)
    ports = array.n_channels
    row = "\n".join(" ".join(["0 0"] * ports) for _ in range(ports))
    write_text(
        export / f"array.s{ports}p",
        "! zero by construction: an ideal network matches and decouples the strips\n"
        f"# Hz S RI R 50\n{array.frequency_hz:.0f} {row}\n",
        force=True,
    )
    write_text(folder / "README.txt", NOTE + "\n", force=True)
    write_text(folder / "JOB.toml", JOB, force=True)
    return folder / "JOB.toml"


def _voxels(array: DemoArray, step_m: float) -> tuple[np.ndarray, np.ndarray]:
    """Cell centres of one axis (all three are alike), and labels (z, y, x), 0 outside the ball."""
    half = int(np.ceil(array.radius_m / step_m)) + 1
    axis = (np.arange(-half, half) + 0.5) * step_m
    radius = np.sqrt(axis[:, None, None] ** 2 + axis[None, :, None] ** 2 + axis[None, None, :] ** 2)
    layer = array.sphere().layer_of(radius)
    return axis, np.where(layer < len(array.sphere().layers), layer + 1, 0).astype(np.uint8)


def _fields(array: DemoArray, axis: np.ndarray, label: np.ndarray, progress: Progress) -> np.ndarray:
    """E per √W of forward power, (C, 3, V) complex64, at the voxels with a label."""
    solution = Solution(array.sphere(), _DEGREES)
    elements, owner = array.elements()
    k, j, i = np.nonzero(label)
    points = np.stack([axis[i], axis[j], axis[k]], axis=1)
    currents = decoupled_currents(resistance_matrix(solution, elements, owner))
    out = np.empty((array.n_channels, 3, len(points)), dtype=np.complex64)
    for a in range(0, len(points), _STEP):
        part = slice(a, a + _STEP)
        e = solution.field(elements, owner, array.n_channels, points[part])
        out[:, :, part] = np.einsum("cd,cav->dav", currents, e)
        progress("demo: fields", min(a + _STEP, len(points)), len(points))
    return out


def _write_channel(
    handle: h5py.File, array: DemoArray, axis: np.ndarray, label: np.ndarray, e: np.ndarray
) -> None:
    whole = np.zeros((3, *label.shape), dtype=np.complex64)
    whole[:, label > 0] = e
    handle.create_dataset("E/real", data=whole.real)
    handle.create_dataset("E/imag", data=whole.imag)
    _write_axes(handle, axis)
    handle.attrs["frequency"] = array.frequency_hz
    handle.attrs["incident_wave"] = [1.0, 0.0]
    handle.attrs.update(phasor="peak", time_sign="+", reference="forward power", b0_direction="+z", note=NOTE)


def _write_tissue(handle: h5py.File, array: DemoArray, axis: np.ndarray, label: np.ndarray) -> None:
    layers = array.sphere().layers
    handle.create_dataset("label", data=label, compression="gzip")
    handle["names"] = ["background", *(layer.name for layer in layers)]
    handle["conductivity"] = [0.0, *(layer.conductivity_s_m for layer in layers)]
    handle["density"] = [0.0, *(layer.density_kg_m3 for layer in layers)]
    _write_axes(handle, axis)
    handle.attrs["note"] = NOTE


def _write_axes(handle: h5py.File, axis: np.ndarray) -> None:
    for name in "xyz":
        handle[f"axes/{name}"] = axis
