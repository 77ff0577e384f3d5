"""The one door through which text from outside reaches a terminal, an HTML page or a CSV cell."""

from __future__ import annotations

import unicodedata

MOST = 200
_FORMULA = ("=", "+", "-", "@")


def printable(text: str, most: int = MOST) -> str:
    """The text with every control character as a visible escape, cut to `most` characters.

    C0, C1, DEL, bidirectional and zero-width controls, line and paragraph separators, surrogates
    and unassigned characters become \\xNN, \\uNNNN or \\UNNNNNNNN.
    """
    shown = "".join(char if _is_plain(char) else _escape(char) for char in text[: most + 1])
    return shown if len(shown) <= most else shown[: most - 3] + "..."


def cell(text: str, most: int = MOST) -> str:
    """The text as a CSV cell: quoted where it must be, never read as a formula."""
    shown = printable(text, most)
    if shown.startswith(_FORMULA):
        shown = "'" + shown
    return '"' + shown.replace('"', '""') + '"' if set(shown) & set(',"') else shown


def _is_plain(char: str) -> bool:
    return unicodedata.category(char) not in ("Cc", "Cf", "Cs", "Co", "Cn", "Zl", "Zp")


def _escape(char: str) -> str:
    code = ord(char)
    if code < 0x100:
        return f"\\x{code:02x}"
    return f"\\u{code:04x}" if code < 0x10000 else f"\\U{code:08x}"
