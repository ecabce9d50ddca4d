"""Lists every text that users see, as a Qt translation source file, and finds texts that bypass translation.

    python3 tests/tools/strings.py LANGUAGE FILE.ts      such as: de plugin/i18n/downwarp_de.ts
    python3 tests/tools/strings.py --check FILE_OR_FOLDER ...

A file that is there is brought up to date: its translations are kept as far as their texts still exist. Texts are what
`tr`, `say` and `DownwarpError` are given literally, labels and options of a `Key`, and what the help files hold. Qt's
lrelease makes of a .ts the .qm that the plugin loads. Standard library only.
"""

from __future__ import annotations

import ast
import json
import re
import string
import sys
import xml.etree.ElementTree as ElementTree
from collections.abc import Iterator
from pathlib import Path

CHECKOUT = Path(__file__).resolve().parents[2]
CONTEXT = "Downwarp"
TAKES_TEXT = {"tr", "say", "DownwarpError"}
"""Functions whose first argument is a text or a template."""
REMARKS = {"remarks", "parts", "found", "rest"}
"""Lists and tuples that collect sentences."""
SHOWS = {"_name", "_table", "set_label", "set_xlabel", "set_ylabel", "set_title", "text", "annotate"}
"""Functions whose literal arguments would be shown as they are."""
MATPLOTLIB = {"lower center", "upper center", "center left", "axes fraction", "offset points"}
"""Words of matplotlib's own."""
NOT_SHOWN = {
    "The break is not bounded",
    "downwarp misfit",
    "Geodetic longitude",
    "Geodetic latitude",
    "residual picks",
    "residual place",
    "too much",
}
"""Texts that are compared, or name what nobody sees."""
NAMES = {"Scenario", "_remembered", "compile"}
"""Functions that are given names of places, citations or patterns."""
DATA = {"_EQUATIONS", "_STYLE"}
"""Constants that hold formulas and style sheets rather than words."""
_TAG, _ENTITY = re.compile(r"<[\w/!][^<>]*>?"), re.compile(r"&\w+;")
_PROGRAM = re.compile(r'"[\w\0]+"|\d+px')
"""Fields in an expression of QGIS, or lengths in a style sheet: no text for people."""
_WORDS = re.compile(r"[A-Za-z]{2,}[,;:]? [A-Za-z]{2,}")


def sources(checkout: Path = CHECKOUT) -> Iterator[Path]:
    """The Python files that ship."""
    for folder in ("plugin", "algorithms"):
        yield from sorted((checkout / folder).rglob("*.py"))


def texts(checkout: Path = CHECKOUT) -> dict[str, list[tuple[str, int]]]:
    """Every text for translators, with the places (file, line) where it stands."""
    found: dict[str, list[tuple[str, int]]] = {}
    for path in sources(checkout):
        for node in _literals(ast.parse(path.read_text(encoding="utf-8"), str(path))):
            found.setdefault(node.value, []).append((path.relative_to(checkout).as_posix(), node.lineno))
    for path in sorted((checkout / "algorithms").glob("*.json")):
        for text in _help_texts(json.loads(path.read_text(encoding="utf-8"))):
            found.setdefault(text, []).append((path.relative_to(checkout).as_posix(), 1))
    found.pop("", None)
    return found


def _literals(tree: ast.AST) -> Iterator[ast.Constant]:
    for call in (node for node in ast.walk(tree) if isinstance(node, ast.Call)):
        name = _name(call.func)
        if name in TAKES_TEXT and call.args:
            yield from _strings(call.args[0])
        elif name == "Key":
            # name, kind, label, default, options
            for place in (2, 4):
                yield from _strings(call.args[place]) if len(call.args) > place else ()
            for keyword in call.keywords:
                yield from _strings(keyword.value) if keyword.arg in ("label", "options") else ()


