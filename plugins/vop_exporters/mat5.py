"""Hand-off format "mat5": MAT-file of level 5, for pulse-design code.

Variables (all double unless said):

* ``vop`` (n, n, K) complex: delivered VOPs A_k, in ``unit``; ``vop(:,:,k)`` is one Hermitian matrix;
* ``overestimation`` (ε), ``worst_case`` (same unit), ``overestimation_matrix`` (n, n) complex, S;
* ``global_NAME`` (n, n) complex: whole-volume matrices, blanks in their names as ``_``; ``global_units``
  lists name and unit of each;
* ``selftest_w`` (n, m) complex and ``selftest_sar`` (m, 1): excitations and the max_k real(w'·A_k·w)
  that a right consumer gets; a lost conjugate, a transposed order or √2 shows at once;
* texts ``holds``, ``unit``, ``reference``, ``channel_names``, ``domain``, ``warnings``, ``caution``,
  ``digest``, ``schema``.
"""

from __future__ import annotations

import json
import re
from dataclasses import asdict
from pathlib import Path

import numpy as np
import scipy.io

from vop import __version__
from vop.errors import InputError
from vop.metadata import PHASE_CONVENTION, Reference
from vop.selftest import self_test_vectors
from vop.vopset import VopSet

_CAUTION = "Results need review by qualified people; local rules and licensed practice decide."
#: Bytes of free text at the start of the file; the writing library puts the time of day there,
#: which would make equal sets differ.
_HEADER_TEXT = 116
#: Longest name of a variable in this format.
_NAME_LENGTH = 31


class Mat5Exporter:
    """VOPs as one n × n × K complex array."""

    description = "MAT-file level 5 for pulse-design code: n × n × K complex array with self-test vectors"
    suffix = ".mat"

    def write(self, vop_set: VopSet, path: Path) -> None:
        """See :class:`vop.plugins.Exporter`."""
        meta = vop_set.metadata
        w, sar = self_test_vectors(vop_set)
        variables: dict[str, object] = {
            "vop": np.moveaxis(vop_set.matrices, 0, -1),
            "overestimation": vop_set.overestimation,
            "worst_case": vop_set.worst_case,
            "overestimation_matrix": vop_set.overestimation_matrix,
            "selftest_w": w.T,
            "selftest_sar": sar[:, None],
            "holds": f"Q, not its conjugate: {PHASE_CONVENTION}",
            "unit": f"{meta.matrix_unit}; w in {meta.reference.unit}{_phasor(meta.reference)}",
            "reference": meta.reference.quantity,
            "channel_names": np.array(meta.channel_names, dtype=object),
            "domain": json.dumps(asdict(meta.domain), sort_keys=True),
            "warnings": "\n".join(meta.warnings) or "none",
            "caution": _CAUTION,
            "digest": vop_set.digest(),
            "schema": __doc__,
        }
        units = []
        for number, (name, matrix) in enumerate(sorted(vop_set.global_matrices.items())):
            variable = re.sub(r"\W", "_", f"global_{name}", flags=re.ASCII)[:_NAME_LENGTH]
            if variable in variables:
                variable = f"global_{number}"
            variables[variable] = matrix
            units.append(f"{variable}: {name}, {vop_set.global_units.get(name, 'unit not stated')}")
        variables["global_units"] = "\n".join(units) or "none"
        scipy.io.savemat(path, variables, do_compression=True, oned_as="column")
        text = f"MATLAB 5.0 MAT-file, written by vop {__version__}".ljust(_HEADER_TEXT)
        with open(path, "r+b") as handle:
            handle.write(text.encode("ascii"))

    def read_matrices(self, path: Path) -> np.ndarray:
        """See :class:`vop.plugins.Exporter`."""
        try:
            stack = scipy.io.loadmat(path, variable_names=["vop"])["vop"]
        except (KeyError, ValueError, OSError) as error:
            raise InputError(f"{path}: no MAT-file of this format: {error}") from error
        # One VOP: the format drops a trailing dimension of one.
        stack = stack.reshape(*stack.shape[:2], -1)
        return np.ascontiguousarray(np.moveaxis(stack, -1, 0)).astype(np.complex128)


def _phasor(reference: Reference) -> str:
    if reference.unit == "sqrt(W)":
        return ""
    return ", peak or rms not stated" if reference.phasor == "not stated" else f" {reference.phasor}"


EXPORTER = Mat5Exporter()
