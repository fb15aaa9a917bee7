"""The rules of the house: imports run one way, importing is cheap, files stay readable."""

from __future__ import annotations

import ast
import subprocess
import sys
from importlib import import_module
from pathlib import Path

import pytest

import synth

ROOT = Path(synth.__file__).parent
ORDER = ["base", "network", "gain", "local", "proof", "margin", "simulate", "handoff", "report"]
FILES = sorted(ROOT.rglob("*.py"))


def stage_of(module: str) -> str | None:
    parts = module.split(".")
    return parts[1] if parts[0] == "synth" and len(parts) > 1 and parts[1] in ORDER else None


def imported(tree: ast.AST) -> list[str]:
    names: list[str] = []
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            names += [alias.name for alias in node.names]
        elif isinstance(node, ast.ImportFrom) and node.module and node.level == 0:
            names += [f"{node.module}.{alias.name}" for alias in node.names]
        elif isinstance(node, ast.ImportFrom):
            raise AssertionError("imports inside synth are written in full, so that the order can be checked")
    return names


def backward(path: Path) -> list[str]:
    own = ORDER.index(path.relative_to(ROOT).parts[0])
    found = [stage_of(name) for name in imported(ast.parse(path.read_text(encoding="utf-8")))]
    outside = [
        name
        for name in imported(ast.parse(path.read_text(encoding="utf-8")))
        if name.startswith("synth.") and stage_of(name) is None
    ]
    return [stage for stage in found if stage is not None and ORDER.index(stage) > own] + outside


@pytest.mark.parametrize("path", [p for p in FILES if len(p.relative_to(ROOT).parts) > 1], ids=str)
def test_a_stage_imports_only_earlier_ones(path: Path) -> None:
    assert backward(path) == []


def test_the_rule_would_notice_a_backward_import(tmp_path: Path) -> None:
    tree = ast.parse("from synth.report import write_report\nimport synth.cli")
    stages = [stage_of(name) for name in imported(tree)]
    assert stages == ["report", None]


@pytest.mark.parametrize("command", ["import synth", "import synth.cli", "import synth.network, synth.proof"])
def test_importing_is_cheap(command: str) -> None:
    heavy = ["numpy", "scipy", "matplotlib", "pandas", "networkx", "xarray", "cvxpy", "control", "flint"]
    code = f"import sys\n{command}\nprint([m for m in {heavy} if m in sys.modules])"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"


def test_help_is_cheap() -> None:
    code = (
        "import sys\nfrom synth.cli import verbs\n"
        "try: verbs.main(['--help'], standalone_mode=False)\nexcept SystemExit: pass\n"
        "print([m for m in ('numpy', 'scipy', 'cvxpy', 'networkx') if m in sys.modules])"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip().splitlines()[-1] == "[]"


# The arithmetic of the sampled route is one file that is shipped as it is (docs/decisions/0001).
LONGER = {"proof/check_sampled.py": 500}


@pytest.mark.parametrize("path", FILES, ids=str)
def test_files_can_be_read_in_one_sitting(path: Path) -> None:
    most = LONGER.get(path.relative_to(ROOT).as_posix(), 450)
    assert path.read_text(encoding="utf-8").count("\n") <= most
    assert "util" not in path.stem


@pytest.mark.parametrize("path", FILES, ids=str)
def test_functions_stay_short(path: Path) -> None:
    long = [
        f"{node.name} ({node.end_lineno - node.lineno + 1} lines)"
        for node in ast.walk(ast.parse(path.read_text(encoding="utf-8")))
        if isinstance(node, ast.FunctionDef) and node.end_lineno and node.end_lineno - node.lineno + 1 > 75
    ]
    assert long == []


def test_stages_say_what_comes_in_and_goes_out() -> None:
    for stage in ORDER:
        text = ast.get_docstring(ast.parse((ROOT / stage / "__init__.py").read_text(encoding="utf-8")))
        assert text is not None, stage
        assert len(text.split()) > 15, f"{stage}: three sentences are wanted"


def test_the_compatibility_layer_of_control_is_not_used() -> None:
    for path in FILES:
        assert "control." + "matlab" not in path.read_text(encoding="utf-8")


def test_public_calls_of_the_contract_exist() -> None:
    for name in ("read", "design", "prove", "margin", "simulate", "hand_off", "verify"):
        assert callable(getattr(synth, name)), name

    # The names stay callable after the stages were imported as modules.
    assert callable(import_module("synth.margin"))
    assert callable(import_module("synth.simulate"))
