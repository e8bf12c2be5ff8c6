"""Text from files and file names, so that neither a terminal nor a spreadsheet obeys it."""

import re
from typing import Any

FORMULA_SIGNS = tuple("=+-@＝＋－＠")
"""What a spreadsheet may take for the start of a formula, in narrow and full-width letters."""

_NO_FORMULA = re.compile(r"[+-]?[0-9.]+(e[+-]?[0-9]+)?|-[A-Za-z0-9-]*")


def is_formula(text: str) -> bool:
    """Whether a spreadsheet may run a cell; numbers and labels are none.

    >>> is_formula("=1+1"), is_formula("-0.5"), is_formula("-quay-1")
    (True, False, False)
    """
    return text.startswith(FORMULA_SIGNS) and not _NO_FORMULA.fullmatch(text)


def printable(value: Any) -> str:
    r"""A value as one line without a sign that a terminal obeys: escapes, and marks that turn the direction of writing.

    >>> printable("a\x1b[2J\nb")
    'a?[2J b'
    """
    return "".join(sign if sign.isprintable() else "?" for sign in " ".join(str(value).split()))
