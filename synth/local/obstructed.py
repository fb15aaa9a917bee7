"""The outcome in which no local feedback whatever can work; found before any solve (theory (26))."""

from __future__ import annotations

from typing import TYPE_CHECKING

from synth.base.errors import SynthError

if TYPE_CHECKING:
    from synth.network import Obstruction


class ObstructionFound(SynthError):
    """No gains exist (exit code 1); ``obstruction`` says where, which signals are involved and what would help."""

    exit_code = 1

    def __init__(self, obstruction: Obstruction) -> None:
        """Take what ``synth.network.obstruction`` returned."""
        self.obstruction = obstruction
        super().__init__(f"no local feedback can settle this network: {obstruction.advice}")
