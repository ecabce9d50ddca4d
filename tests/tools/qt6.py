"""Finds what PyQt 6 and QGIS 4 no longer take: enum values without their enum's name, ``exec_`` and PyQt imports.

    python tests/tools/qt6.py FILE_OR_FOLDER ...

``Qt.LeftButton`` is ``Qt.MouseButton.LeftButton`` there, and the long form works everywhere. Every name that a file
imports from qgis is looked up in the QGIS at hand: a value whose type is an enum of the class that it is taken from is
one without its enum's name.
"""

from __future__ import annotations

import ast
import importlib
import sys
from collections.abc import Iterator
from pathlib import Path
from typing import Any


def findings(path: Path) -> Iterator[tuple[int, str]]:
    """Lines of a Python file with what is wrong in each."""
    tree = ast.parse(path.read_text(encoding="utf-8"), str(path))
    known = _imported(tree)
    for node in ast.walk(tree):
        if isinstance(node, (ast.Import, ast.ImportFrom)):
            modules = [alias.name for alias in node.names] if isinstance(node, ast.Import) else [node.module or ""]
            for module in modules:
                if module.partition(".")[0] in ("PyQt5", "PyQt6", "sip"):
                    yield node.lineno, f"{module} is imported; qgis.PyQt stands for it in every QGIS"
        elif isinstance(node, ast.Attribute):
            if node.attr == "exec_":
                yield node.lineno, "exec_ is gone; exec works everywhere"
            owner = _value(node.value, known)
            if isinstance(owner, type):
                value = getattr(owner, node.attr, None)
                enum = _enum_of(owner, value)
                if enum is not None:
                    yield node.lineno, f"{owner.__name__}.{node.attr} is {owner.__name__}.{enum}.{node.attr}"


def _imported(tree: ast.AST) -> dict[str, Any]:
    """What the file's names stand for that are imported from qgis."""
    known = {}
    for node in ast.walk(tree):
        if isinstance(node, ast.ImportFrom) and node.level == 0 and (node.module or "").partition(".")[0] == "qgis":
            module = importlib.import_module(node.module or "")
            for alias in node.names:
                if hasattr(module, alias.name):
                    known[alias.asname or alias.name] = getattr(module, alias.name)
    return known


def _value(node: ast.expr, known: dict[str, Any]) -> Any:
    """What a dotted name stands for; None where that is not known."""
    if isinstance(node, ast.Name):
        return known.get(node.id)
    if isinstance(node, ast.Attribute):
        owner = _value(node.value, known)
        return None if owner is None else getattr(owner, node.attr, None)
    return None


def _enum_of(owner: type, value: Any) -> str | None:
    """The name of the enum of ``owner`` that a value belongs to."""
    if value is None or isinstance(value, type) or type(value) is owner:
        return None
    for name in dir(owner):
        if getattr(owner, name, None) is type(value):
            return name
    return None


def files(places: list[str]) -> Iterator[Path]:
    """The Python files of files and folders."""
    for place in map(Path, places):
        yield from sorted(place.rglob("*.py")) if place.is_dir() else [place]


def main(places: list[str]) -> int:
    """Print what is found; 1 where there is anything."""
    count = 0
    for path in files(places):
        for line, words in findings(path):
            print(f"{path}:{line}: {words}")
            count += 1
    return int(count > 0)


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
