"""Makes damaged problem files: by bytes, by structure, and a list of known nasty ones."""

from __future__ import annotations

import copy
import random
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import yaml

from tests.network.files import CONVOY, GAP_ONLY, ROOT

EXAMPLES = ROOT / "tests" / "network" / "examples"
ORIGINALS = [CONVOY, GAP_ONLY, ROOT / "synth" / "network" / "starter.yaml", *sorted(EXAMPLES.glob("*.yaml"))]
PIECES = [
    b"{",
    b"}",
    b"[",
    b"]",
    b":",
    b": ",
    b"'",
    b'"',
    b"&a ",
    b"*a",
    b"!!",
    b"!!python/object:os.system ",
    b"1e999",
    b"1e-999",
    b".inf",
    b".nan",
    b"-",
    b"- ",
    b"\t",
    b"\n",
    b"\r",
    b"\r\n",
    b"\xff",
    b"\xfe\xff",
    b"\xef\xbb\xbf",
    b"\x00",
    b"\x1b[31m",
    b"\xed\xa0\x80",
    b"\xf0\x9f\x9a\x9a",
    b"\xe2\x80\xa8",
    b"**",
    b"**9",
    b"/0",
    b"0",
    b"~",
    b"#",
    b"|",
    b">",
    b"? ",
    b",",
    b"(",
    b")",
    b"((((((((",
    b"slot",
    b"9" * 50,
    b"9" * 2000,
    b"\xc3\xa4",
    b"%",
    b" +- ",
    b" .. ",
    b"---\n",
    b"...\n",
    b"<<: ",
    b"0x7f",
    b"abs(",
    b"sqrt(-1)",
    b"exp(900)",
    b"1/",
    b"lag",
    b"synth",
    b"\\",
    b"\\u0000",
]
ODD = [
    None,
    True,
    False,
    0,
    1,
    -1,
    3,
    10**400,
    -(10**30),
    0.1,
    1e300,
    1e-300,
    -0.0,
    "",
    " ",
    "yes",
    "1e999",
    ".nan",
    "0.5 s",
    "1/0",
    "1/3 m",
    "m/s^2",
    "m^99",
    "kg*",
    "hauler",
    "hauler.place",
    "a" * 5000,
    "x'",
    "(" * 500,
    "1+" * 300 + "1",
    "slot*slot",
    "slot/slot",
    "sqrt(slot)",
    "lag**12**12",
    "9" * 400,
    "\u202e",
    "\ud800",
    "\x00",
    "é",
    "🚚",
    [],
    {},
    [[]],
    [{}],
    {"": ""},
    {"in": "m"},
    {"in": "m", "band": 0},
    {"is": "slot"},
    ["slot", "slot"],
    [1, 2, 3],
    [[0, 1], [1]],
    "0.5 s +- 10%",
    "0 s +- 1 s",
    "0.1 .. 0.2 1/s",
    "-1 .. 1",
    "neighbour",
    "difference",
    "first",
    "units.csv",
    "../x",
    "/dev/zero",
    "nowhere.mat",
]


def damaged(data: bytes, chance: random.Random) -> bytes:
    """One to four changes: a byte, a digit, an insertion, a deletion, a piece moved; now and then another encoding."""
    for _ in range(chance.choice([1, 1, 1, 2, 4])):
        at = chance.randrange(len(data) + 1)
        kind = chance.randrange(6)
        if kind == 0:
            data = data[:at] + bytes([chance.randrange(256 if chance.randrange(4) == 0 else 128)]) + data[at + 1 :]
        elif kind >= 4:
            digits = [k for k, byte in enumerate(data) if 48 <= byte <= 57]
            at = chance.choice(digits or [0])
            data = data[:at] + chance.choice([b"0", b"1", b"7", b"-3", b"90"]) + data[at + 1 :]
        elif kind == 1:
            data = data[:at] + chance.choice(PIECES) + data[at:]
        elif kind == 2:
            data = data[:at] + data[at + chance.randint(1, 12) :]
        else:
            start = chance.randrange(len(data) + 1)
            data = data[:at] + data[start : start + chance.randint(1, 40)] + data[at:]
    if chance.randrange(40) == 0:
        coding = chance.choice(["utf-16", "utf-32", "latin-1", "utf-8-sig", "cp037"])
        data = data.decode("utf-8", "replace").encode(coding, "replace")
    return data.replace(b"\n", b"\r\n") if chance.randrange(20) == 0 else data


def spots(tree: Any, path: tuple[Any, ...] = ()) -> Iterator[tuple[Any, ...]]:
    """The path of every value in a tree of mappings and lists."""
    inside = tree.items() if isinstance(tree, dict) else enumerate(tree) if isinstance(tree, list) else ()
    for key, value in inside:
        yield (*path, key)
        yield from spots(value, (*path, key))


def rearranged(tree: Any, chance: random.Random) -> Any:
    """One to three changes of the structure: a value replaced, removed, moved, copied, or its key misspelt."""
    for _ in range(chance.choice([1, 1, 1, 2, 3])):
        all_spots = list(spots(tree))
        if not all_spots:
            return tree
        *above, key = chance.choice(all_spots)
        parent = tree
        for step in above:
            parent = parent[step]
        kind = chance.randrange(7)
        if kind == 6 and isinstance(parent[key], (int, float)):
            parent[key] = parent[key] * chance.choice([0, 2, -1, 0.3])
        elif kind <= 1 or kind == 6:
            parent[key] = copy.deepcopy(chance.choice(ODD))
        elif kind == 2:
            del parent[key]
        elif kind == 3 and isinstance(parent, dict):
            word = str(key)
            at = chance.randrange(len(word) + 1)
            parent[word[:at] + chance.choice(["", "x", "_", "é", word]) + word[at + 1 :]] = parent.pop(key)
        elif kind == 4:
            other: Any = tree
            for step in chance.choice(all_spots):
                try:
                    other = other[step]
                except (KeyError, IndexError, TypeError):
                    break
            parent[key] = copy.deepcopy(other) if len(repr(other)) < 20_000 else None
        elif isinstance(parent, list):
            parent.append(copy.deepcopy(parent[key]))
        else:
            parent[f"{key}_2"] = copy.deepcopy(parent[key])
    return tree


