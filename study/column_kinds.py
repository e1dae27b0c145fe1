"""The kinds of column that Cutbank tells apart."""

from __future__ import annotations

import re
from typing import Final, Literal

ColumnKind = Literal["number", "whole number", "yes/no", "text", "date"]
NUMERIC: Final = ("number", "whole number", "yes/no")


def kind_of(sql_type: str) -> ColumnKind:
    """What a column of an SQL type holds."""
    if sql_type == "BOOLEAN":
        return "yes/no"
    if sql_type in ("DOUBLE", "FLOAT") or re.fullmatch(r"DECIMAL\(\d+,\d+\)", sql_type):
        return "number"
    if re.fullmatch(r"U?(TINY|SMALL|BIG|HUGE)?INT(EGER)?", sql_type):
        return "whole number"
    return "date" if sql_type == "DATE" or re.fullmatch(r"TIMESTAMP.*", sql_type) else "text"
