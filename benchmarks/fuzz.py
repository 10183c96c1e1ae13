"""Mutate valid files byte by byte and open them: every outcome is a right answer or a one-line error.

    python benchmarks/fuzz.py --cases 10000

For each loader and reader: bit flips, overwritten runs, truncations, insertions and spliced blocks of a
valid file, with a seeded generator. A case fails if it raises anything but VopError, kills or hangs the
process, needs more memory than allowed, or returns data although the bytes that matter changed (a set
or model whose digest no longer fits must be refused). Prints one table.
"""

from __future__ import annotations

import argparse
import collections
import multiprocessing
import resource
import shutil
import sys
import tempfile
import time
from collections.abc import Callable
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).resolve().parents[1] / "tests"))

MEMORY_BYTES = 6 << 30
SECONDS = 20.0


def mutate(data: bytes, rng: np.random.Generator) -> bytes:
    """One random mutation of ``data``, never equal to it."""
    out = bytearray(data)
    kind = rng.integers(6)
    at = int(rng.integers(len(out)))
    # Headers are where damage is interesting; half of the cases go there.
    if rng.random() < 0.5:
        at = int(rng.integers(min(4096, len(out))))
    if kind == 0:
        for _ in range(int(rng.integers(1, 9))):
            out[int(rng.integers(len(out)))] ^= 1 << int(rng.integers(8))
    elif kind == 1:
        out[at] ^= int(rng.integers(1, 256))
    elif kind == 2:
        out = out[:at]
    elif kind == 3:
        run = int(rng.integers(1, 64))
        out[at : at + run] = rng.bytes(run)
    elif kind == 4:
        out[at:at] = rng.bytes(int(rng.integers(1, 64)))
    else:
        value = rng.choice([b"\xff" * 8, b"\x00" * 8, b"\x7f" + b"\xff" * 7, b"\x01" + b"\x00" * 7])
        out[at : at + 8] = value
    return bytes(out) if bytes(out) != data else mutate(data, rng)


def _worker(open_it: Callable[[Path], str], path: Path, pipe: object) -> None:
    from vop.errors import VopError

    resource.setrlimit(resource.RLIMIT_AS, (MEMORY_BYTES, MEMORY_BYTES))
    while pipe.recv():  # type: ignore[attr-defined]
        try:
            outcome = open_it(path)
        except VopError as error:
            text = str(error)
            outcome = "refused" if "\n" not in text.strip() else "error of several lines"
        except MemoryError:
            outcome = "out of memory"
        except BaseException as error:
            outcome = f"{type(error).__name__}: {str(error).splitlines()[0][:90] if str(error) else ''}"
        pipe.send(outcome)  # type: ignore[attr-defined]


class Subject:
    """One file of one loader, opened again and again in a process that may die."""

    def __init__(self, open_it: Callable[[Path], str], victim: Path) -> None:
        self.open_it, self.victim = open_it, victim
        self.data = victim.read_bytes()
        self._start()

    def _start(self) -> None:
        self.pipe, other = multiprocessing.Pipe()
        self.process = multiprocessing.Process(
            target=_worker, args=(self.open_it, self.victim, other), daemon=True
        )
        self.process.start()
        other.close()

    def case(self, data: bytes) -> str:
        """Outcome of opening the file with these bytes."""
        self.victim.write_bytes(data)
        try:
            self.pipe.send(True)
            if self.pipe.poll(SECONDS):
                return str(self.pipe.recv())
            outcome = f"no answer in {SECONDS:g} s"
        except (EOFError, BrokenPipeError, ConnectionResetError):
            self.process.join()
            outcome = f"process died with {self.process.exitcode}"
        self.process.kill()
        self._start()
        return outcome


def _open_model(path: Path) -> str:
    import vop

    vop.SarModel.load(path)
    return "opened"


def _open_set(path: Path) -> str:
    import vop

    vop.VopSet.load(path)
    return "opened"


def _open_export(path: Path) -> str:
    import vop

    where = path.parent if path.parent.name == "export" else path
    source = vop.open_fields(where)
    whole = (slice(None),) * 3
    for channel in range(source.n_channels):
        source.electric(channel, whole)
    return "opened"


def _open_job(path: Path) -> str:
    from vop.job import load_job

    load_job(path)
    return "opened"


def _subjects(folder: Path) -> dict[str, Subject]:
    from conftest import random_matrices, write_channel_hdf5

    import vop

    model = vop.SarModel.from_matrices(random_matrices(np.random.default_rng(0), 30, 3))
    model.save(folder / "model.h5")
    vop.compress(model, 0.1).save(folder / "set.h5")
    write_channel_hdf5(folder / "export", n_channels=2, shape=(8, 7, 7))
    (folder / "JOB.toml").write_text('[input]\npath = "export"\n[compress]\noverestimation = 0.1\n')
    return {
        "model": Subject(_open_model, folder / "model.h5"),
        "set": Subject(_open_set, folder / "set.h5"),
        "channel file": Subject(_open_export, folder / "export" / "channel_01.h5"),
        "tissue file": Subject(_open_export, folder / "export" / "tissue.h5"),
        "job file": Subject(_open_job, folder / "JOB.toml"),
    }


#: Digests cover every number and the metadata; an opened file differs only in bytes that mean nothing.
_RIGHT = ("opened", "refused")


def main() -> int:
    """Run the campaign; exit code 1 where a case failed."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--cases", type=int, default=10_000, help="per subject")
    parser.add_argument("--seed", type=int, default=0)
    parser.add_argument("--only", help="one subject")
    arguments = parser.parse_args()
    folder = Path(tempfile.mkdtemp())
    failed = 0
    try:
        print(f"{'subject':<14}{'cases':>8}{'opened':>9}{'refused':>9}{'failed':>8}{'seconds':>9}")
        for name, subject in _subjects(folder).items():
            if arguments.only not in (None, name):
                continue
            rng, counts, started = np.random.default_rng(arguments.seed), collections.Counter(), time.time()
            for _ in range(arguments.cases):
                counts[subject.case(mutate(subject.data, rng))] += 1
            subject.victim.write_bytes(subject.data)
            wrong = {k: v for k, v in counts.items() if k not in _RIGHT}
            failed += sum(wrong.values())
            print(
                f"{name:<14}{arguments.cases:>8}{counts['opened']:>9}{counts['refused']:>9}"
                f"{sum(wrong.values()):>8}{time.time() - started:>9.1f}",
                flush=True,
            )
            for outcome, count in sorted(wrong.items(), key=lambda item: -item[1])[:12]:
                print(f"    {count} × {outcome}")
    finally:
        shutil.rmtree(folder, ignore_errors=True)
    return 1 if failed else 0


if __name__ == "__main__":
    sys.exit(main())
