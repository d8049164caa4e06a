"""The house rules as tests: lint, types, layers, file and function sizes."""

import ast
import subprocess
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).parent.parent
SOURCES = sorted((ROOT / "morph").rglob("*.py"))

pytestmark = pytest.mark.quick


def _run(*command: str) -> None:
    done = subprocess.run([sys.executable, "-m", *command], cwd=ROOT, capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stdout + done.stderr


def test_lint_is_clean():
    _run("ruff", "check", "morph", "tests", "samples")
    _run("ruff", "format", "--check", "morph", "tests", "samples")


def test_types_are_clean():
    _run("mypy")


def test_layers_are_kept():
    done = subprocess.run(
        [sys.executable, "-c", "from importlinter.cli import lint_imports_command as c; c(['--no-cache'])"],
        cwd=ROOT,
        capture_output=True,
        text=True,
        check=False,
    )
    assert done.returncode == 0 and "0 broken" in done.stdout, done.stdout + done.stderr


@pytest.mark.parametrize("source", SOURCES, ids=lambda p: str(p.relative_to(ROOT)))
def test_sizes_are_kept(source):
    text = source.read_text()
    assert text.count("\n") <= 400, f"{source}: split by idea"
    for node in ast.walk(ast.parse(text)):
        if isinstance(node, ast.FunctionDef):
            own = node.end_lineno - node.lineno - len((ast.get_docstring(node, False) or "").splitlines())
            assert own <= 62, f"{source}:{node.name} has {own} lines"
