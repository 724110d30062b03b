"""Fenced blocks of the pages in Markdown, their places, and how what they print is compared."""

from __future__ import annotations

import contextlib
import io
import math
import re
from collections.abc import Callable, Iterable, Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

ROOT = Path(__file__).resolve().parents[2]
DOCS = ROOT / "docs"
OVER_REST = (DOCS / "how-to" / "log-a-run.md", DOCS / "how-to" / "pull-a-data-set.md")
"""Pages that talk to a server; test_rest_snippets.py runs them."""

FENCE = re.compile(r"```(\S*)\s*\Z")
NUMBER = re.compile(r"([+-]?\d+(?:\.\d+)?(?:e[+-]?\d+)?)")


@dataclass(frozen=True)
class Block:
    """A fenced block; ``line`` is that of its first line of text, counted from 1."""

    page: Path
    line: int
    kind: str
    text: str

    def __str__(self) -> str:
        return f"{self.page.relative_to(ROOT)}:{self.line}"


def pages() -> list[Path]:
    """Every page of the documentation, and those at the root of the project."""
    return sorted([*DOCS.rglob("*.md"), *ROOT.glob("*.md")])


def blocks_of(page: Path) -> Iterator[Block]:
    """Fenced blocks of a page in order."""
    kind: str | None = None
    inside: list[str] = []
    first = 0
    for number, line in enumerate(page.read_text(encoding="utf-8").splitlines(), start=1):
        fence = FENCE.fullmatch(line)
        if fence is None:
            inside.append(line)
        elif kind is None:
            kind, inside, first = fence[1], [], number + 1
        else:
            assert not fence[1], f"{page}:{number}: a fence inside a fence"
            yield Block(page, first, kind, "\n".join(inside) + "\n")
            kind = None
    assert kind is None, f"{page}: the fence before line {first} is not closed"


def blocks_in_docs(*kinds: str) -> list[Block]:
    """Blocks of those kinds on all pages."""
    return [block for page in pages() for block in blocks_of(page) if block.kind in kinds]


def blocks_under(page: Path, heading: str) -> list[Block]:
    """Blocks between that heading of the second level and the next."""
    lines = page.read_text(encoding="utf-8").splitlines()
    begin = lines.index(f"## {heading}") + 1
    later = (
        number for number, line in enumerate(lines, start=1) if number > begin and line.startswith("## ")
    )
    end = next(later, len(lines) + 1)
    return [block for block in blocks_of(page) if begin < block.line < end]


def run_page(
    page: Path,
    after_each: Callable[[], None] = lambda: None,
    *,
    blocks: Iterable[Block] | None = None,
    others: Mapping[str, Callable[[Block], str]] | None = None,
) -> dict[str, Any]:
    """Run a page's Python blocks in one namespace; a block of text right after one is what it prints.

    ``after_each`` is called after every Python block; ``blocks`` runs these of the page, in this order.
    ``others`` runs blocks of other kinds and gives what they print.
    """
    namespace: dict[str, Any] = {"__name__": page.stem}
    printed: str | None = None
    for block in blocks_of(page) if blocks is None else blocks:
        if block.kind == "python":
            out = io.StringIO()
            # Blank lines before it, so that a traceback names the line of the page.
            code = compile("\n" * (block.line - 1) + block.text, str(page), "exec")
            with contextlib.redirect_stdout(out):
                exec(code, namespace)
            printed = out.getvalue()
            after_each()
        elif others is not None and block.kind in others:
            printed = others[block.kind](block)
        elif block.kind == "text":
            assert printed is not None, f"{block}: nothing that is run stands before this output"
            assert same_output(printed, block.text), f"{block}: printed\n{printed}\nnot\n{block.text}"
            printed = None
    return namespace


def same_output(printed: str, shown: str) -> bool:
    """Equal word for word; numbers may differ by one in the last place that is shown."""
    if [_words(line) for line in printed.split("\n")] != [_words(line) for line in shown.split("\n")]:
        return False
    return all(
        math.isclose(float(a), float(b), rel_tol=0.0, abs_tol=1.01 * _last_place(b))
        for a, b in zip(NUMBER.findall(printed), NUMBER.findall(shown), strict=True)
    )


def _words(line: str) -> str:
    return NUMBER.sub("#", line).rstrip()


def _last_place(number: str) -> float:
    """Size of one in the last place of a number as written; nothing for a whole number, which has to agree."""
    digits, _, exponent = number.partition("e")
    _, _, decimals = digits.partition(".")
    if not decimals and not exponent:
        return 0.0
    return float(10.0 ** (int(exponent or 0) - len(decimals)))
