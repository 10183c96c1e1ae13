"""Compiled kernels: arrays in, arrays out; no I/O, no classes.

numba's cache on disk is keyed on the source file of the compiled function alone, although the machine
code contains the functions of other files that it calls. So that an edit or an upgrade never runs old
code, the cache of a module is emptied here whenever one of the files it imports from has changed.
"""

from __future__ import annotations

import hashlib
import json
import re
from contextlib import suppress
from pathlib import Path

from numba import njit

_IMPORT = re.compile(r"^(?:from|import) vop\.(kernels\.\w+|hermitian)\b", re.MULTILINE)
_IMPORT_MODULE = re.compile(r"^from vop\.kernels import (\w+)", re.MULTILINE)


@njit(cache=True)
def _anchor():  # never called: tells where the cache of this folder is
    return 0


def _digests() -> dict[str, str]:
    """Of each module here, SHA-256 over its source and those of all kernels that it imports."""
    folder = Path(__file__).parent
    texts = {f"kernels.{p.stem}": p.read_text(encoding="utf-8") for p in sorted(folder.glob("*.py"))}
    texts["hermitian"] = (folder.parent / "hermitian.py").read_text(encoding="utf-8")
    digests = {}
    for name in texts:
        needed, to_read = set(), [name]
        while to_read:
            module = to_read.pop()
            if module in texts and module not in needed:
                needed.add(module)
                to_read += _IMPORT.findall(texts[module])
                to_read += [f"kernels.{m}" for m in _IMPORT_MODULE.findall(texts[module])]
        sources = "\0".join(texts[module] for module in sorted(needed))
        digests[name] = hashlib.sha256(sources.encode()).hexdigest()
    return digests


def _empty_stale_cache() -> None:
    cache = Path(str(_anchor.stats.cache_path))
    record, found = cache / "kernels.json", _digests()
    try:
        known = json.loads(record.read_text(encoding="utf-8"))
    except (OSError, ValueError):
        known = {}
    stale = [name for name, digest in found.items() if known.get(name) != digest]
    for name in stale:
        for index in cache.glob(f"{name.removeprefix('kernels.')}.*.nbi"):
            index.unlink(missing_ok=True)
    if stale:
        record.write_text(json.dumps(found, indent=1), encoding="utf-8")


# A folder that cannot be written to holds no cache of ours either.
with suppress(OSError):
    _empty_stale_cache()
