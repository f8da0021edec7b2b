"""Names of plans, tests, labels and access keys: one rule for all that a caller may choose as a handle."""

import re

NAME_PATTERN = r"^[A-Za-z0-9][A-Za-z0-9._-]{0,99}$"
NAME_RULE = "a letter or digit, then letters, digits, '.', '_' and '-', at most 100 in all"


def is_name(text: str) -> bool:
    """True for what may be a name; nothing else is ever stored as one."""
    return re.match(NAME_PATTERN, text) is not None and not text.endswith("\n")
