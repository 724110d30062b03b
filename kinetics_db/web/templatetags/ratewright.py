"""How dates, hashes and datasets are written on pages."""

from __future__ import annotations

from datetime import datetime
from typing import TYPE_CHECKING

from django import template
from django.utils import timezone
from django.utils.html import format_html
from django.utils.safestring import SafeString

from kinetics_db.web.words import dataset_text, message_text

if TYPE_CHECKING:
    from kinetics_db.datasets.models import Dataset

register = template.Library()


@register.simple_tag
def when(moment: datetime | None) -> SafeString:
    """A date and time in the reader's zone: '2026-03-05 09:30 CET'."""
    if moment is None:
        return format_html("–")
    local = timezone.localtime(moment)
    return format_html('<time datetime="{}">{}</time>', moment.isoformat(), f"{local:%Y-%m-%d %H:%M %Z}")


@register.simple_tag
def now_here() -> SafeString:
    """The present moment in the reader's zone."""
    return when(timezone.now())


@register.simple_tag
def digest(text: str) -> SafeString:
    """The beginning of a hash; the whole of it to point at."""
    return format_html('<code class="digest" title="SHA-256 {}">{}</code>', text, text[:10])


@register.filter
def as_dataset(dataset: Dataset) -> str:
    """A dataset by name and version: "dataset 'all runs', version 1"."""
    return dataset_text(dataset)


@register.filter
def as_message(message: str) -> str:
    """A message of the engine in the letters of a page."""
    return message_text(message)


@register.filter
def get(mapping: dict[object, object], key: object) -> object:
    """An entry of a mapping, None when absent."""
    return mapping.get(key)
