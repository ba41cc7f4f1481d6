"""Numbers and names as the report shows them, and how foreign text is made harmless.

Names come from the analyst's files and may hold anything. In HTML the template escapes them; plotly, however,
renders a few tags in labels by itself, and data inside a script element can end it. The functions here are
the only way for a name into either.
"""

from __future__ import annotations

import json
import math
from typing import Any

MINUS = "\N{MINUS SIGN}"
DASH = "\N{EN DASH}"
NO_VALUE = "\N{EM DASH}"
_ISOLATE, _END_ISOLATE = "\N{FIRST STRONG ISOLATE}", "\N{POP DIRECTIONAL ISOLATE}"
_DIRECTION_MARKS = dict.fromkeys((*range(8234, 8239), *range(8294, 8298), 8206, 8207))
_CONTROLS = dict.fromkeys((*range(32), 127, *range(128, 160), 8232, 8233), " ")


def number(value: float, decimals: int = 2, *, signed: bool = False) -> str:
    """Return a number with thousands separators, a true minus sign, and a dash where there is none."""
    if value is None or not math.isfinite(value):
        return NO_VALUE
    rounded = round(float(value), decimals)
    text = f"{abs(rounded):,.{decimals}f}"
    if rounded < 0:
        return MINUS + text
    return "+" + text if signed and rounded > 0 else text


def money(value: float, currency: str, *, signed: bool = False) -> str:
    """Return a sum of money without decimals, with its currency."""
    text = number(value, 0, signed=signed)
    return text if text == NO_VALUE else f"{text}\N{NO-BREAK SPACE}{currency}"


def percent(value: float, decimals: int = 1) -> str:
    """Return a share as a percentage."""
    text = number(100.0 * value, decimals)
    return text if text == NO_VALUE else f"{text}\N{NO-BREAK SPACE}%"


def small(value: float) -> str:
    """Return a residual: two digits and a power of ten."""
    if value is None or math.isnan(value):
        return NO_VALUE
    if math.isinf(value):
        return "\N{INFINITY}"
    return "0" if value == 0 else f"{value:.1e}".replace("-", MINUS)


def plain(text: object, limit: int | None = None) -> str:
    """Return foreign text on one line without direction overrides, shortened to ``limit`` characters."""
    clean = str(text).translate(_CONTROLS).translate(_DIRECTION_MARKS).strip()
    if limit is not None and len(clean) > limit:
        clean = clean[: limit - 1].rstrip() + "\N{HORIZONTAL ELLIPSIS}"
    return clean


def plot_text(text: object, limit: int = 36) -> str:
    """Return foreign text for a plotly label: its pseudo-tags disarmed, its direction kept to itself.

    Plotly turns such codes back into characters after it has looked for tags, and leaves quotes alone; so only
    ``&``, ``<`` and ``>`` are replaced, and the dollar sign, two of which would call for a formula.
    """
    clean = plain(text, limit).replace("&", "&amp;").replace("<", "&lt;").replace(">", "&gt;")
    clean = clean.replace("$", "&#36;")
    if clean.isascii():
        return clean
    return f"{_ISOLATE}{clean}{_END_ISOLATE}"


def script_json(value: Any) -> str:
    """Return JSON that cannot end the script element it stands in."""
    text = json.dumps(value, ensure_ascii=False, allow_nan=False, separators=(",", ":"))
    for character, code in (
        ("<", "\\u003c"),
        (">", "\\u003e"),
        ("&", "\\u0026"),
        ("\N{LINE SEPARATOR}", "\\u2028"),
        ("\N{PARAGRAPH SEPARATOR}", "\\u2029"),
    ):
        text = text.replace(character, code)
    return text
