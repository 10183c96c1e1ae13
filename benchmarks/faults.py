"""Make faults on purpose and check the promise: each final file is whole or absent, nothing is lost.

    python benchmarks/faults.py --kills 50

Kills ``vop run`` with SIGKILL at random moments, checks every file that bears a final name, runs again
and compares the outcome with an undisturbed run. Then: a full disk (a small tmpfs, where mounting is
allowed), a read-only folder, an export that vanishes in mid-read, and a second run in the same folder.
"""

from __future__ import annotations

import argparse
import json
import os
import shutil
import signal
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).resolve().parents[1] / "tests"))

JOB = """\
[input]
path = "export"
[model]
average_mass_kg = 1e-3
[compress]
overestimation = 0.1
[export]
formats = ["hdf5", "mat5"]
"""
VOP = (sys.executable, "-m", "vop")


def make_job(folder: Path) -> None:
    """A job of a few seconds in ``folder``, on invented fields."""
    from conftest import write_channel_hdf5

    write_channel_hdf5(folder / "export", n_channels=4, shape=(22, 21, 20), wave=400.0)
    (folder / "JOB.toml").write_text(JOB)


def final_files(folder: Path) -> dict[str, str]:
    """Digest of each file under its final name; raises where one is not whole."""
    import scipy.io

    import vop
    from vop.storage import check_seal, file_digest

    found = {}
    for path in sorted(folder.glob("result/[!.]*")):
        if path.name == "model.h5":
            vop.SarModel.load(path)
        elif path.name == "set.h5":
            vop.VopSet.load(path)
        elif path.suffix == ".h5":
            check_seal(path)
        elif path.suffix == ".json":
            json.loads(path.read_text())
        elif path.suffix == ".mat":
            scipy.io.loadmat(path)
        elif path.name == "summary.txt":
            if "HAND-OFF" not in path.read_text():
                raise ValueError("summary.txt is not whole")
        else:
            raise ValueError(f"unexpected file {path.name}")
        found[path.name] = file_digest(path)
    return found


def kill_at_random(folder: Path, kills: int, seed: int) -> list[str]:
    """Kill, check, complete; returns lines of failure."""
    started = time.monotonic()
    subprocess.run([*VOP, "run", "JOB.toml"], cwd=folder, check=True, capture_output=True)
    duration = time.monotonic() - started
    wanted = final_files(folder)
    rng, failures, interrupted, files_at_kill = np.random.default_rng(seed), [], 0, []
    for trial in range(kills):
        shutil.rmtree(folder / "result")
        moment = float(rng.uniform(0.1, 1.0)) * duration
        process = subprocess.Popen(
            [*VOP, "run", "JOB.toml"], cwd=folder, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL
        )
        try:
            process.wait(moment)
        except subprocess.TimeoutExpired:
            interrupted += 1
            process.send_signal(signal.SIGKILL)
            process.wait()
        try:
            before = final_files(folder)
            files_at_kill.append(len(before))
            again = subprocess.run([*VOP, "run", "JOB.toml"], cwd=folder, capture_output=True, text=True)
            after = final_files(folder)
        except Exception as error:
            failures.append(f"trial {trial}, killed at {moment:.2f} s: {error}")
            continue
        if again.returncode or after != wanted:
            failures.append(f"trial {trial}, killed at {moment:.2f} s: then {again.stderr.strip()[-200:]}")
        if any(after[name] != value for name, value in before.items()):
            failures.append(f"trial {trial}: a file that was whole changed in the second run")
        if list(folder.glob("result/.*.partial")):
            failures.append(f"trial {trial}: an unfinished file stayed")
    print(
        f"kill -9            {kills} runs of about {duration:.1f} s, {interrupted} killed before their end, "
        f"{min(files_at_kill)} to {max(files_at_kill)} final files present; failures: {len(failures)}"
    )
    return failures


