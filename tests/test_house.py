"""The house keeps its rules: imports point down, files and functions stay small, docs and card match the tree."""

from __future__ import annotations

import ast
import re
import subprocess
import sys
import tomllib
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[1]
SOURCES = sorted((ROOT / "explorer").rglob("*.py"))
CARD = {"README.md", "DEVELOPERS.md", "LICENSE", "pyproject.toml", "explorer", "configs", "tests", "outputs"}


def run(*command: str) -> subprocess.CompletedProcess[str]:
    return subprocess.run([sys.executable, "-m", *command], cwd=ROOT, capture_output=True, text=True, check=False)


def functions(tree: ast.AST) -> list[ast.FunctionDef]:
    return [node for node in ast.walk(tree) if isinstance(node, ast.FunctionDef)]


def test_imports_point_down():
    done = subprocess.run(
        [Path(sys.executable).with_name("lint-imports"), "--no-cache"],
        cwd=ROOT,
        capture_output=True,
        text=True,
        check=False,
    )
    assert done.returncode == 0, done.stdout


def test_style():
    done = run("ruff", "check", ".", "--no-cache")
    assert done.returncode == 0, done.stdout


def test_types():
    done = run("mypy", "--no-incremental")
    assert done.returncode == 0, done.stdout


@pytest.mark.parametrize("path", SOURCES, ids=lambda path: str(path.relative_to(ROOT)))
def test_files_and_functions_stay_small(path):
    text = path.read_text(encoding="utf-8")
    assert text.count("\n") <= 350
    long = [node.name for node in functions(ast.parse(text)) if node.end_lineno - node.lineno > 70]
    assert not long


@pytest.mark.parametrize("path", SOURCES, ids=lambda path: str(path.relative_to(ROOT)))
def test_nothing_is_executed_and_nothing_is_left_over(path):
    tree = ast.parse(path.read_text(encoding="utf-8"))
    called = {node.func.id for node in ast.walk(tree) if isinstance(node, ast.Call) and isinstance(node.func, ast.Name)}
    assert not called & {"eval", "exec", "compile", "__import__"}
    assert not re.search(r"\b(TODO|FIXME|XXX|NotImplementedError)\b", path.read_text(encoding="utf-8"))


def test_top_level_is_the_card():
    listed = subprocess.run(["git", "ls-files"], cwd=ROOT, capture_output=True, text=True, check=True).stdout.split()
    top = {name.split("/")[0] for name in listed if name}
    assert {name for name in top if not name.startswith(".")} == CARD


def test_documented_floors_are_the_folders():
    layers = tomllib.loads((ROOT / "pyproject.toml").read_text())["tool"]["importlinter"]["contracts"][0]["layers"]
    named = {part.strip().removeprefix("explorer.") for layer in layers for part in layer.split("|")}
    there = {path.name.removesuffix(".py") for path in (ROOT / "explorer").iterdir() if not path.name.startswith("__")}
    assert named == there
    for folder in named:
        assert f"`{folder}" in (ROOT / "DEVELOPERS.md").read_text(encoding="utf-8"), folder


def test_readme_names_every_command_and_study():
    from explorer.cli import main

    readme = (ROOT / "README.md").read_text(encoding="utf-8")
    for command in main.commands:
        assert f"`explorer {command}" in readme
    for study in (ROOT / "configs").glob("*.toml"):
        assert f"configs/{study.name}" in readme
