"""A number in HTML: the text that is read, and every digit to point at and to copy."""

from __future__ import annotations

from dataclasses import dataclass

from django.utils.html import format_html
from django.utils.safestring import SafeString

from kinetics_db.engine.shown_numbers import PAGE, is_number, plain, with_uncertainty


@dataclass(frozen=True)
class Shown:
    """A number as it is read, and as it is copied: every digit, with the unit."""

    text: str
    exact: str = ""
    value: str = ""

    @property
    def html(self) -> SafeString:
        """The reading text, with the exact number to point at and for programs."""
        if not self.exact:
            return format_html("{}", self.text)
        return format_html('<data value="{}" title="{}">{}</data>', self.value, self.exact, self.text)

    def __str__(self) -> str:
        return self.text


def shown(value: float | None, uncertainty: float | None = None, unit: str = "", *, digits: int = 4) -> Shown:
    """A value for a page: '5.926(52) × 10⁻⁵ 1/s' where its uncertainty is known, else with ``digits`` digits."""
    if not is_number(value):
        return Shown(PAGE.nothing)
    exact = f"{value!r} {unit}".strip()
    if is_number(uncertainty) and uncertainty > 0:
        exact += f", standard uncertainty {uncertainty!r}"
        return Shown(with_uncertainty(value, uncertainty, unit), exact, repr(value))
    return Shown(plain(value, unit, digits=digits), exact, repr(value))
