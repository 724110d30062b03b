"""Pages as tests read them: whole, or only the words."""

from __future__ import annotations

import re
from html import unescape

from django.test import Client


def html_of(browser: Client, address: str, *, status: int = 200) -> str:
    """The page at an address, which must answer with that status."""
    response = browser.get(address)
    assert response.status_code == status, response.content.decode()[:2000]
    return response.content.decode()


def text_of(html: str) -> str:
    """The words of a page, one blank between them."""
    return " ".join(unescape(re.sub(r"<[^>]+>", " ", html)).split())


def margins_of(html: str) -> str:
    """The words of a page's margins."""
    return text_of(" ".join(re.findall(r'<aside class="margin".*?</aside>', html, re.DOTALL)))