def _expect(name: str, process: subprocess.CompletedProcess[str], words: str) -> list[str]:
    line = process.stderr.strip().splitlines()[-1] if process.stderr.strip() else ""
    good = process.returncode == 2 and words in line and "Traceback" not in process.stderr
    print(f"{name:<18} exit {process.returncode}: {line}")
    return [] if good else [f"{name}: expected exit 2 and {words!r}"]


def full_disk(folder: Path) -> list[str]:
    """Run on a file system of 300 kB."""
    mount = folder / "small"
    mount.mkdir()
    if subprocess.run(
        ["mount", "-t", "tmpfs", "-o", "size=300k", "none", str(mount)], capture_output=True
    ).returncode:
        print("full disk          not run: mounting is not allowed here")
        return []
    try:
        (folder / "FULL.toml").write_text(JOB + '[output]\nfolder = "small/result"\n')
        done = subprocess.run([*VOP, "run", "FULL.toml"], cwd=folder, capture_output=True, text=True)
        left = [p.name for p in (mount / "result").glob("*") if p.name != ".lock"]
        return _expect("full disk", done, "disk is full") + ([f"left behind: {left}"] if left else [])
    finally:
        subprocess.run(["umount", str(mount)], check=True)


def read_only_folder(folder: Path) -> list[str]:
    """Run into a file system that cannot be written."""
    mount = folder / "readonly"
    mount.mkdir()
    if subprocess.run(
        ["mount", "-t", "tmpfs", "-o", "ro", "none", str(mount)], capture_output=True
    ).returncode:
        print("read-only folder   not run: mounting is not allowed here")
        return []
    try:
        (folder / "RO.toml").write_text(JOB + '[output]\nfolder = "readonly/result"\n')
        done = subprocess.run([*VOP, "run", "RO.toml"], cwd=folder, capture_output=True, text=True)
        return _expect("read-only folder", done, "ead-only")
    finally:
        subprocess.run(["umount", str(mount)], check=True)


def vanishing_export(folder: Path) -> list[str]:
    """Remove a channel file after the export was opened."""
    code = (
        "import sys, pathlib, vop.plugins as p\n"
        "real = p.open_fields\n"
        "def opened(*a, **k):\n"
        "    source = real(*a, **k)\n"
        "    pathlib.Path('export/channel_03.h5').unlink()\n"
        "    return source\n"
        "import vop.chain; vop.chain.open_fields = opened\n"
        "from vop.cli.main import run\n"
        "sys.argv = ['vop', 'run', 'JOB.toml', '--force']; run()\n"
    )
    done = subprocess.run([sys.executable, "-c", code], cwd=folder, capture_output=True, text=True)
    return _expect("vanishing export", done, "channel_03.h5")


def second_run(folder: Path) -> list[str]:
    """Start a second run while the first is at work."""
    (folder / "result" / ".lock").unlink()
    first = subprocess.Popen(
        [*VOP, "run", "JOB.toml", "--force"], cwd=folder, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL
    )
    while first.poll() is None and not (folder / "result" / ".lock").exists():
        time.sleep(0.01)
    done = subprocess.run([*VOP, "run", "JOB.toml"], cwd=folder, capture_output=True, text=True)
    failures = _expect("second run", done, "another run is at work")
    if first.wait() != 0:
        failures.append("second run: it disturbed the first")
    return failures


def main() -> int:
    """Run all; exit code 1 where a promise was broken."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--kills", type=int, default=50)
    parser.add_argument("--seed", type=int, default=0)
    arguments = parser.parse_args()
    folder = Path(tempfile.mkdtemp())
    os.environ.setdefault("PYTHONWARNINGS", "default")
    try:
        make_job(folder)
        failures = kill_at_random(folder, arguments.kills, arguments.seed)
        failures += second_run(folder)
        failures += full_disk(folder) + read_only_folder(folder) + vanishing_export(folder)
    finally:
        shutil.rmtree(folder, ignore_errors=True)
    print("\n".join(failures) or "all promises kept")
    return 1 if failures else 0


if __name__ == "__main__":
    sys.exit(main())