class _Plain(yaml.SafeDumper):
    """Writes equal objects out each time, without anchors."""

    def ignore_aliases(self, data: Any) -> bool:
        return True


def structured(text: str, chance: random.Random) -> bytes:
    """A problem whose structure was changed, written as YAML again."""
    tree = rearranged(yaml.safe_load(text), chance)
    written = yaml.dump(
        tree,
        Dumper=_Plain,
        allow_unicode=chance.random() < 0.5,
        default_flow_style=chance.choice([None, True, False]),
        sort_keys=False,
        width=chance.choice([40, 120, 10**6]),
    )
    return written.encode("utf-8", "surrogatepass")


def nasty() -> dict[str, bytes]:
    """Files made to hurt a reader."""
    convoy = CONVOY.read_text(encoding="utf-8")
    bomb = "a0: &a0 [x, x]\n" + "".join(f"a{k}: &a{k} [{', '.join([f'*a{k - 1}'] * 9)}]\n" for k in range(1, 30))
    equations = "\n".join(["slot': speed"] + [f"      t{k}': speed" for k in range(20_000)])
    states = ", ".join(f"s{k}: m" for k in range(3000))
    return {
        "deep lists": b"a: " + b"[" * 200_000,
        "deep mappings": b"{a: " * 100_000,
        "deep blocks": "\n".join(" " * k + "a:" for k in range(2000)).encode(),
        "deep dashes": b"- " * 100_000 + b"x",
        "alias bomb": bomb.encode(),
        "merge keys": b"a: &a {b: 1}\nc: {<<: *a}\n",
        "huge exponent": convoy.replace("limit: 2.5", "limit: 1e99999999999999999999").encode(),
        "tiny exponent": convoy.replace("limit: 2.5", "limit: 1e-99999999999999999999").encode(),
        "huge integer": convoy.replace("limit: 2.5", f"limit: {'9' * 1_000_000}").encode(),
        "huge hexadecimal": convoy.replace("limit: 2.5", f"limit: 0x{'f' * 1_000_000}").encode(),
        "huge decimals": convoy.replace("limit: 2.5", f"limit: 0.{'3' * 1_000_000}").encode(),
        "huge unit": convoy.replace("limit: 2.5", f"limit: 2.5 {'m*' * 100_000}m").encode(),
        "huge power of a unit": convoy.replace("limit: 2.5", "limit: 2.5 m^999999999").encode(),
        "huge power": convoy.replace("drive + slope", "drive + slope*9**9**9**9").encode(),
        "huge expression": convoy.replace("drive + slope", "drive" + " + slope" * 200_000).encode(),
        "deep expression": convoy.replace("drive + slope", "(" * 50_000 + "drive" + ")" * 50_000).encode(),
        "deep signs": convoy.replace("drive + slope", "-" * 1_900 + "drive").encode(),
        "long line": convoy.encode() + b"# " + b"x" * 4_000_000,
        "long title": convoy.replace("Ore convoy", "x" * 4_000_000).encode(),
        "long name": convoy.replace("slope", "s" * 1_000_000).encode(),
        "long key": b"k" * 4_000_000 + b": 1\n",
        "many keys": "".join(f"k{k}: 1\n" for k in range(90_000)).encode(),
        "many values": b"a: [" + b"1, " * 300_000 + b"]",
        "many states": convoy.replace("slot: m,", f"slot: m, {states},").encode(),
        "many equations": convoy.replace("slot': speed", equations).encode(),
        "same key": b"synth: 1\n" * 50_000,
        "zero bytes": convoy.replace("slope", "slo\0pe").encode(),
        "only zeros": bytes(100_000),
        "lone surrogate": convoy.encode().replace(b"Ore", b"\xed\xa0\x80"),
        "escaped surrogate": convoy.replace("title: Ore", 'title: "\\ud800" #').encode(),
        "byte order mark": b"\xef\xbb\xbf" + convoy.encode(),
        "two marks": b"\xef\xbb\xbf" * 2 + convoy.encode(),
        "carriage returns": convoy.replace("\n", "\r").encode(),
        "both returns": convoy.replace("\n", "\r\n").encode(),
        "line separators": convoy.replace("\n", "\u2028").encode(),
        "sixteen bits": convoy.encode("utf-16"),
        "thirty-two bits": convoy.encode("utf-32"),
        "latin letters": convoy.replace("Ore", "Größe").encode("latin-1"),
        "nothing": b"",
        "spaces": b" " * 1_000_000,
        "line ends": b"\n" * 1_000_000,
        "tabs": b"\t" * 1_000_000,
        "questions": b"? " * 50_000,
        "quotes": b"'" * 999_999,
        "too large": b"#" * 5_000_001,
        "picture": b"\x89PNG\r\n\x1a\n" + bytes(range(256)) * 40,
    }


def original_texts() -> list[tuple[Path, str]]:
    """The files that are damaged, with their texts."""
    return [(path, path.read_text(encoding="utf-8")) for path in ORIGINALS]
