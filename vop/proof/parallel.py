"""Fixed chunks over threads: which thread takes which chunk changes nothing.

A copy of :mod:`vop.parallel` on purpose: the proof shares no code with what it checks.
"""

from __future__ import annotations

from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from typing import TypeVar

import numba

from vop.progress import Progress

T = TypeVar("T")


def map_chunks(
    label: str, total: int, chunk: int, work: Callable[[int, int], T], progress: Progress
) -> list[T]:
    """``work(first, last)`` for each chunk of ``range(total)``, results in order of the chunks.

    ``work`` should spend its time in kernels that release the interpreter lock.
    """
    edges = [(first, min(first + chunk, total)) for first in range(0, total, chunk)]
    results: list[T] = []
    with ThreadPoolExecutor(numba.get_num_threads()) as pool:
        futures = [pool.submit(work, *edge) for edge in edges]
        try:
            for (_, last), future in zip(edges, futures, strict=True):
                results.append(future.result())
                progress(label, last, total)
        except BaseException:
            for future in futures:
                future.cancel()
            raise
    return results
