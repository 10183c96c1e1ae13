"""Virtual observation points (VOPs) for parallel-transmit MRI: from simulated fields to a proven set.

The public API is the names below; each is imported when first used, so that ``import vop`` is cheap.
"""

from __future__ import annotations

import importlib
from typing import TYPE_CHECKING, Any

__version__ = "0.1.0"

_HOMES = {
    "FieldSource": "vop.fields",
    "SarModel": "vop.sarmodel",
    "VopError": "vop.errors",
    "VopSet": "vop.vopset",
    "build_sar_model": "vop.build",
    "compress": "vop.compression",
    "export": "vop.handoff",
    "open_fields": "vop.plugins",
    "peak_spatial_average": "vop.exposure",
    "prove": "vop.proof",
}

__all__ = [
    "FieldSource",
    "SarModel",
    "VopError",
    "VopSet",
    "__version__",
    "build_sar_model",
    "compress",
    "export",
    "open_fields",
    "peak_spatial_average",
    "prove",
]

if TYPE_CHECKING:
    from vop.build import build_sar_model
    from vop.compression import compress
    from vop.errors import VopError
    from vop.exposure import peak_spatial_average
    from vop.fields import FieldSource
    from vop.handoff import export
    from vop.plugins import open_fields
    from vop.proof.prove import prove
    from vop.sarmodel import SarModel
    from vop.vopset import VopSet


def __getattr__(name: str) -> Any:
    if name in _HOMES:
        return getattr(importlib.import_module(_HOMES[name]), name)
    raise AttributeError(f"module 'vop' has no attribute {name!r}")


def __dir__() -> list[str]:
    return sorted(__all__)
