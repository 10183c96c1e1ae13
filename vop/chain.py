"""The whole chain of one job: export → model → set → proof → hand-off files → summary.

Each step leaves one file under its final name, whole or absent. A step whose file is there already
is reused if the file records the same inputs (digests, not time stamps), and refused otherwise.
"""

from __future__ import annotations

import fcntl
import json
import logging
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

from vop import __version__
from vop.build import build_sar_model
from vop.checks import checked_metadata
from vop.compression import compress
from vop.errors import InputError, OutputError
from vop.handoff import export
from vop.job import Job
from vop.limits import load_limits
from vop.metadata import Metadata, digest
from vop.plugins import EXPORTERS, find, open_fields
from vop.progress import Progress, silent
from vop.proof import prove, recheck
from vop.regions import load_exposed, load_regions
from vop.sarmodel import SarModel
from vop.storage import PARTIAL, file_digest, write_text
from vop.summary import job_summary
from vop.vopset import VopSet

_log = logging.getLogger(__name__)

MODEL_FILE, SET_FILE, CERTIFICATE_FILE, PROOF_FILE, SUMMARY_FILE = (
    "model.h5",
    "set.h5",
    "certificate.h5",
    "proof.json",
    "summary.txt",
)
_LOCK_FILE = ".lock"


@dataclass(frozen=True)
class JobResult:
    """What a job left: the folder, whether the proof holds, the summary as printed."""

    folder: Path
    holds: bool
    summary: str
    reused: tuple[str, ...]


def run_job(job: Job, *, force: bool = False, progress: Progress = silent) -> JobResult:
    """Do what the job says; hand-off files are written only from a set that is proved.

    Parameters
    ----------
    force : make every step anew and replace what is there.

    Raises
    ------
    VopError
        Whatever a user can mend; finished steps stay and are reused by the next run.
    """
    for name in job.formats:
        find(EXPORTERS, name)
    try:
        job.folder.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise OutputError(f"cannot make the folder {job.folder}: {error.strerror or error}") from error
    with _only_run_in(job.folder):
        for leftover in job.folder.glob(f".*{PARTIAL}"):
            leftover.unlink(missing_ok=True)
        return _Chain(job, force, progress).run()


