# SPDX-License-Identifier: MIT
"""The docstring of everything public: it is there, and its Parameters are those of the signature, in their order.

Read from the source, so that compiled functions and late imports hide nothing.
"""

import ast
import re
from pathlib import Path

import pytest

import scanstrain

PACKAGE = Path(scanstrain.__file__).parent
MODULES = {".".join(path.relative_to(PACKAGE.parent).with_suffix("").parts): path for path in PACKAGE.rglob("*.py")}
ENTRY = re.compile(r"^(\*{0,2}\w+(?:, \*{0,2}\w+)*)(?: :.*)?$")


def public(module):
    """Yield (qualified name, node, owner) of every public function, class and method of a module."""
    tree = ast.parse(MODULES[module].read_text(encoding="utf-8"))
    for node in tree.body:
        if isinstance(node, ast.FunctionDef | ast.ClassDef) and not node.name.startswith("_"):
            yield f"{module}.{node.name}", node, None
        if isinstance(node, ast.ClassDef) and not node.name.startswith("_"):
            for inner in node.body:
                if isinstance(inner, ast.FunctionDef | ast.ClassDef) and not inner.name.startswith("_"):
                    yield f"{module}.{node.name}.{inner.name}", inner, node


def documented(docstring):
    """List the names of a numpydoc Parameters section, or None where there is no such section."""
    lines = docstring.splitlines()
    rule = next((n for n, line in enumerate(lines) if line.strip() == "Parameters"), None)
    if rule is None or set(lines[rule + 1].strip()) != {"-"}:
        return None
    names = []
    for here, below in zip(lines[rule + 2 :], [*lines[rule + 3 :], ""], strict=True):
        if below.strip() and set(below.strip()) == {"-"}:
            break
        entry = ENTRY.match(here)
        if entry:
            names += [name.lstrip("*") for name in entry[1].split(", ")]
    return names


def parameters(node, owner):
    """Names of the parameters of a function without self, or of the constructor of a class."""
    if isinstance(node, ast.ClassDef):
        made = next((each for each in node.body if isinstance(each, ast.FunctionDef) and each.name == "__init__"), None)
        if made is None:
            return [each.target.id for each in node.body if isinstance(each, ast.AnnAssign)]
        node, owner = made, node
    sign = node.args
    starred = [each for each in (sign.vararg, sign.kwarg) if each is not None]
    names = [each.arg for each in [*sign.posonlyargs, *sign.args, *sign.kwonlyargs, *starred]]
    return names[1:] if owner is not None and names[:1] in (["self"], ["cls"]) else names


def faults(module):
    """Say what is wrong in a module, one line each."""
    for name, node, owner in public(module):
        text = ast.get_docstring(node)
        place = f"{MODULES[module].relative_to(PACKAGE.parent)}:{node.lineno}: {name}"
        if not text:
            yield f"{place} has no docstring"
            continue
        said, real = documented(text), parameters(node, owner)
        if said is None:
            continue
        if isinstance(node, ast.ClassDef):
            # Fields are given by name: one whose name says it all may be left out, and the order is free.
            said, real = sorted(set(said) - set(real)), []
        if said != real:
            yield f"{place} documents {said}, but takes {real}"


@pytest.mark.parametrize("module", sorted(MODULES))
def test_everything_public_has_a_docstring_that_fits_its_signature(module):
    assert list(faults(module)) == []


@pytest.mark.parametrize("module", sorted(MODULES))
def test_every_module_says_what_it_is_for_and_carries_its_licence(module):
    text = MODULES[module].read_text(encoding="utf-8")
    assert text.startswith("# SPDX-License-Identifier: MIT\n")
    assert ast.get_docstring(ast.parse(text))