def _strings(node: ast.expr) -> Iterator[ast.Constant]:
    """Literal texts of an argument: itself, in a tuple, or on either side of an ``if``."""
    if isinstance(node, ast.Constant) and isinstance(node.value, str):
        yield node
    elif isinstance(node, ast.Tuple):
        for element in node.elts:
            yield from _strings(element)
    elif isinstance(node, ast.IfExp):
        yield from _strings(node.body)
        yield from _strings(node.orelse)


def _help_texts(help_file: dict) -> Iterator[str]:
    for key in ("name", "short"):
        yield help_file.get(key, "")
    yield "\n".join(help_file.get("summary", ()))
    for kind in ("parameters", "outputs", "fields"):
        yield from help_file.get(kind, {}).values()


def _name(function: ast.expr) -> str:
    return (
        function.id if isinstance(function, ast.Name) else function.attr if isinstance(function, ast.Attribute) else ""
    )


def findings(path: Path) -> Iterator[tuple[int, str]]:
    """Lines of a Python file with what bypasses translation in each."""
    tree = ast.parse(path.read_text(encoding="utf-8"), str(path))
    fine = _not_shown(tree)
    for node in ast.walk(tree):
        if isinstance(node, ast.Call):
            yield from _in_call(node)
        for sentence in _collected(node):
            yield sentence.lineno, "a remark is to be made by say or tr"
        if id(node) not in fine:
            yield from _bare_words(node)


def _in_call(call: ast.Call) -> Iterator[tuple[int, str]]:
    name = _name(call.func)
    if name in TAKES_TEXT and call.args:
        text = call.args[0]
        if isinstance(text, (ast.JoinedStr, ast.BinOp)) or (
            isinstance(text, ast.Call) and _name(text.func) == "format"
        ):
            yield call.lineno, f"{name} takes a literal template with named places, which can be looked up"
        elif isinstance(text, ast.Constant) and not any(keyword.arg is None for keyword in call.keywords):
            named = {keyword.arg for keyword in call.keywords}
            wanted = {field for _, field, _, _ in string.Formatter().parse(text.value) if field is not None}
            # Without values a template may be filled later.
            if wanted != named and (named or name == "DownwarpError"):
                yield call.lineno, f"places {sorted(wanted)} are given {sorted(named)}"
    elif name == "QgsProcessingException" and call.args:
        text = call.args[0]
        if not (isinstance(text, ast.Call) and _name(text.func) in ("tr", "translated", "invalidSinkError")):
            yield call.lineno, "QgsProcessingException takes what tr or translated returns"
    shown = list(call.args) if name in SHOWS else []
    names = {"label", "x", "y"} if name in SHOWS else {"label"}
    shown += [keyword.value for keyword in call.keywords if keyword.arg in names]
    for argument in shown:
        for literal in _strings(argument):
            if re.search("[A-Za-z]", literal.value) and literal.value not in MATPLOTLIB:
                yield literal.lineno, f"{literal.value!r} is shown without tr"


def _collected(node: ast.AST) -> Iterator[ast.expr]:
    """Literals that a statement or call puts among remarks."""
    values: list[ast.expr] = []
    if isinstance(node, ast.Call):
        function = node.func
        if isinstance(function, ast.Attribute) and function.attr == "append" and _name(function.value) in REMARKS:
            values += node.args
        values += [keyword.value for keyword in node.keywords if keyword.arg in ("remark", "remarks")]
    elif isinstance(node, (ast.Assign, ast.AugAssign)):
        targets = node.targets if isinstance(node, ast.Assign) else [node.target]
        if any(_name(target) in REMARKS for target in targets):
            values.append(node.value)
    for value in values:
        for part in (value.body, value.orelse) if isinstance(value, ast.IfExp) else (value,):
            for each in part.elts if isinstance(part, (ast.Tuple, ast.List)) else (part,):
                # What stands between tags is looked at as bare words.
                if isinstance(each, (ast.Constant, ast.JoinedStr)) and re.search("[a-z]", _text(each)):
                    yield each


def _raw(node: ast.AST) -> str:
    """A literal text, with gaps where values stand; empty for anything else."""
    if isinstance(node, ast.JoinedStr):
        return "".join(part.value if isinstance(part, ast.Constant) else "\0" for part in node.values)
    return node.value if isinstance(node, ast.Constant) and isinstance(node.value, str) else ""


