"""Sends forms and addresses with hostile values, and says what is wrong with the answers."""

from __future__ import annotations

import re
import time
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from typing import Any
from urllib.parse import urljoin, urlsplit

from django.apps import apps
from django.core.files.uploadedfile import SimpleUploadedFile
from django.db import connection
from django.test import Client

from tests.access.world import undone
from tests.web.hostile import MARKUP, RAW_MARKUP
from tests.web.page_forms import PageForm, Sent, forms_of, multipart, urlencoded, values_of

ANSWERS = (200, 302, 400, 403, 404, 405, 409, 413, 422)
MANY_FIELDS = 20
LARGEST_BODY = 2_000_000
LONGEST_CPU = 2.0
"""Seconds of this process that one answer may take."""
OURS = [model for model in apps.get_models() if model.__module__.startswith("kinetics_db.")]
FORM, FORM_WITH_FILES = (
    "application/x-www-form-urlencoded",
    "multipart/form-data; boundary=----a-form-of-a-test",
)


def counts() -> list[int]:
    """How many rows each of our tables has."""
    return [model._base_manager.count() for model in OURS]


@dataclass
class Hands:
    """A client that notes what went wrong in ``complaints``."""

    client: Client
    stored: list[int] = field(default_factory=counts)
    complaints: list[str] = field(default_factory=list)
    answers: int = 0
    _written: bool = False

    def get(self, address: str, query: Sent, what: str) -> None:
        """Ask for a page with a query."""
        with undone():
            self._judged(what, lambda: self.client.get(f"{address}?{urlencoded(query).decode()}"))

    def send(self, form: PageForm, sent: Sent, what: str, *, typed: Sequence[tuple[str, bytes]] = ()) -> int:
        """Send a form; ``typed`` are texts that have to stand in their fields when it comes back. Gives the status."""
        what = f"{form.name}: {what}"
        with undone():
            response = self._judged(what, lambda: self._post(form, sent))
            status: int = response.status_code
            if status == 302:
                self._follow(what, response.headers["Location"])
            elif status < 500 and not (status == 200 and form.stores_on_a_page):
                if self._written and counts() != self.stored:
                    self._complain(what, f"{status}, but something is stored")
                if not form.live and status in (200, 422):
                    self._look_for(typed, response.content.decode(), f"{what}: {status}")
        return status

    def _look_for(self, typed: Sequence[tuple[str, bytes]], html: str, what: str) -> None:
        """Complain of what does not stand in its field any more."""
        shown = values_of(html)
        lost = [
            name
            for name, value in typed
            if value.decode(errors="replace").strip() not in (text.strip() for text in shown.get(name, ()))
        ]
        if lost:
            self._complain(what, f"what was typed into {', '.join(lost)} is lost")

    def _post(self, form: PageForm, sent: Sent) -> Any:
        body, kind = (multipart(sent), FORM_WITH_FILES) if form.multipart else (urlencoded(sent), FORM)
        headers = {"HX-Request": "true"} if form.live else {}
        return self.client.generic("POST", form.action, body, content_type=kind, headers=headers)

    def _follow(self, what: str, address: str) -> None:
        """What was accepted is on a page, and does no harm there."""
        there = urlsplit(urljoin("http://testserver/login/", address))
        if (there.scheme, there.netloc) == ("http", "testserver"):
            self._judged(f"{what} -> {address[:80]}", lambda: self.client.get(there.path))
        else:
            self._complain(what, f"leads to {address[:80]}")

    def _judged(self, what: str, ask: Any) -> Any:
        begun = time.process_time()
        self._written = False
        with connection.execute_wrapper(self._noted):
            response = ask()
        taken = time.process_time() - begun
        self.answers += 1
        if response.status_code not in ANSWERS:
            self._complain(what, str(response.status_code))
        if taken > LONGEST_CPU:
            self._complain(what, f"took {taken:.1f} s")
        if not response.streaming:
            text = response.content.decode(errors="replace")
            for raw in RAW_MARKUP:
                if raw in text:
                    self._complain(what, f"{raw} stands in the answer as it was sent")
        return response

    def _noted(self, execute: Any, sql: str, *more: Any) -> Any:
        self._written = self._written or sql.startswith(("INSERT", "UPDATE", "DELETE"))
        return execute(sql, *more)

    def _complain(self, what: str, why: str) -> None:
        self.complaints.append(f"{what}: {why}")

    def upload(self, address: str, name: str, data: bytes, what: str) -> None:
        """Choose a file on a page."""
        with undone():
            file = SimpleUploadedFile("x", data)
            file._name = name  # past its own cleaning: a browser may send what it likes
            self._judged(f"file: {what}", lambda: self.client.post(address, {"file": file}))
            if counts() != self.stored:
                self._complain(what, "something is stored")


