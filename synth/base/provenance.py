"""Where a result came from: hashes of what went in and the versions of what worked on it."""

from __future__ import annotations

import hashlib
import json
import platform
from collections.abc import Mapping
from dataclasses import dataclass, field
from importlib import metadata

_WITNESSES = ("numpy", "scipy", "cvxpy", "clarabel", "python-flint")


def sha256(data: bytes | str) -> str:
    """Hexadecimal SHA-256 of bytes, or of text as UTF-8."""
    return hashlib.sha256(data.encode("utf-8") if isinstance(data, str) else data).hexdigest()


def canonical(value: object) -> str:
    """JSON with sorted keys, no spaces and no NaN: equal values give equal texts."""
    return json.dumps(value, sort_keys=True, separators=(",", ":"), ensure_ascii=False, allow_nan=False)


def versions() -> dict[str, str]:
    """Versions of this package, Python and the numerical libraries that are installed."""
    found = {"python": platform.python_version()}
    for name in ("localgain", *_WITNESSES):
        try:
            found[name] = metadata.version(name)
        except metadata.PackageNotFoundError:
            continue
    return found


@dataclass(frozen=True)
class Provenance:
    """Hash of the network a result is about, the settings that shaped it, and the versions used."""

    network_hash: str
    settings: Mapping[str, object] = field(default_factory=dict)
    versions: Mapping[str, str] = field(default_factory=versions)

    def as_dict(self) -> dict[str, object]:
        """Plain data for JSON."""
        return {
            "network_hash": self.network_hash,
            "settings": dict(self.settings),
            "versions": dict(self.versions),
        }
