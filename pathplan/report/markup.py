"""Elements of HTML and SVG. All text passes through `esc`, so that nothing from a file can become markup."""

from __future__ import annotations

import html
import json
from typing import Any

from pathplan.report.text import printable

__all__ = ["embedded", "esc", "number", "pretty", "tag"]

VOID = frozenset({"br", "col", "hr", "img", "input", "link", "meta"})


def esc(text: Any) -> str:
    """Text for content and quoted attributes: markup characters as entities, nothing that isn't printable."""
    words = str(text)
    return html.escape(words if words.isprintable() else printable(words), quote=True)


def number(value: float) -> str:
    """A coordinate with up to two decimals."""
    text = f"{value:.2f}".rstrip("0").rstrip(".")
    return "0" if text in ("", "-0") else text


def pretty(words: str) -> str:
    """Units as print has them: deg/s² for deg/s^2."""
    return words.replace("/s^2", "/s²").replace("/s^3", "/s³")


def tag(name: str, content: str = "", /, **attributes: Any) -> str:
    """An element around markup that is escaped already. Attribute values are escaped here.

    A trailing underscore is dropped (`class_`), inner ones become hyphens; True gives the bare name, None and False
    leave an attribute out; numbers are shortened.
    """
    parts = [name]
    for key, value in attributes.items():
        if value is None or value is False:
            continue
        key = key.rstrip("_").replace("_", "-")
        if key == "viewbox":
            key = "viewBox"
        if value is True:
            parts.append(key)
        else:
            shown = number(value) if isinstance(value, float) else esc(value)
            parts.append(f'{key}="{shown}"')
    head = " ".join(parts)
    return f"<{head}>" if name in VOID else f"<{head}>{content}</{name}>"


def embedded(document: Any) -> str:
    """JSON that can stand inside a script element: no `<`, `>` or `&` in it, nor line separators of JavaScript."""
    text = json.dumps(document, separators=(",", ":"), allow_nan=False)
    for char in "<>&":  # the rest is ASCII already
        text = text.replace(char, f"\\u{ord(char):04x}")
    return text
