"""Every link between pages leads somewhere."""

from __future__ import annotations

import re
from pathlib import Path

import pytest

from tests.docs.fences import DOCS, ROOT, pages

LINK = re.compile(r"(?<!!)\[[^\]]*\]\(([^)\s]+)\)")
FENCED = re.compile(r"^```.*?^```$", re.DOTALL | re.MULTILINE)


def headings(page: Path) -> set[str]:
    """Anchors of a page's headings, as code hosts make them."""
    text = FENCED.sub("", page.read_text(encoding="utf-8"))
    titles = re.findall(r"^#+ (.+)$", text, re.MULTILINE)
    return {re.sub(r"[^\w\- ]", "", title.lower()).strip().replace(" ", "-") for title in titles}


@pytest.mark.parametrize("page", pages(), ids=lambda page: str(page.relative_to(ROOT)))
def test_every_relative_link_of_a_page_leads_to_a_file_and_its_heading(page: Path) -> None:
    broken = []
    for link in LINK.findall(FENCED.sub("", page.read_text(encoding="utf-8"))):
        if link.startswith(("http://", "https://", "mailto:")):
            continue
        target, _, anchor = link.partition("#")
        file = (page.parent / target).resolve() if target else page
        if not file.exists() or not file.is_relative_to(ROOT) or (anchor and anchor not in headings(file)):
            broken.append(link)
    assert not broken


def test_the_index_names_every_page_of_the_documentation() -> None:
    index = DOCS / "README.md"
    named = {(DOCS / link).resolve() for link in LINK.findall(index.read_text(encoding="utf-8"))}
    own = {p for p in pages() if p.is_relative_to(DOCS) and p.parent.name != "decisions"}
    assert own - {index} <= named
