"""The direction of imports, read from the source and never by running it."""

import ast
from pathlib import Path

import pytest

ROOT = Path(__file__).parent.parent / "lensrate"
LAYERS = [
    {"_version", "errors"},
    {"units"},
    {"kernels"},
    {"claims", "datafiles", "parallel"},
    {"params", "io"},
    {"provenance"},
    {"galaxy"},
    {"remnants"},
    {"sources"},
    {"scenario"},
    {"lensing"},
    {"surveys"},
    {"events"},
    {"inference"},
    {"verify"},
    {"plots"},
    {"cli"},
]
RANK = {name: i for i, names in enumerate(LAYERS) for name in names}
KERNELS_MAY = {"lensrate", "math", "numpy", "numba", "llvmlite", "hashlib", "functools", "os", "pathlib"}


def imports(path):
    package = path.relative_to(ROOT.parent).with_suffix("").parts[:-1]
    for node in ast.walk(ast.parse(path.read_text())):
        if isinstance(node, ast.Import):
            yield from (a.name.split(".") for a in node.names)
        elif isinstance(node, ast.ImportFrom):
            base = list(package[: len(package) - node.level + 1]) if node.level else []
            tail = node.module.split(".") if node.module else []
            yield from ([*base, *tail, a.name] for a in node.names)


@pytest.mark.parametrize("path", sorted(ROOT.rglob("*.py")), ids=lambda p: str(p.relative_to(ROOT)))
def test_imports_go_down(path):
    me = path.relative_to(ROOT).parts[0].removesuffix(".py")
    if me.startswith("__"):
        return
    assert me in RANK, f"give {me} a rank"
    for name in imports(path):
        if name[0] == "lensrate" and len(name) > 1 and name[1] in RANK and name[1] != me:
            assert RANK[name[1]] < RANK[me], f"{path.relative_to(ROOT)} may not import {'.'.join(name)}"
        if me == "kernels":
            assert name[0] != "lensrate" or name[1] == "kernels", f"kernels may not import {'.'.join(name)}"
            assert name[0] in KERNELS_MAY, f"kernels may not import {name[0]}"
        if name[0] == "matplotlib":
            assert me == "plots", f"only plots may import matplotlib, not {path.relative_to(ROOT)}"
