"""Charts on pages: {% chart_assets %} once in the head, {% chart data csv_url=... %} for each."""

from __future__ import annotations

from json import JSONEncoder
from typing import Any

from django import template
from django.utils.html import json_script

from kinetics_db.web.present.charts import Chart

register = template.Library()


class _Compact(JSONEncoder):
    item_separator = ","
    key_separator = ":"


@register.inclusion_tag("web/parts/chart.html")
def chart(data: Chart, csv_url: str = "") -> dict[str, Any]:
    """A figure that charts.js draws; in words, and with the way to the numbers, for those without it."""
    return {
        "chart": data,
        "json": json_script(data.to_plain(), encoder=_Compact),
        "csv_url": csv_url,
    }


@register.inclusion_tag("web/parts/chart_assets.html")
def chart_assets() -> dict[str, Any]:
    """Styles and scripts of charts, for {% block head %}."""
    return {}
