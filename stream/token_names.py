"""The name of a token as it is hashed in, `field=token` as people read it out.

A name is `field 0x1F token` in UTF-8 (docs/addresses.md): inside a token 0x1F parts the tokens of a
cross, 0x1B 0x1B stands for 0x1B, and 0x1B 0x5F for 0x1F.
"""

from __future__ import annotations

import re

__all__ = ["field_and_token", "readable"]

_ESCAPED = re.compile("\x1b([\x1b_])")


def field_and_token(name: bytes) -> tuple[str, str]:
    """Field and token of a name for two columns: crosses as `route&hour`, `R7&08`, escapes undone.

    What a terminal could take for a command (control and other unprintable characters) shows as a Python
    escape, as `\\x1b`. The token of a plain quantity is empty; so are both where the name is not known.
    """
    field, _, token = name.decode("utf-8", "replace").partition("\x1f")
    parts = (_ESCAPED.sub(_meant, part) for part in token.split("\x1f"))
    return _printable(field), _printable("&".join(parts))


def readable(name: bytes) -> str:
    """A name as one text: `route=R7`, `route&hour=R7&08`, and the field alone for a plain quantity."""
    field, token = field_and_token(name)
    return f"{field}={token}" if token else field


def _meant(escape: re.Match[str]) -> str:
    return "\x1b" if escape[1] == "\x1b" else "\x1f"


def _printable(text: str) -> str:
    if text.isprintable():
        return text
    return "".join(c if c.isprintable() else c.encode("unicode_escape").decode() for c in text)
