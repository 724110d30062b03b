"""Patterns of the messages in the code: what is put in at run time is shown as an ellipsis."""

from __future__ import annotations

import ast
from collections.abc import Collection, Iterator
from pathlib import Path

MAKERS = {"refuse", "Problem", "InvalidInput", "_warning", "_error", "Cell"}


def messages_in(folder: Path, *, without: Collection[str] = ()) -> set[str]:
    """Message patterns of the modules in a folder, except of those left out by file name."""
    found: set[str] = set()
    for module in sorted(folder.glob("*.py")):
        if module.name in without:
            continue
        for node in ast.walk(ast.parse(module.read_text(encoding="utf-8"))):
            if isinstance(node, ast.Call) and _name(node) in MAKERS:
                found.update(_patterns(_argument(node)))
            elif isinstance(node, ast.Assign) and any(
                isinstance(t, ast.Name) and t.id in ("message", "what") for t in node.targets
            ):
                found.update(_patterns(node.value))
    return found


def _name(call: ast.Call) -> str:
    function = call.func
    return function.attr if isinstance(function, ast.Attribute) else getattr(function, "id", "")


def _argument(call: ast.Call) -> ast.expr | None:
    """Where the message stands: first in most calls, second where a field or unit stands before it."""
    for keyword in call.keywords:
        if keyword.arg == "why":
            return keyword.value
    return call.args[0] if call.args and _name(call) != "Cell" else None


def _patterns(node: ast.expr | None) -> Iterator[str]:
    if isinstance(node, ast.Constant) and isinstance(node.value, str):
        yield node.value
    elif isinstance(node, ast.JoinedStr):
        yield "".join(str(v.value) if isinstance(v, ast.Constant) else "…" for v in node.values)
    elif isinstance(node, ast.IfExp):
        yield from _patterns(node.body)
        yield from _patterns(node.orelse)
