"""What code a step rests on: a hash that changes when a result may change, and only then."""

import ast
import hashlib
from functools import cache
from pathlib import Path

PACKAGE = "onbin"
TEMPLATE_ENDINGS = (".html", ".css")


def fingerprint(script: str | Path) -> str:
    """Hash of the syntax trees of a script and of every module of the package that it imports.

    Comments, layout and docstrings do not count, nor does any module that the script cannot reach.
    Imports by computed names are not seen: the package has none.

    Parameters
    ----------
    script : path
        The package stands beside it.
    """
    digest = hashlib.sha256()
    script = Path(script)
    for path in closure(script):
        name = path.relative_to(script.parent).as_posix()
        digest.update(f"{name}:{_tree(path)}".encode())
    return digest.hexdigest()[:16]


def closure(script: str | Path) -> list[Path]:
    """The script and the modules and templates of the package that it reaches, sorted."""
    script = Path(script)
    package = script.parent / PACKAGE
    reached, waiting = {script}, [script]
    while waiting:
        for path in _imports(waiting.pop(), package):
            if path not in reached:
                reached.add(path)
                waiting.append(path)
    return sorted(reached)


@cache
def _tree(path: Path) -> str:
    if path.suffix != ".py":
        return path.read_text(encoding="utf-8")
    tree = ast.parse(path.read_text(encoding="utf-8"))
    for node in ast.walk(tree):
        body = getattr(node, "body", None)
        if isinstance(body, list) and body and isinstance(body[0], ast.Expr):
            value = body[0].value
            if isinstance(value, ast.Constant) and isinstance(value.value, str):
                del body[0]
    return ast.dump(tree)


@cache
def _imports(path: Path, package: Path) -> frozenset[Path]:
    """Files of the package that a module names: imported modules, and templates by file name."""
    if path.suffix != ".py":
        return frozenset()
    candidates = set()
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            candidates.update(_module(alias.name, package) for alias in node.names)
        elif isinstance(node, ast.ImportFrom) and node.module:
            candidates.add(_module(node.module, package))
            candidates.update(_module(f"{node.module}.{a.name}", package) for a in node.names)
        elif isinstance(node, ast.Constant) and str(node.value).endswith(TEMPLATE_ENDINGS):
            candidates.add(package / "templates" / str(node.value))
    return frozenset(path for path in candidates if path and path.is_file())


def _module(name: str, package: Path) -> Path | None:
    first, *rest = name.split(".")
    return (
        package.joinpath(*(rest or ["__init__"])).with_suffix(".py") if first == PACKAGE else None
    )
