"""The report: one page that a reviewer can read, print and keep without this tool and without a network connection.

In come the results of the earlier stages, any of which may be missing; out goes one self-contained HTML file with every
name escaped, every number with its unit, and pictures as inline SVG. It stands on no theorem: it repeats what the
certificate claims (theory 2, 3 and 10), says what was not run, and keeps simulation apart from proof.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from synth.report.page import Report, write_report

__all__ = ["Report", "write_report"]


def __getattr__(name: str) -> Any:
    """Load a public name when it is first asked for."""
    if name in __all__:
        from synth.report import page

        return getattr(page, name)
    raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
