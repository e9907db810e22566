"""What a scalar of a configuration means: decimal numbers, whole numbers, text; no units, no bounds.

YAML readers differ on what `1e3`, `010`, `on` or `12:30` is.  Whatever they
could take in two ways is no number here, and no text either unless quoted.
"""

from __future__ import annotations

import re

from hobnail.config.strict_yaml import Node, Scalar

_DECIMAL = re.compile(r"[-+]?(?:(?:0|[1-9][0-9]{0,30})(?:\.[0-9]{0,30})?|\.[0-9]{1,30})")
_INTEGER = re.compile(r"[-+]?(?:0|[1-9][0-9]{0,18})")
_HEXADECIMAL = re.compile(r"0x[0-9a-fA-F]{1,8}")
# Words that one YAML reader or another takes for true, false or nothing.
_NOT_TEXT = frozenset(("y", "n", "yes", "no", "on", "off", "true", "false", "null", "~"))

_SURPRISES = (
    (r"[-+]?[0-9.]+e[-+]?[0-9]+", "Readers of YAML differ on exponents: write the number out."),
    (r"[-+]?0[0-9]+", "A leading zero makes it octal to some readers: write it without."),
    (r"[-+]?0[xob][0-9a-f]+", "Write it as a decimal number."),
    (
        r"[-+]?[0-9]+(:[0-9]+)+(\.[0-9]*)?",
        "A colon makes it base 60 to some readers: write a decimal number.",
    ),
    (r"[-+]?[0-9]*,[0-9]+", "Write a decimal point, not a comma."),
    (r"[-+]?[0-9][0-9_]*_[0-9_.]*", "Write the number without underscores."),
    (r"[-+]?\.?(nan|inf|infinity)", "Only finite numbers are allowed."),
    (r"y|n|yes|no|on|off|true|false", "YAML takes this word for true or false: write a number."),
    (r"[-+]?[0-9]*\.?[0-9]+ *[^0-9.\s].*", "Write the number alone: its unit is in the key."),
)


def decimal(node: Node) -> float | None:
    """The number that a plain scalar is in decimal notation; None when it is not one."""
    if isinstance(node, Scalar) and node.plain and _DECIMAL.fullmatch(node.text):
        return float(node.text)
    return None


def integer(node: Node, *, hexadecimal: bool = False) -> int | None:
    """The whole number that a plain scalar is, as 0x40 too where `hexadecimal`; None when it is not one."""
    if isinstance(node, Scalar) and node.plain:
        if _INTEGER.fullmatch(node.text):
            return int(node.text)
        if hexadecimal and _HEXADECIMAL.fullmatch(node.text):
            return int(node.text, 16)
    return None


def is_text(plain: str) -> bool:
    """Whether every YAML reader takes a plain scalar for text."""
    return plain.lower() not in _NOT_TEXT and not re.match(r"[-+.]*[0-9]", plain)


def surprise(node: Node) -> str:
    """Why what looks like a number is not taken for one; empty when there is nothing to say."""
    if not isinstance(node, Scalar) or len(node.text) > 60:  # the patterns are slow on long text
        return ""
    if not node.plain:
        return "Remove the quotes: they make it text." if _DECIMAL.fullmatch(node.text) else ""
    for pattern, reason in _SURPRISES:
        if re.fullmatch(pattern, node.text, re.IGNORECASE):
            return reason
    return ""
