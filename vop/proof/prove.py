"""Search for weights, then prove: the two bounds of a set against the matrices it stands for."""

from __future__ import annotations

import os
import time

import numpy as np

from vop.errors import InputError
from vop.hermitian import identity, pack, round_outward
from vop.progress import Progress, silent
from vop.proof.certificate import Certificate
from vop.proof.certify import Certified, certify_cover
from vop.proof.cover import Cover
from vop.proof.result import LISTED, ProofResult, Statement, Unproved
from vop.proof.search import WITNESSES, Columns, Found, search_among_many, search_cover
from vop.proof.witness import examine
from vop.proof.worst_case import Attained, exact_quotient_reaches, find_attaining
from vop.sarmodel import SarModel
from vop.storage import refuse_existing, require_finite
from vop.vopset import VopSet


def prove(
    vop_set: VopSet,
    model: SarModel,
    *,
    progress: Progress = silent,
    certificate_path: str | os.PathLike[str] | None = None,
    force: bool = False,
) -> ProofResult:
    """Prove both bounds of ``vop_set`` for every matrix of ``model`` and every VOP.

    1. No underestimation: each Q_v ⪯ Σ c_k A_k with c ≥ 0, Σ c = 1, so that for every excitation and
       every time-averaged covariance X, tr(Q_v X) ≤ max_k tr(A_k X). Such weights exist exactly if
       no X breaks the bound (minimax), so that nothing true is lost by asking for them.
    2. Bounded overestimation: each A_k ⪯ Σ c_v Q_v + εS likewise.
    3. The worst case that ε refers to is attained by a matrix of the model.

    Where S is not worst case × identity, S ⪯ Σ c_v Q_v is tried too: if proved, ε bounds the relative
    overestimation; if not, that is no fault, and the result says which.

    The weights are searched for with floating-point optimisation; the inequalities are then proved
    by :mod:`vop.kernels.proof_psd` (Rump 2006), whose outcome no tolerance loosens. What is proved
    are the float32 numbers in ``vop_set`` and ``model``, which is what files hold.

    Parameters
    ----------
    certificate_path : write the weights there, if everything is proved (:func:`recheck`).
    force : replace a certificate that exists.

    Raises
    ------
    InputError
        Where set and model differ in channels, measure or reference, or the set holds NaN or infinity.
    OutputError
        Where the certificate exists and not ``force``, or cannot be written.
    """
    began = time.perf_counter()
    _require_fitting(vop_set, model)
    if certificate_path is not None:
        refuse_existing(certificate_path, force)
    scale = vop_set.worst_case
    nothing = np.zeros(vop_set.n_channels**2)
    first = search_cover("proof: searching", model.packed, Columns(vop_set.packed), nothing, scale, progress)
    second = _search_overestimation(vop_set, model, progress)
    attained = find_attaining(model.packed, vop_set.worst_case, progress)
    relative = _search_relative(vop_set, model)
    certificate = Certificate(vop_set.digest(), model.digest(), first.cover, second.cover, relative, attained)
    result = _certified(vop_set, model, certificate, began, progress, (first, second))
    if certificate_path is not None and result.holds:
        certificate.save(certificate_path, vop_set.metadata, force)
    return result


def recheck(
    vop_set: VopSet,
    model: SarModel,
    certificate: str | os.PathLike[str],
    *,
    progress: Progress = silent,
) -> ProofResult:
    """Prove again from the weights of a certificate: one pass, no search.

    Raises
    ------
    InputError
        Where the certificate is damaged, altered, or about another set or model.
    """
    began = time.perf_counter()
    _require_fitting(vop_set, model)
    found = Certificate.load(certificate, len(model), len(vop_set), vop_set.n_channels)
    for what, ours, theirs in (
        ("set", vop_set.digest(), found.set_digest),
        ("model", model.digest(), found.model_digest),
    ):
        if ours != theirs:
            raise InputError(
                f"{certificate}: is about another {what} (digest {theirs[:12]}…, this one is {ours[:12]}…)"
            )
    return _certified(vop_set, model, found, began, progress, None)


def _require_fitting(vop_set: VopSet, model: SarModel) -> None:
    for what, packed in (("set", vop_set.packed), ("model", model.packed)):
        if packed.dtype != np.float32:
            raise InputError(
                f"the {what} holds {packed.dtype}; what is proved are float32 numbers as in files"
            )
    require_finite(vop_set.packed, "the set: vops/packed")
    require_finite(_overestimation_row(vop_set), "the set: overestimation matrix")
    if vop_set.metadata.channel_names != model.metadata.channel_names:
        raise InputError(
            f"the set has channels {', '.join(vop_set.metadata.channel_names)}, "
            f"the model {', '.join(model.metadata.channel_names)}; they do not belong together"
        )
    if vop_set.metadata.measure != model.metadata.measure:
        raise InputError(
            f"the set holds {vop_set.metadata.measure}, the model {model.metadata.measure}; prove a set "
            "against the model it was made from"
        )
    if vop_set.metadata.reference != model.metadata.reference:
        raise InputError(
            f"the set refers to {vop_set.metadata.reference}, the model to {model.metadata.reference}; "
            "they do not belong together"
        )


def _overestimation_row(vop_set: VopSet) -> np.ndarray:
    # One rounding per number, which the proof allows for.
    return vop_set.overestimation * pack(vop_set.overestimation_matrix)


