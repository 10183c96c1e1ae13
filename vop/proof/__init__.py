"""Both bounds of a set, proved in floating point by code that shares nothing with compression."""

from vop.proof.prove import prove, recheck
from vop.proof.result import ProofResult, Statement, Unproved

__all__ = ["ProofResult", "Statement", "Unproved", "prove", "recheck"]
