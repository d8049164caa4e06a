"""Every code a user can meet is explained, is really given by the source, and every error is raised in a test."""

import ast
import re
from functools import cache
from pathlib import Path

import pytest

from morph.core.codes import explanations

pytestmark = pytest.mark.quick

ROOT = Path(__file__).parent.parent
KIND_OF_CALL = {
    "MorphError": "error",
    "InputError": "error",
    "SettingError": "error",
    "GeometryError": "error",
    "FlowError": "error",
    "ExportError": "error",
    "refuse": "error",
    "Verdict": "verdict",
    "Notice": "warning",
}
FORM = re.compile(r"[a-z0-9]+(-[a-z0-9]+)*")


def _name(call):
    return call.func.id if isinstance(call.func, ast.Name) else getattr(call.func, "attr", "")


def _code_of(call):
    """The first argument, or the keyword `code`, of a call that gives a code; None when there is none."""
    for keyword in call.keywords:
        if keyword.arg == "code":
            return keyword.value
    return call.args[0] if call.args else None


@cache
def _trees():
    return {path: ast.parse(path.read_text()) for path in sorted((ROOT / "morph").rglob("*.py"))}


def _given():
    """(file and line, kind, code) of every code written out where an error, verdict or notice is made."""
    for path, tree in _trees().items():
        for node in ast.walk(tree):
            if isinstance(node, ast.Call) and _name(node) in KIND_OF_CALL:
                code = _code_of(node)
                if isinstance(code, ast.Constant) and isinstance(code.value, str):
                    yield f"{path.relative_to(ROOT)}:{node.lineno}", KIND_OF_CALL[_name(node)], code.value


def _texts(tree):
    """Every text in a tree, but docstrings; the parts of an f-string stand as a pattern."""
    docstrings = {
        id(node.body[0].value)
        for node in ast.walk(tree)
        if isinstance(node, ast.Module | ast.FunctionDef | ast.ClassDef)
        and node.body
        and isinstance(node.body[0], ast.Expr)
    }
    for node in ast.walk(tree):
        if isinstance(node, ast.JoinedStr):
            literal = "".join(part.value for part in node.values if isinstance(part, ast.Constant))
            if re.fullmatch(r"[a-z-]*-[a-z-]*", literal) and len(literal) > 3:
                parts = [re.escape(part.value) if isinstance(part, ast.Constant) else "[a-z]+" for part in node.values]
                yield re.compile("".join(parts))
        elif isinstance(node, ast.Constant) and isinstance(node.value, str) and id(node) not in docstrings:
            yield node.value


def _mentions(texts, code):
    return any(text == code if isinstance(text, str) else text.fullmatch(code) for text in texts)


def test_every_explanation_is_complete():
    for code, row in explanations().items():
        assert FORM.fullmatch(code), code
        assert row.kind in {"error", "verdict", "warning"}, code
        for text in (row.cause, row.cure):
            assert len(text) > 8 and text[-1] == "." and "\n" not in text, code


def test_every_code_the_source_gives_is_explained_with_its_kind():
    wrong = []
    for where, kind, code in _given():
        row = explanations().get(code)
        if row is None or row.kind != kind:
            wrong.append(f"{where}: {kind} {code} is {'not explained' if row is None else 'explained as ' + row.kind}")
    assert not wrong, "\n".join(wrong)
    assert len(list(_given())) > 100


def test_every_explained_code_is_given_somewhere():
    texts = [text for tree in _trees().values() for text in _texts(tree)]
    unused = [code for code in explanations() if not _mentions(texts, code)]
    assert not unused, unused


def test_every_error_is_raised_in_a_test():
    found = set()
    for path in sorted((ROOT / "tests").rglob("*.py")):
        if path != Path(__file__):
            found |= {text for text in _texts(ast.parse(path.read_text())) if isinstance(text, str)}
    words = {word for text in found for word in re.findall(r"[a-z0-9-]+", text)}
    missing = [code for code, row in explanations().items() if row.kind == "error" and code not in words]
    assert not missing, missing
