"""Descriptions of gains.csv that other programs understand: a Frictionless data package and W3C CSVW metadata."""

from __future__ import annotations

from synth.handoff.table import COLUMNS, SIGN_CONVENTION, GainRow

_MEANING = {
    "kind": "Kind of unit the gain belongs to; every unit of the kind uses the same gains.",
    "actuator": "Actuator command u that the gain adds to.",
    "signal": "Sensor signal y that the gain multiplies.",
    "gain": f"Entry of K in {SIGN_CONVENTION}, exact; a fraction such as 1/3 where no finite decimal exists.",
    "gain_unit": "Unit of the gain: actuator unit divided by signal unit.",
    "actuator_unit": "Unit of the actuator command.",
    "signal_unit": "Unit of the sensor signal.",
    "sign_convention": f"Always {SIGN_CONVENTION}: the products are added, the sign is in the gain.",
    "period_s": "Sample period of the controller in seconds; empty where none was declared.",
    "certificate_sha256": "SHA-256 of the file certificate.json in this folder.",
}
_REQUIRED = ("kind", "actuator", "signal", "gain", "sign_convention")
_KEY = ["kind", "actuator", "signal"]
_HASH_PATTERN = "[0-9a-f]{64}"


def _all_decimal(rows: tuple[GainRow, ...]) -> bool:
    return all("/" not in row.gain for row in rows)


def data_package(title: str, rows: tuple[GainRow, ...], csv_bytes: bytes, csv_sha256: str) -> dict[str, object]:
    """The Frictionless descriptor of the folder's table; ``gain`` is a number unless a fraction occurs in it."""
    return {
        "name": "localgain-gains",
        "title": f"Local feedback gains: {title}",
        "profile": "tabular-data-package",
        "resources": [
            {
                "name": "gains",
                "path": "gains.csv",
                "profile": "tabular-data-resource",
                "format": "csv",
                "mediatype": "text/csv",
                "encoding": "utf-8",
                "bytes": len(csv_bytes),
                "hash": f"sha256:{csv_sha256}",
                "dialect": {
                    "delimiter": ",",
                    "lineTerminator": "\r\n",
                    "quoteChar": '"',
                    "doubleQuote": True,
                    "header": True,
                },
                "schema": {
                    "fields": [_field(name, rows) for name in COLUMNS],
                    "primaryKey": _KEY,
                    "missingValues": [""],
                },
            }
        ],
    }


def _field(name: str, rows: tuple[GainRow, ...]) -> dict[str, object]:
    """One Frictionless field descriptor."""
    constraints: dict[str, object] = {"required": True} if name in _REQUIRED else {}
    kind = "string"
    if name == "period_s" or (name == "gain" and _all_decimal(rows)):
        kind = "number"
    if name == "sign_convention":
        constraints["enum"] = [SIGN_CONVENTION]
    if name == "certificate_sha256":
        constraints["pattern"] = _HASH_PATTERN
    return {"name": name, "type": kind, "description": _MEANING[name], "constraints": constraints}


def csvw(title: str, rows: tuple[GainRow, ...]) -> dict[str, object]:
    """CSVW metadata of gains.csv (W3C Recommendation "Metadata Vocabulary for Tabular Data", 2015)."""
    columns: list[dict[str, object]] = []
    for name in COLUMNS:
        datatype: object = "string"
        if name == "period_s" or (name == "gain" and _all_decimal(rows)):
            datatype = "decimal"
        if name == "certificate_sha256":
            datatype = {"base": "string", "format": _HASH_PATTERN}
        columns.append(
            {
                "name": name,
                "titles": name,
                "datatype": datatype,
                "required": name in _REQUIRED,
                "dc:description": _MEANING[name],
            }
        )
    return {
        "@context": ["http://www.w3.org/ns/csvw", {"@language": "en"}],
        "url": "gains.csv",
        "dc:title": f"Local feedback gains: {title}",
        "dialect": {"delimiter": ",", "header": True, "encoding": "utf-8", "lineTerminators": ["\r\n"]},
        "tableSchema": {"columns": columns, "primaryKey": _KEY},
    }
