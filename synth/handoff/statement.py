"""Where the files of a bundle came from and how to see that none was changed: provenance statement and manifest."""

from __future__ import annotations

from collections.abc import Mapping

from synth.base.provenance import sha256, versions

MANIFEST = "SHA256SUMS"
PROVENANCE = "provenance.json"


def manifest(files: Mapping[str, bytes]) -> str:
    """Lines ``hash  name`` sorted by name, the form that ``sha256sum -c`` reads."""
    return "".join(f"{sha256(files[name])}  {name}\n" for name in sorted(files))


def provenance(
    files: Mapping[str, bytes],
    network_hash: str,
    certificate_hash: str,
    proven_continuous: bool,
    proven_as_flashed: bool = False,
) -> dict[str, object]:
    """An in-toto statement (version 1) as plain JSON about every file but itself and the manifest.

    No date and no machine name, so that the same inputs give the same bytes. Licences are SPDX identifiers:
    the checker is part of the tool (MIT); the licence of the tables is for their owner to choose.
    """
    return {
        "_type": "https://in-toto.io/Statement/v1",
        "subject": [{"name": name, "digest": {"sha256": sha256(files[name])}} for name in sorted(files)],
        "predicateType": "urn:localgain:handoff:1",
        "predicate": {
            "network_sha256": network_hash,
            "certificate": certificate_hash,
            "proven_continuous": proven_continuous,
            "proven_as_flashed": proven_as_flashed,
            "versions": dict(sorted(versions().items())),
            "spdx": {
                name: "SPDX-License-Identifier: "
                + ("MIT" if name.startswith("check") and name.endswith(".py") else "NOASSERTION")
                for name in sorted(files)
            },
        },
    }
