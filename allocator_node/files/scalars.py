"""What a word of YAML means: the core schema of YAML 1.2.2 (section 10.3.2).

So ``1e3`` is a number, while ``no``, ``on``, ``1_000`` and ``1:30`` are text.
"""

from __future__ import annotations

import re

_INTEGER = re.compile(r"[-+]?[0-9]+")
_OCTAL_OR_HEX = re.compile(r"0o[0-7]+|0x[0-9a-fA-F]+")
_FLOAT = re.compile(r"[-+]?(\.[0-9]+|[0-9]+(\.[0-9]*)?)([eE][-+]?[0-9]+)?")
_SPECIAL = re.compile(r"([-+]?)\.(inf|Inf|INF)|\.(nan|NaN|NAN)")
_WORDS = dict.fromkeys(("", "~", "null", "Null", "NULL")) | {
    word: word.lower() == "true" for word in ("true", "True", "TRUE", "false", "False", "FALSE")
}


def resolved(text: str, plain: bool) -> str | int | float | bool | None:
    """Give the value of a scalar.

    Args:
        text: The scalar, without its quotes.
        plain: Whether it stood without quotes; a quoted one is text.
    """
    if not plain:
        return text
    if text in _WORDS:
        return _WORDS[text]
    if _INTEGER.fullmatch(text):
        return int(text) if len(text) < 20 else float(text)
    if _OCTAL_OR_HEX.fullmatch(text) and len(text) < 20:
        return int(text, base=0)
    if _FLOAT.fullmatch(text) or _SPECIAL.fullmatch(text):
        return float(text.lower().replace(".inf", "inf").replace(".nan", "nan"))
    return text