def _text(node: ast.AST) -> str:
    """A literal text without markup."""
    return _ENTITY.sub("", _TAG.sub("", _raw(node)))


def _bare_words(node: ast.AST) -> Iterator[tuple[int, str]]:
    """Literals of two words and more, or of markup with any word between its tags, that are no program's text."""
    text = _text(node)
    if not text or text in MATPLOTLIB | NOT_SHOWN or _PROGRAM.search(text):
        return
    marked_up = _TAG.search(_raw(node))
    if re.search("[A-Za-z]{2,}", text) if marked_up else _WORDS.search(text):
        yield getattr(node, "lineno", 0), f"{text[:60]!r} is not translated"


def _not_shown(tree: ast.AST) -> set[int]:
    """Nodes (their ids) of literals that are translated, or that users never see."""
    nodes: list[ast.AST] = []
    for node in ast.walk(tree):
        if isinstance(node, ast.Expr) and isinstance(node.value, ast.Constant):
            nodes.append(node.value)  # a docstring
        elif isinstance(node, ast.JoinedStr):
            nodes += [part for part in node.values if isinstance(part, ast.Constant)]
        elif isinstance(node, ast.Call) and _name(node.func) in TAKES_TEXT | NAMES | {"Key"}:
            nodes += [literal for argument in node.args for literal in _strings(argument)]
        elif isinstance(node, ast.Subscript):
            nodes += ast.walk(node.slice)  # a type
        elif isinstance(node, ast.Raise) and node.exc is not None:
            # Errors of the program's own go to the log with their traceback.
            nodes += ast.walk(node.exc)
        elif isinstance(node, (ast.Assign, ast.AnnAssign)):
            targets = node.targets if isinstance(node, ast.Assign) else [node.target]
            if any(_name(target) in DATA for target in targets) and node.value is not None:
                nodes += ast.walk(node.value)
    return {id(node) for node in nodes}


def write(target: Path, language: str, checkout: Path = CHECKOUT) -> int:
    """Write or renew a .ts file; returns the number of its texts."""
    done = {}
    if target.exists():
        for message in ElementTree.parse(target).getroot().iter("message"):
            translation = message.find("translation")
            if translation is not None and translation.text:
                done[message.findtext("source", "")] = translation
    root = ElementTree.Element("TS", version="2.1", language=language, sourcelanguage="en")
    context = ElementTree.SubElement(root, "context")
    ElementTree.SubElement(context, "name").text = CONTEXT
    found = texts(checkout)
    for text, places in found.items():
        message = ElementTree.SubElement(context, "message")
        for file, line in places:
            ElementTree.SubElement(message, "location", filename=f"../../{file}", line=str(line))
        ElementTree.SubElement(message, "source").text = text
        if text in done:
            message.append(done[text])
        else:
            ElementTree.SubElement(message, "translation", type="unfinished")
    ElementTree.indent(root, " " * 4)
    target.parent.mkdir(parents=True, exist_ok=True)
    body = ElementTree.tostring(root, encoding="unicode")
    target.write_text(f'<?xml version="1.0" encoding="utf-8"?>\n<!DOCTYPE TS>\n{body}\n', encoding="utf-8")
    return len(found)


def main(arguments: list[str]) -> int:
    """See the top of this file."""
    if arguments[:1] == ["--check"]:
        wrong = 0
        for argument in arguments[1:]:
            paths = [Path(argument)] if argument.endswith(".py") else sorted(Path(argument).rglob("*.py"))
            for path in paths:
                for line, what in sorted(set(findings(path))):
                    print(f"{path}:{line}: {what}")
                    wrong += 1
        return int(wrong > 0)
    if len(arguments) != 2:
        sys.exit("usage: strings.py LANGUAGE FILE.ts | strings.py --check FILE_OR_FOLDER ...")
    print(f"{write(Path(arguments[1]), arguments[0])} texts in {arguments[1]}")
    return 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
