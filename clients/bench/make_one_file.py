"""Makes one_file/labmon_bench.py, the whole client as one file that can be copied to a bench PC.

``python clients/bench/make_one_file.py`` writes it; a test compares. The modules follow each other as their imports ask,
each as it is, without the lines that import from one another.
"""

import ast
from pathlib import Path

HERE = Path(__file__).resolve().parent
PACKAGE = HERE / "labmon_bench"
MADE = HERE / "one_file" / "labmon_bench.py"
_HEAD = '''#!/usr/bin/env python3
"""labmon's bench client in one file: ``python labmon_bench.py run bench.ini`` (docs/bench-client.md).

Made from clients/bench/labmon_bench by make_one_file.py; change it there. Needs Python 3.9 or newer and nothing else.
"""

from __future__ import annotations
'''


def one_file() -> str:
    """The text of the one file.

    Raises:
        ValueError: Two modules use one name for different things.
    """
    trees = {path.stem: ast.parse(path.read_text(encoding="utf-8")) for path in PACKAGE.glob("*.py") if path.stem != "__init__"}
    order = _in_order(trees)
    _check_names(trees)
    parts = [_HEAD, _imports(trees)]
    for name in order:
        parts.append(f"\n\n# ---- {name} " + "-" * (100 - len(name)) + "\n" + _without_imports(name, trees[name]))
    return "\n".join(parts)


def _in_order(trees: dict[str, ast.Module]) -> list[str]:
    """Each module behind those it imports from; the command last."""
    order: list[str] = []

    def add(name: str) -> None:
        if name not in order:
            for node in trees[name].body:
                if _is_inside(node):
                    add(node.module.split(".")[1])
            order.append(name)

    for name in sorted(trees, key=lambda name: (name == "__main__", name)):
        add(name)
    return order


def _imports(trees: dict[str, ast.Module]) -> str:
    """What the modules import from the standard library, each once."""
    whole, names = set(), {}
    for node in (node for tree in trees.values() for node in tree.body if _is_outside(node)):
        if isinstance(node, ast.ImportFrom):
            names.setdefault(node.module, set()).update(alias.name for alias in node.names)
        else:
            whole.add(ast.unparse(node))
    parts = [f"from {module} import {', '.join(sorted(names[module]))}" for module in sorted(names)]
    return "\n".join([*sorted(whole), *parts]) + "\n"


def _is_inside(node: ast.stmt) -> bool:
    return isinstance(node, ast.ImportFrom) and (node.module or "").startswith("labmon_bench")


def _is_outside(node: ast.stmt) -> bool:
    is_import = isinstance(node, (ast.Import, ast.ImportFrom)) and not _is_inside(node)
    return is_import and not (isinstance(node, ast.ImportFrom) and node.module == "__future__")


def _check_names(trees: dict[str, ast.Module]) -> None:
    """Every name is one module's; constants that are equal everywhere may stand in several."""
    owners: dict[str, tuple[str, str]] = {}
    for module, tree in trees.items():
        for node in tree.body:
            is_named = isinstance(node, (ast.FunctionDef, ast.ClassDef))
            for target in [node] if is_named else node.targets if isinstance(node, ast.Assign) else []:
                name = target.name if is_named else ast.unparse(target)
                owner, text = owners.setdefault(name, (module, ast.unparse(node)))
                if owner != module and text != ast.unparse(node):
                    raise ValueError(f"{name} means one thing in {owner} and another in {module}; rename one of them")


def _without_imports(name: str, tree: ast.Module) -> str:
    """A module's own lines, its docstring as a comment."""
    lines = (PACKAGE / f"{name}.py").read_text(encoding="utf-8").splitlines()
    said = ast.get_docstring(tree) or ""
    first = max((node.end_lineno for node in tree.body if isinstance(node, (ast.Import, ast.ImportFrom, ast.Expr))
                 and (not isinstance(node, ast.Expr) or node is tree.body[0])), default=0)
    return "\n".join([*(f"# {line}".rstrip() for line in said.splitlines()), *lines[first:]]).rstrip() + "\n"


if __name__ == "__main__":
    MADE.parent.mkdir(exist_ok=True)
    MADE.write_text(one_file(), encoding="utf-8")
    print(f"{MADE.relative_to(HERE)}: {MADE.stat().st_size} bytes")
