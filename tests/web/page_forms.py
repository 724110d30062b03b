"""Every form of a page as a browser would send it: where to, with which fields, which button pressed."""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from html.parser import HTMLParser
from typing import Literal
from urllib.parse import quote_plus

Kind = Literal["text", "hidden", "choice", "box", "secret", "file"]
Sent = list[tuple[str, bytes]]
"""Names and values in the order in which they stand on the page, as bytes."""
SILENT = ("submit", "button", "reset", "image")
KINDS: dict[str, Kind] = {
    "hidden": "hidden", "checkbox": "box", "radio": "choice", "password": "secret", "file": "file",
}  # fmt: skip


@dataclass
class Field:
    """One control. ``sent`` tells whether its value goes with the form as it stands: an open box does not."""

    name: str
    kind: Kind
    value: str
    sent: bool = True


@dataclass
class PageForm:
    """A form, or one of the other things that its controls can ask for."""

    method: str
    action: str
    fields: list[Field] = field(default_factory=list)
    button: tuple[str, str] | None = None
    live: bool = False
    """asked for by htmx"""
    multipart: bool = False

    @property
    def key(self) -> tuple[str, ...]:
        """The same for all that can be asked with one form."""
        return tuple(one.name for one in self.fields)

    @property
    def stores_on_a_page(self) -> bool:
        """The secret of a new token is shown once, on the page that answers the form."""
        return self.action == "/account/tokens/"

    @property
    def name(self) -> str:
        """For messages."""
        pressed = f" [{self.button[0]}={self.button[1]}]" if self.button else ""
        return f"{self.action}{pressed}{' (live)' if self.live else ''}"

    def as_it_stands(self) -> Sent:
        """What is sent when nobody changes anything."""
        sent = [(one.name, one.value.encode()) for one in self.fields if one.sent]
        return [*sent, (self.button[0], self.button[1].encode())] if self.button else sent

    def changed(self, name: str, *values: bytes) -> Sent:
        """What is sent with other values for one name: none takes it out, two send it twice."""
        others = [(other, value) for other, value in self.as_it_stands() if other != name]
        return [*((name, value) for value in values), *others]


class _Reader(HTMLParser):
    def __init__(self, address: str) -> None:
        super().__init__()
        self.address = address
        self.forms: list[PageForm] = []
        self.own: PageForm | None = None
        self.buttons: list[tuple[str, str, str]] = []
        self.asks: list[str] = []
        self.area: Field | None = None
        self.select: Field | None = None

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        given = {name: value or "" for name, value in attrs}
        if tag == "form":
            self.own = PageForm(given.get("method", "get").lower(), given.get("action") or self.address)
            self.own.multipart = given.get("enctype") == "multipart/form-data"
            self.buttons, self.asks = [], []
        if self.own is None:
            return
        if given.get("hx-post"):
            self.asks.append(given["hx-post"])
        name = given.get("name", "")
        if tag == "button" or (tag == "input" and given.get("type") in SILENT):
            self.buttons.append((name, given.get("value", ""), given.get("formaction", "")))
        elif tag == "input" and name:
            kind = (
                "hidden"
                if {"readonly", "hidden"} & set(given)
                else KINDS.get(given.get("type", "text"), "text")
            )
            ticks = given.get("type") in ("checkbox", "radio")
            value = given.get("value", "on" if ticks else "")
            self.own.fields.append(Field(name, kind, value, not ticks or "checked" in given))
        elif tag == "textarea" and name:
            self.area = Field(name, "text", "")
            self.own.fields.append(self.area)
        elif tag == "select" and name:
            self.select = Field(name, "choice", "", sent=False)
            self.own.fields.append(self.select)
        elif tag == "option" and self.select is not None and ("selected" in given or not self.select.sent):
            self.select.value, self.select.sent = given.get("value", ""), True

    def handle_data(self, data: str) -> None:
        if self.area is not None:
            self.area.value += data

    def handle_endtag(self, tag: str) -> None:
        if tag == "textarea" and self.area is not None:
            self.area.value = self.area.value.removeprefix("\n")
            self.area = None
        elif tag == "select":
            self.select = None
        elif tag == "form" and self.own is not None:
            self._add(self.own)
            self.own = None

    def _add(self, form: PageForm) -> None:
        """The form with each of its buttons, the first of a name only, and what its parts ask for by themselves."""
        seen = set()
        for name, value, action in self.buttons or [("", "", "")]:
            verb = value.rstrip("0123456789")
            if (name, verb, action) not in seen:
                seen.add((name, verb, action))
                pressed = replace(form, button=(name, value) if name else None, action=action or form.action)
                self.forms.append(pressed)
        self.forms += [replace(form, action=action, live=True) for action in dict.fromkeys(self.asks)]


def forms_of(html: str, address: str) -> list[PageForm]:
    """All forms of a page at an address, once for each thing that can be asked with them."""
    reader = _Reader(address)
    reader.feed(html)
    reader.close()
    return reader.forms


def values_of(html: str) -> dict[str, list[str]]:
    """What stands in the fields of a page, by name."""
    found: dict[str, list[str]] = {}
    for form in forms_of(html, ""):
        for one in form.fields:
            found.setdefault(one.name, []).append(one.value)
    return found


def urlencoded(sent: Sent) -> bytes:
    """The body of a form, whatever the bytes are."""
    return "&".join(f"{quote_plus(name)}={quote_plus(value)}" for name, value in sent).encode()


def multipart(sent: Sent, boundary: str = "----a-form-of-a-test") -> bytes:
    """The same as a form with files sends it; a value may not hold the boundary."""
    parts = [
        f'--{boundary}\r\nContent-Disposition: form-data; name="{name}"\r\n\r\n'.encode() + value + b"\r\n"
        for name, value in sent
    ]
    return b"".join(parts) + f"--{boundary}--\r\n".encode()
