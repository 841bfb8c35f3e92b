"""Every public name has a docstring and full annotations; the small face is complete."""

import ast
from pathlib import Path

import pytest

import srcfit

ROOT = Path(srcfit.__file__).parent
FACE = ("load_case", "make_case", "read", "recover", "make_member", "kernel", "modes", "respond")
PARTS = {
    # what the docstring of each name of the face has to tell
    "load_case": ("Raises", "Returns"),
    "make_case": ("Raises", "Returns"),
    "read": ("Raises", "Returns"),
    "recover": ("Raises", "Returns", "Parameters"),
    "make_member": ("Raises", "Returns"),
    "kernel": ("Raises", "Returns", "Parameters"),
    "modes": ("Returns", "Parameters"),
    "respond": ("Raises", "Returns", "Parameters"),
}


def public(tree):
    """Public functions, classes and methods of a module."""
    for node in tree.body:
        if not isinstance(node, (ast.FunctionDef, ast.ClassDef)) or node.name.startswith("_"):
            continue
        yield node
        if isinstance(node, ast.ClassDef):
            for item in node.body:
                if isinstance(item, ast.FunctionDef) and not item.name.startswith("_"):
                    yield item


def faults(path):
    """What lacks a docstring or an annotation."""
    tree = ast.parse(path.read_text(encoding="utf-8"))
    name = path.relative_to(ROOT)
    if not ast.get_docstring(tree) and tree.body:
        yield f"{name}: the module has no docstring"
    for node in public(tree):
        if not ast.get_docstring(node):
            yield f"{name}:{node.lineno}: {node.name} has no docstring"
        if isinstance(node, ast.FunctionDef):
            arguments = [*node.args.posonlyargs, *node.args.args, *node.args.kwonlyargs]
            bare = [
                a.arg for a in arguments if a.annotation is None and a.arg not in ("self", "cls")
            ]
            if bare:
                yield f"{name}:{node.lineno}: {node.name} leaves {bare} without a type"
            if node.returns is None:
                yield f"{name}:{node.lineno}: {node.name} does not say what it returns"


def test_every_public_name_has_a_docstring_and_types():
    found = [f for path in sorted(ROOT.rglob("*.py")) for f in faults(path)]
    assert not found, "\n".join(found)


def test_the_check_sees_what_is_missing(tmp_path, monkeypatch):
    monkeypatch.setattr(f"{__name__}.ROOT", tmp_path)
    path = tmp_path / "room.py"
    path.write_text("def f(a, *, b: int): ...\ndef _g(a): ...\nclass C:\n    def m(self): 'x'\n")
    assert [f.split(": ", 1)[1] for f in faults(path)] == [
        "the module has no docstring", "f has no docstring", "f leaves ['a'] without a type",
        "f does not say what it returns", "C has no docstring", "m does not say what it returns",
    ]  # fmt: skip


@pytest.mark.parametrize("name", FACE)
def test_the_face_is_there_and_says_what_it_takes(name):
    text = getattr(srcfit, name).__doc__
    for part in PARTS[name]:
        assert f"{part}\n" in text, f"{name} lacks its section {part}"
    assert name in srcfit.__all__
    assert name in dir(srcfit)


def test_files_stay_readable_in_one_sitting():
    long = {
        str(p.relative_to(ROOT)): n
        for p in ROOT.rglob("*.py")
        if (n := p.read_text(encoding="utf-8").count("\n")) > 450
    }
    assert long == {}
