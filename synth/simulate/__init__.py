"""Finite sections of the network, run in time against disturbances and against an adversary that tries to break the
proof.

In come a network, its gains and (if there is one) its certificate; out goes a frozen Trajectory with peaks,
amplification, settling
and the number of samples above a proven bound. It stands on the exact solution of linear systems over a step (matrix
exponential),
on the worst-case inputs of the peak gain (theory (1) and (2)) and on nothing else: a simulation supports a proof, it
never is one.

The package is callable: ``synth.simulate(network, design, certificate)`` runs the stage.
"""

from __future__ import annotations

import sys
from types import ModuleType
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from synth.simulate.run import simulate
    from synth.simulate.trajectory import Run, Trajectory

__all__ = ["Run", "Trajectory", "simulate"]

_WHERE = {"simulate": "run", "Run": "trajectory", "Trajectory": "trajectory"}


def __getattr__(name: str) -> Any:
    """Load a public name when it is first asked for."""
    if name in _WHERE:
        from importlib import import_module

        return getattr(import_module(f"{__name__}.{_WHERE[name]}"), name)
    raise AttributeError(f"module {__name__!r} has no attribute {name!r}")


class _Stage(ModuleType):
    """A module that can be called: the stage and the call that runs it share one name."""

    def __call__(self, *args: Any, **options: Any) -> Any:
        """Run the stage; see :func:`synth.simulate.run.simulate` for the arguments."""
        from synth.simulate.run import simulate

        return simulate(*args, **options)


sys.modules[__name__].__class__ = _Stage
