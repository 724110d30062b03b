"""How-to pages for the browser name buttons and headings; every one of them stands on a page."""

from __future__ import annotations

import ast
import re
from collections.abc import Iterator
from pathlib import Path

import pytest

from tests.docs.fences import DOCS, ROOT

WEB = ROOT / "kinetics_db" / "web"
HOW_TO = DOCS / "how-to"
WHERE = (
    (HOW_TO / "log-a-run.md", "## In the browser"),
    (HOW_TO / "pull-a-data-set.md", "## Make a token"),
    (HOW_TO / "fit-in-the-browser.md", "# Fit in the browser"),
)


def words_of_pages() -> str:
    """Text of all templates and of what the pages' modules write, blanks made single."""
    texts = [re.sub(r"<[^>]*>", " ", path.read_text("utf-8")) for path in WEB.rglob("templates/**/*.html")]
    texts += [text for module in WEB.rglob("*.py") for text in written_in(module)]
    return re.sub(r"\s+", " ", "\n".join(texts))


def written_in(module: Path) -> Iterator[str]:
    for node in ast.walk(ast.parse(module.read_text("utf-8"))):
        if isinstance(node, ast.Constant) and isinstance(node.value, str):
            yield node.value


def named_in(page: Path, heading: str) -> list[str]:
    """Phrases in bold from a heading to the next of its level; for a first heading, of the whole page."""
    text = page.read_text("utf-8").split(f"{heading}\n", 1)[1]
    text = text if heading.startswith("# ") else text.split("\n## ", 1)[0]
    return [re.sub(r"\s+", " ", bold).rstrip(".:") for bold in re.findall(r"\*\*([^*]+)\*\*", text)]


@pytest.mark.parametrize(("page", "heading"), WHERE, ids=lambda where: getattr(where, "name", None))
def test_every_button_and_heading_that_a_page_names_is_there(page: Path, heading: str) -> None:
    names, pages = named_in(page, heading), words_of_pages()
    assert len(names) >= 5
    assert [name for name in names if name not in pages] == []


def test_a_button_that_is_nowhere_would_be_found_missing() -> None:
    assert "Freeze the dataset" in words_of_pages()
    assert "Melt the dataset" not in words_of_pages()
