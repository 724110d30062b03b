"""What a browser and a script see of an answer: the way to the next page, and all that has to be fetched."""

from __future__ import annotations

import html
import re
from collections.abc import Iterator
from pathlib import Path
from typing import Any

from django.contrib.staticfiles import finders

LINKED = re.compile(r"""(?:<script src|<link rel="stylesheet" href)="/static/([^"]+)\"""")
IMPORTED = re.compile(r"""(?:from|import)\s*\(?["'](\./[^"']+|\.\./[^"']+)["']""")


def next_page(address: str, response: Any) -> str | None:
    """The address of the page after this one: the first link 'After', or the header."""
    if response.headers.get("Content-Type", "").startswith("text/html"):
        found = re.search(r'<a rel="next" href="([^"#]*)', response.content.decode())
        return address.partition("?")[0] + html.unescape(found[1]) if found else None
    found = re.search(r'<([^>]*)>; rel="next"', response.headers.get("Link", ""))
    return found[1] if found else None


def bytes_of_first_visit(response: Any) -> int:
    """The page with its styles and scripts, and what those import; nothing is compressed or known already."""
    files = set(_files(response.content.decode()))
    return len(response.content) + sum(file.stat().st_size for file in files)


def _files(page: str) -> Iterator[Path]:
    waiting = [Path(str(finders.find(name))) for name in LINKED.findall(page)]
    seen: set[Path] = set()
    while waiting:
        file = waiting.pop().resolve()
        if file in seen:
            continue
        seen.add(file)
        yield file
        if file.suffix == ".js":
            waiting.extend(file.parent / name for name in IMPORTED.findall(file.read_text()))
