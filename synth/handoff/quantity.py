"""The unit of a gain as readable text (see synth.base.unit_text, where it is worked out)."""

from __future__ import annotations

from synth.base.unit_text import quotient

__all__ = ["quotient"]