def _search_overestimation(vop_set: VopSet, model: SarModel, progress: Progress) -> Found:
    """Try the recorded cores first; where one is missing or wrong, search."""
    extra = _overestimation_row(vop_set)
    hint = np.asarray(vop_set.core_index)
    hint = np.where((hint >= 0) & (hint < len(model)), hint, -1)
    cover = Cover.single(hint)
    proved = certify_cover("proof: cores", vop_set.packed, model.packed, extra, cover, progress).proved
    bound, witnesses = np.where(proved, np.inf, np.nan), {}
    open_rows = np.flatnonzero(~proved)
    parts = []
    for done, r in enumerate(open_rows):
        one = search_among_many(vop_set.packed[r], model.packed, extra, vop_set.worst_case)
        parts.append(one.cover)
        bound[r] = one.bound[0]
        if 0 in one.witnesses:
            witnesses[int(r)] = one.witnesses[0]
        progress("proof: searching cores", done + 1, len(open_rows))
    return Found(cover.replaced(open_rows, parts), bound, witnesses)


def _certified(
    vop_set: VopSet,
    model: SarModel,
    certificate: Certificate,
    began: float,
    progress: Progress,
    found: tuple[Found, Found] | None,
) -> ProofResult:
    nothing, extra = np.zeros(vop_set.n_channels**2), _overestimation_row(vop_set)
    statements = []
    for label, targets, columns, added, cover, search in (
        ("proof: matrices", model.packed, vop_set.packed, nothing, certificate.underestimation, 0),
        ("proof: VOPs", vop_set.packed, model.packed, extra, certificate.overestimation, 1),
    ):
        done = certify_cover(label, targets, columns, added, cover, progress)
        unproved = _unproved(
            done, targets, columns, added, found[search] if found else None, vop_set.worst_case
        )
        statements.append(_statement(done, cover, unproved, vop_set.worst_case))
    relative = certify_cover(
        "proof: S", _relative_target(vop_set), model.packed, nothing, certificate.relative_bound, progress
    )
    attained: Attained = certificate.worst_case
    reaches = attained.row >= 0 and exact_quotient_reaches(
        np.asarray(model.packed[attained.row]), attained.excitation, vop_set.worst_case
    )
    return ProofResult(
        underestimation=statements[0],
        overestimation=statements[1],
        worst_case_attained=reaches,
        worst_case_index=attained.row if reaches else -1,
        relative=bool(relative.proved[0]),
        bound_text=_bound_text(vop_set, bool(relative.proved[0])),
        set_digest=certificate.set_digest,
        model_digest=certificate.model_digest,
        seconds=time.perf_counter() - began,
    )


def _statement(done: Certified, cover: Cover, unproved: tuple[Unproved, ...], worst_case: float) -> Statement:
    terms = cover.terms()[done.proved]
    return Statement(
        n_targets=len(done.proved),
        n_proved=int(done.proved.sum()),
        n_single=int((terms == 1).sum()),
        most_terms=int(terms.max(initial=0)),
        margin=done.margin / worst_case,
        margin_index=done.row,
        unproved=unproved,
    )


def _unproved(
    done: Certified,
    targets: np.ndarray,
    columns: np.ndarray,
    extra: np.ndarray,
    found: Found | None,
    worst_case: float,
) -> tuple[Unproved, ...]:
    rows = np.flatnonzero(~done.proved)
    if found is None:
        return tuple(Unproved(int(r), float("nan"), None, None, float("nan")) for r in rows[:LISTED])
    rows = rows[np.argsort(found.bound[rows], kind="stable")]
    items = []
    for place, r in enumerate(rows[:LISTED]):
        bound = float(found.bound[r])
        if place < WITNESSES and bound < 0:
            witness = found.witnesses[int(r)]
            items.append(examine(int(r), targets[r], columns, extra, bound, witness, worst_case))
        else:
            items.append(Unproved(int(r), -bound / worst_case, None, None, float("nan")))
    return tuple(items)


def _is_identity(vop_set: VopSet) -> bool:
    scaled = vop_set.worst_case * identity(vop_set.n_channels)
    return np.array_equal(pack(vop_set.overestimation_matrix), scaled)


def _relative_target(vop_set: VopSet) -> np.ndarray:
    """S as a float32 row that is nowhere smaller, (1, n²): what covers it covers S."""
    return round_outward(pack(vop_set.overestimation_matrix)[None])


def _search_relative(vop_set: VopSet, model: SarModel) -> Cover:
    """Weights of S ⪯ Σ c_v Q_v, which would make ε a relative bound; an open row where there are none."""
    if _is_identity(vop_set):
        # No combination exceeds the worst case in every direction, save where some Q is S itself.
        return Cover.single(np.array([-1]))
    nothing = np.zeros(vop_set.n_channels**2)
    target = _relative_target(vop_set)[0]
    return search_among_many(target, model.packed, nothing, vop_set.worst_case).cover


def _bound_text(vop_set: VopSet, relative: bool) -> str:
    unit = vop_set.metadata.matrix_unit
    eps, worst = vop_set.overestimation, vop_set.worst_case
    if _is_identity(vop_set):
        return f"at most {eps:g} × worst case × ‖w‖² above the model's maximum, {eps * worst:.6g} {unit}"
    if relative:
        return f"at most {100 * eps:g} % of the model's maximum above it, for every w: S ⪯ Σ c Q is proved"
    # Rounding of the eigenvalue is far below the digits printed, and upward by them.
    largest = float(np.linalg.eigvalsh(vop_set.overestimation_matrix)[-1]) * (1 + 1e-5)
    return (
        f"at most {eps:g} × wᴴSw above the model's maximum, no more than {eps * largest:.6g} {unit}; "
        "S ⪯ Σ c Q is not proved, so that ε is no share of the model's maximum"
    )
