"""Values from outside the project, recomputed: what `tracker verify` prints."""

from tracker.verification.recomputed import Check, checks

__all__ = ["Check", "checks"]
