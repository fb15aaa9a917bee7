"""Make one file of the parts of the stand-alone checker; equal parts give equal bytes."""

from __future__ import annotations

import ast
from importlib import resources

PARTS = (
    "reading", "arithmetic", "units", "wiring", "edges", "description", "flow", "evidence", "peak_route",
    "storage_route", "claims", "main",
)  # fmt: skip
HEAD = '''#!/usr/bin/env python3
"""Re-derive everything a certificate claims, in exact arithmetic, with nothing but Python's standard library.

    python check.py certificate.json        prints "verified" (exit code 0) or the reasons why not (1; 2: no such file)

Nothing in the file is believed. From its model, gains and links this program forms the closed units itself, and what
arrives at them in every description (pattern, edges, rules, members), and then (numbers in brackets: docs/theory)
  * both routes: needs P > 0 and A'P + PA + 2aP < 0 (storage: the larger matrix (S)), by exact LDL' elimination;
  * peak route: encloses every peak gain |F| + integral |h e^(A+alpha)t d| dt, and sup_t |h e^At|_1, by Taylor cells in
    integer arithmetic; the P-norm of a free response never grows, which bounds remainders, rounding and the tail;
  * storage route: bounds the rows of (6) by comparing squares of rationals;
  * bounds radius, C, alpha, G, every peak and the region where limits hold, and compares them with what is stated:
    a number that is too good is refused, and so is one more than 0.001 % worse than derived (it is not this proof's).
The sentences of a certificate are made here from its numbers and must agree letter for letter.

The parts below stand in the order in which they use each other.
"""
'''
TAIL = """

if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
"""


def checker_text() -> str:
    """The stand-alone checker as one file: the imports of all parts, then the parts without theirs, each under a rule.

    Law: running the file gives the verdicts of synth.proof.check; no name is defined by two parts (a test holds both).
    """
    imports: dict[str, set[str]] = {"sys": set()}
    bodies = []
    for part in PARTS:
        source = resources.files("synth.proof.checking").joinpath(f"{part}.py").read_text(encoding="utf-8")
        lines = source.splitlines()
        tree = ast.parse(source)
        first = 0
        for node in tree.body:
            if isinstance(node, ast.Import):
                for alias in node.names:
                    imports.setdefault(alias.name, set())
            elif isinstance(node, ast.ImportFrom):
                if node.module not in ("__future__", None) and not str(node.module).startswith("synth."):
                    imports.setdefault(str(node.module), set()).update(alias.name for alias in node.names)
            elif not isinstance(node, ast.Expr):
                break
            first = node.end_lineno or 0
        title = (ast.get_docstring(tree) or part).split("\n\n")[0].replace("\n", " ")
        notes = (ast.get_docstring(tree) or "").split("\n\n")[1:]
        rule = [f"# {'-' * 60} {part.replace('_', ' ')}", *(f"# {line}" for line in [title])]
        rule += [f"# {line}" if line else "#" for note in notes for line in ["", *note.splitlines()]]
        bodies.append("\n".join([*rule, "", *lines[first:]]).rstrip())
    plain = sorted(name for name, names in imports.items() if not names)
    some = sorted(name for name, names in imports.items() if names)
    head = [f"import {name}" for name in plain]
    head += [f"from {name} import {', '.join(sorted(imports[name]))}" for name in some]
    return "\n".join([HEAD, "from __future__ import annotations", "", *head, "", ""]) + "\n\n\n".join(bodies) + TAIL
