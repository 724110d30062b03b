"""Names of constants and concentrations with the subscripts that chemists expect."""

from __future__ import annotations

import re

from django.utils.html import format_html
from django.utils.safestring import SafeString

_CONSTANT = re.compile(r"([^\W_]+)_(\w+)\Z")
_START = re.compile(r"(\[.+\])0\Z")


def name_html(name: str) -> SafeString:
    """'k_1' with 1 as a subscript, '[S]0' with 0 as one; any other name as it is."""
    found = _CONSTANT.match(name)
    if found:
        return format_html("{}<sub>{}</sub>", found[1], found[2].replace("_", ","))
    found = _START.match(name)
    if found:
        return format_html("{}<sub>0</sub>", found[1])
    return format_html("{}", name)
