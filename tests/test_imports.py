"""Imports run only downwards, the two branches never meet but in pairing, and importing the package is light."""

import ast
import os
import subprocess
import sys
from pathlib import Path

import pytest

PACKAGE = Path(__file__).parent.parent / "manybody"

ALLOWED = {
    "model": {"model"},
    "classical": {"model", "classical"},
    "quantum": {"model", "quantum"},
    "pairing": {"model", "classical", "quantum", "pairing"},
    "workflow": {"model", "classical", "quantum", "pairing", "results", "workflow"},
    "results": {"results"},
    "command": {"model", "classical", "quantum", "pairing", "workflow", "results", "command"},
    "__init__": {"model", "classical", "quantum", "pairing", "workflow", "results"},
}
HEAVY = {
    "xarray",
    "distributed",
    "dask",
    "quimb",
    "matplotlib",
    "numba",
    "pandas",
    "h5netcdf",
    "jinja2",
    "rich",
    "cvxpy",
}


def room(path: Path) -> str:
    parts = path.relative_to(PACKAGE).parts
    return parts[0].removesuffix(".py")


def imported(tree: ast.AST):
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            yield from (alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, "imports are absolute, so that this test can read them"
            yield node.module
            if node.module == "manybody":
                yield from (f"manybody.{alias.name}" for alias in node.names)


@pytest.mark.parametrize("path", sorted(PACKAGE.rglob("*.py")), ids=lambda p: str(p.relative_to(PACKAGE)))
def test_imports_run_only_downwards(path):
    for name in imported(ast.parse(path.read_text(encoding="utf-8"))):
        parts = name.split(".")
        if parts[0] == "manybody" and len(parts) > 1 and parts[1] != "__version__":
            assert parts[1] in ALLOWED[room(path)], f"{room(path)} must not import {name}"


def loaded_by(module: str) -> set[str]:
    code = f"import sys; old = set(sys.modules); import {module}; print(*(set(sys.modules) - old))"
    run = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    return {name.split(".")[0] for name in run.stdout.split()}


def test_importing_the_package_loads_no_library():
    assert not {"numpy", "scipy", *HEAVY} & loaded_by("manybody")


def test_the_command_and_the_model_load_no_heavy_library():
    assert not HEAVY & loaded_by("manybody.command")
    assert not HEAVY & loaded_by("manybody.model.quantization")


def test_help_answers_at_once():
    # 0.4 s is what a user feels; twice that of processor time here, since other machines are slower
    before = os.times()
    subprocess.run([sys.executable, "-m", "manybody.command", "--help"], check=True, capture_output=True)
    after = os.times()
    assert after.children_user + after.children_system - before.children_user - before.children_system < 0.8
