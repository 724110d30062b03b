"""Forms of pages as a browser sends them, for tests that change one field and look what comes back."""

from __future__ import annotations

import re
from html import unescape
from html.parser import HTMLParser
from typing import Any


class _Fields(HTMLParser):
    """Names and values of the fields of a page's POST form."""

    def __init__(self) -> None:
        super().__init__()
        self.fields: dict[str, list[str]] = {}
        self._in_form = self._in_text = False
        self._select: str | None = None
        self._text = ""
        self._name = ""

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        given = dict(attrs)
        if tag == "form":
            self._in_form = given.get("method") == "post" and not given.get("action")
        if not self._in_form:
            return
        name = given.get("name") or ""
        if tag == "input" and given.get("type") not in ("submit", "button"):
            if given.get("type") not in ("checkbox", "radio") or "checked" in given:
                nothing = "on" if given.get("type") == "checkbox" else ""
                self.fields.setdefault(name, []).append(given.get("value") or nothing)
        elif tag == "textarea":
            self._in_text, self._name, self._text = True, name, ""
        elif tag == "select":
            self._select = name
        elif tag == "option" and self._select and "selected" in given:
            self.fields[self._select] = [given.get("value") or ""]

    def handle_data(self, data: str) -> None:
        if self._in_text:
            self._text += data

    def handle_endtag(self, tag: str) -> None:
        if tag == "form":
            self._in_form = False
        elif tag == "textarea" and self._in_text:
            self._in_text = False
            self.fields.setdefault(self._name, []).append(self._text.removeprefix("\n"))
        elif tag == "select":
            self._select = None


def sent_by(response: Any, **changes: Any) -> dict[str, Any]:
    """The fields of the page's own form, some of them changed ('a__b' names the field 'a-b'); None takes one out."""
    parser = _Fields()
    parser.feed(response.content.decode())
    fields: dict[str, Any] = {name: values for name, values in parser.fields.items() if name}
    for name, value in changes.items():
        field = name.replace("__", "-")
        if value is None:
            fields.pop(field, None)
        else:
            fields[field] = value
    return fields


def wrong_at(response: Any, field_id: str) -> str:
    """What a page says is wrong at one field, as text; empty where nothing is."""
    pattern = rf'<ul class="wrong" id="{re.escape(field_id)}_error">(.*?)</ul>'
    found = re.search(pattern, response.content.decode(), re.DOTALL)
    return " ".join(unescape(re.sub(r"<[^>]+>", " ", found[1])).split()) if found else ""
