"""Progress lines on standard error; silent unless the command line turns them on."""

from __future__ import annotations

from collections.abc import Callable

Listener = Callable[[str], None]


def silent(_: str) -> None:
    """Ignore the message; the default of every library call."""