@contextmanager
def _only_run_in(folder: Path) -> Iterator[None]:
    try:
        handle = open(folder / _LOCK_FILE, "w")  # noqa: SIM115 - held open as long as the lock
    except OSError as error:
        raise OutputError(f"cannot write in {folder}: {error.strerror or error}") from error
    with handle:
        try:
            fcntl.flock(handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except OSError:
            raise OutputError(
                f"another run is at work in {folder}; wait for it or use another folder"
            ) from None
        yield


class _Chain:
    def __init__(self, job: Job, force: bool, progress: Progress) -> None:
        self.job, self.force, self.progress = job, force, progress
        self.reused: list[str] = []

    def run(self) -> JobResult:
        job = self.job
        model, checks_lines = self._model()
        vop_set = self._set(model)
        proof, holds = self._proof(vop_set, model)
        if not holds:
            self._withdraw_exports()
        exports = self._exports(vop_set) if holds else {}
        text = job_summary(job, model, vop_set, proof, exports, checks_lines)
        write_text(job.folder / SUMMARY_FILE, text, force=True)
        return JobResult(job.folder, holds, text, tuple(self.reused))

    def _model(self) -> tuple[SarModel, tuple[str, ...]]:
        job = self.job
        source = open_fields(job.input_path, job.reader, **job.reader_options)
        regions = load_regions(job.regions_file, source.grid, source.tissue) if job.regions_file else None
        limits = load_limits(job.limits_table) if job.limits_table else None
        exposed = load_exposed(job.exposed_file, source.grid) if job.exposed_file else None
        key = digest(
            __version__,
            json.dumps(
                [
                    dict(source.files),
                    source.describe(),
                    dict(job.domain),
                    job.average_mass_kg,
                    dict(job.model_options),
                    job.power_account,
                    job.passivity_waiver,
                    job.patient_mass_kg,
                    None if limits is None else limits.record(),
                    None if exposed is None else digest(exposed.tobytes()),
                    None if regions is None else digest(regions.code.tobytes(), regions.excluded.tobytes()),
                ],
                sort_keys=True,
                default=str,
            ),
        )
        path = job.folder / MODEL_FILE
        if self._usable(path):
            model = SarModel.load(path)
            self._require_same(path, model.metadata.details.get("step"), key)
        else:
            domain = job.settle_domain(source.frequency_hz, getattr(source, "b0_direction", None))

            def annotate(made: SarModel) -> Metadata:
                metadata = checked_metadata(
                    made.with_metadata(replace(made.metadata, domain=domain)),
                    source,
                    account=job.power_account,
                    waiver=job.passivity_waiver,
                )
                if missing := domain.not_stated():
                    metadata = metadata.with_warnings(
                        f"domain of use not stated: {', '.join(missing)} (under [domain])"
                    )
                return metadata.with_details(step=key)

            model = build_sar_model(
                source,
                job.average_mass_kg,
                regions=regions,
                exposed=exposed,
                patient_mass_kg=job.patient_mass_kg,
                limits=limits,
                annotate=annotate,
                path=path,
                force=self.force,
                progress=self.progress,
                **job.model_options,
            )
        return model, tuple(model.metadata.details.get("import_check_lines", ()))

    def _set(self, model: SarModel) -> VopSet:
        job, path = self.job, self.job.folder / SET_FILE
        key = digest(__version__, model.digest(), repr(job.overestimation), job.method)
        if self._usable(path):
            vop_set = VopSet.load(path)
            self._require_same(path, vop_set.metadata.details.get("step"), key)
            return vop_set
        self._withdraw_exports()
        vop_set = compress(model, job.overestimation, job.method, progress=self.progress)
        vop_set = replace(vop_set, metadata=vop_set.metadata.with_details(step=key))
        vop_set.save(path, force=self.force)
        return vop_set

    def _proof(self, vop_set: VopSet, model: SarModel) -> tuple[dict[str, Any], bool]:
        path, certificate = self.job.folder / PROOF_FILE, self.job.folder / CERTIFICATE_FILE
        key = digest(__version__, vop_set.digest(), model.digest())
        if self._usable(path):
            record = _read_json(path)
            self._require_same(path, record.get("step"), key)
            # A record on disk is no proof; the certificate is, and rechecking it is quick.
            if record.get("holds") and certificate.exists():
                result = recheck(vop_set, model, certificate, progress=self.progress)
                return {**record, "holds": result.holds}, result.holds
        result = prove(vop_set, model, certificate_path=certificate, force=True, progress=self.progress)
        record = {"step": key, "summary": _timeless(result.summary()), **result.record()}
        write_text(path, json.dumps(record, indent=1, sort_keys=True) + "\n", force=True)
        return record, result.holds

    def _export_path(self, name: str) -> Path:
        return self.job.folder / f"vops-{name}{find(EXPORTERS, name).suffix}"

    def _withdraw_exports(self) -> None:
        # Hand-off files of an earlier set must not outlive it: somebody would load them.
        for name in self.job.formats:
            self._export_path(name).unlink(missing_ok=True)

    def _exports(self, vop_set: VopSet) -> dict[str, Path]:
        written = {}
        for name in self.job.formats:
            path = self._export_path(name)
            # Rewritten each time: cheaper than finding out whether it is still right.
            export(vop_set, path, name, force=True)
            written[name] = path
            _log.info("wrote %s, SHA-256 %s", path, file_digest(path))
        return written

    def _usable(self, path: Path) -> bool:
        return path.exists() and not self.force

    def _require_same(self, path: Path, found: object, wanted: str) -> None:
        if found != wanted:
            raise OutputError(
                f"{path} exists and was made from other inputs or options; use --force to "
                "replace it, or another [output] folder"
            )
        self.reused.append(path.name)
        _log.info("%s is up to date, reused", path)


def _timeless(text: str) -> list[str]:
    # Equal inputs give equal files: how long it took is no part of them.
    return [line for line in text.splitlines() if not line.startswith("time ")]


def _read_json(path: Path) -> dict[str, Any]:
    try:
        record = json.loads(path.read_text(encoding="utf-8"))
    except (OSError, ValueError) as error:
        raise InputError(f"{path}: not readable: {error}; remove it and run again") from error
    if not isinstance(record, dict):
        raise InputError(f"{path}: not a proof record; remove it and run again")
    return record
