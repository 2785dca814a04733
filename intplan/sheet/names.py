"""What a name of an activity or a rule may look like.

A letter or ``_``, then letters, digits and ``_``, and optionally an index in brackets that holds
letters, digits, ``_`` and ``-``, with commas between its parts. A letter may carry combining
marks, which some scripts need. Names are compared in Unicode normal form C.
"""

from __future__ import annotations

import re
import unicodedata

LONGEST_NAME = 200
NAME_RULE = (
    "a name is a letter or _, then letters, digits and _, and may end with an index in brackets,"
    " such as loaf[mon] or build[loaf,week-2]"
)
# The raised dots count as part of a word in Unicode, but here they are a sign for "times".
_DOT = {"\u00b7", "\u0387"}
_ASCII_NAME = re.compile(r"[A-Za-z_][A-Za-z0-9_]*(?:\[[A-Za-z0-9_-]+(?:,[A-Za-z0-9_-]+)*\])?")
_ANY_NAME = re.compile(r"(?P<stem>[^\[\]]+)(?:\[(?P<index>[^\[\]]+)\])?")


def normal(text: str) -> str:
    """Return `text` in normal form C."""
    return text if text.isascii() else unicodedata.normalize("NFC", text)


def is_name(text: str) -> bool:
    """Tell whether a text in normal form is a name."""
    if len(text) > LONGEST_NAME:
        return False
    if text.isascii():
        return _ASCII_NAME.fullmatch(text) is not None
    parts = _ANY_NAME.fullmatch(text)
    if parts is None or not is_stem(parts["stem"]):
        return False
    return parts["index"] is None or all(map(is_index_part, parts["index"].split(",")))


def is_stem(text: str) -> bool:
    """Tell whether a text is a letter or ``_``, then letters, digits and ``_``."""
    return text.isidentifier() and not _DOT & set(text)


def is_index_part(text: str) -> bool:
    """Tell whether a text can stand between the commas of an index."""
    return text != "" and is_stem("_" + text.replace("-", "_"))


def name_problem(text: str) -> str | None:
    """Return what is wrong with a would-be name, None if it is one."""
    if is_name(text):
        return None
    if not text:
        return f"an empty name; {NAME_RULE}"
    if len(text) > LONGEST_NAME:
        return f"a name of {len(text):,} characters; the limit is {LONGEST_NAME}"
    if any(c.isspace() for c in text):
        return f"a name holds no spaces; {NAME_RULE}"
    return f"this is not a name; {NAME_RULE}"