def posted(html: str, address: str) -> list[PageForm]:
    """The forms of a page that are posted, but the one that logs out."""
    return [f for f in forms_of(html, address) if f.method == "post" and f.action != "/logout/"]


def worth_a_value(form: PageForm) -> list[str]:
    """Names of the fields of a form that somebody may put a value into."""
    names = dict.fromkeys(one.name for one in form.fields if one.name != "csrfmiddlewaretoken")
    return list(names)


def comes_back(form: PageForm, name: str) -> bool:
    """Whether what is typed into a field has to be there when the form is shown again."""
    kinds = {one.kind for one in form.fields if one.name == name}
    if form.button and form.button[0] and name.startswith(f"{form.button[0]}-"):
        return False  # rows change their places
    return kinds == {"text"}


Try = tuple[str, Sent, list[tuple[str, bytes]]]
"""What is tried in words, what is sent, what has to come back."""


def one_field_at_a_time(form: PageForm, texts: dict[str, bytes], *, turn: int | None = None) -> Iterator[Try]:
    """Each field with each text, the rest as it stands; of many fields, which are alike, every third.

    With ``turn`` each of them with one text, all texts in turn.
    """
    labels, names = list(texts), worth_a_value(form)
    if len(names) > MANY_FIELDS:
        names = names[(turn or 0) % 3 :: 3]
    for number, name in enumerate(names):
        for label in labels if turn is None else [labels[(turn + number) % len(labels)]]:
            value = texts[label]
            typed = [(name, value)] if comes_back(form, name) else []
            yield f"{name} is {label}", form.changed(name, value), typed


def all_fields_at_once(form: PageForm, texts: dict[str, bytes]) -> Iterator[Try]:
    """All fields that are typed into with the same text, for each text."""
    names = [name for name in worth_a_value(form) if comes_back(form, name)]
    rest = [(name, value) for name, value in form.as_it_stands() if name not in names]
    for label, value in texts.items():
        if names and len(value) * len(names) < LARGEST_BODY:
            typed = [(name, value) for name in names]
            yield f"every field is {label}", [*typed, *rest], typed


def fields_astray(form: PageForm, *, every: bool = False) -> Iterator[Try]:
    """Fields that come twice or not at all, and fields that no page has; of what is typed, only with ``every``."""
    for name in worth_a_value(form):
        if every or not comes_back(form, name):
            yield f"{name} is missing", form.changed(name), []
            yield f"{name} comes twice", form.changed(name, b"first", MARKUP.encode()), []
    own = form.as_it_stands()
    yield "nothing is sent", [], []
    yield "only the button is sent", own[-1:], []
    yield "a field of no page", [*own, ("no-such-field", b"1"), ("x" * 3_000, b"1"), ("", b"1")], []
    counted = {re.sub(r"-\d+-.*", "", name) for name, _ in own if re.search(r"-\d+-", name)} or {"form"}
    for count in (b"-1", b"1000000000", b"many"):
        totals = [(f"{rows}-{name}", count) for rows in counted for name in ("TOTAL_FORMS", "INITIAL_FORMS")]
        yield f"{count.decode()} rows are announced", [*own, *totals], []
    for place in (b"-1", b"0", b"9999", b"99999999999", b"1"):
        more = [
            (f"{rows}-{place.decode()}-{name}", b"1") for rows in counted for name in ("source", "kind", "")
        ]
        yield f"a row at {place.decode()}", [*own, *more], []
