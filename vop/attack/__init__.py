"""Search for excitations that break a set; shares nothing with the proof."""

from vop.attack.attack import attack
from vop.attack.result import AttackResult

__all__ = ["AttackResult", "attack"]
