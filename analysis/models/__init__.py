"""The tables of what we conclude. All but the recompute request are insert-only."""

from .protocols import Protocol
from .requests import RecomputeRequest
from .syntheses import Answer, Effect, Synthesis

__all__ = ["Answer", "Effect", "Protocol", "RecomputeRequest", "Synthesis"]
