"""What a cell may look like: the declared number and time grammars, and nothing else."""

from __future__ import annotations

import re
from dataclasses import dataclass
from datetime import date
from functools import lru_cache

from meterfix.model.calendar import DAY, HOUR, SECOND

MINUTE = 60 * SECOND
"""Microseconds in a minute."""
_LARGEST_OFFSET = 14 * 60
"""Largest offset of any zone from UTC, in minutes (IANA time zone database)."""
_EPOCH_ORDINAL = date(1970, 1, 1).toordinal()

_TOKENS = {
    "Y": r"(?P<year>[0-9]{4})",
    "m": r"(?P<month>[0-9]{2})",
    "d": r"(?P<day>[0-9]{2})",
    "H": r"(?P<hour>[0-9]{2})",
    "M": r"(?P<minute>[0-9]{2})",
    "S": r"(?P<second>[0-9]{2})",
    "f": r"(?P<fraction>[0-9]{1,6})",
    "z": r"(?P<offset>Z|[+-][0-9]{2}:?[0-9]{2})",
}
WIDTHS = {"Y": 4, "m": 2, "d": 2, "H": 2, "M": 2, "S": 2}
"""Digits of the tokens that always have the same number of them."""


def number_pattern(decimal_mark: str, thousands_mark: str = "") -> str:
    r"""Return the regular expression, without anchors, of a number with the declared marks.

    An optional sign, digits, optionally the decimal mark and more digits, optionally a power
    of ten. No nan, inf, hexadecimal or other digits than 0 to 9; `12.` and `.5` are no numbers.
    """
    whole = "[0-9]+"
    if thousands_mark:
        whole = f"(?:[0-9]+|[0-9]{{1,3}}(?:{re.escape(thousands_mark)}[0-9]{{3}})+)"
    return f"[+-]?{whole}(?:{re.escape(decimal_mark)}[0-9]+)?(?:[eE][+-]?[0-9]+)?"


def format_parts(time_format: str) -> tuple[tuple[str, str], ...]:
    """Return a time format as (token letter, '') and ('', literal character) in order.

    Raises
    ------
    ValueError
        If a token is not one of %Y %m %d %H %M %S %f %z, occurs twice, or the date is not
        complete; a two-digit year can therefore not be declared.
    """
    parts: list[tuple[str, str]] = []
    position = 0
    while position < len(time_format):
        character = time_format[position]
        if character != "%":
            parts.append(("", character))
            position += 1
            continue
        letter = time_format[position + 1 : position + 2]
        if letter == "%":
            parts.append(("", "%"))
        elif letter in _TOKENS:
            parts.append((letter, ""))
        else:
            allowed = " ".join(f"%{letter}" for letter in _TOKENS)
            message = f"time format {time_format!r}: '%{letter}' is not known; allowed: {allowed}"
            raise ValueError(message)
        position += 2
    tokens = [letter for letter, _ in parts if letter]
    if len(set(tokens)) != len(tokens) or not {"Y", "m", "d"} <= set(tokens):
        message = f"time format {time_format!r} must hold %Y, %m and %d, and each token once"
        raise ValueError(message)
    return tuple(parts)


@dataclass(frozen=True)
class TimeGrammar:
    """The declared time format, strict: every token has its digits, every literal stands."""

    time_format: str
    hour_24: bool
    pattern: re.Pattern[str]
    has_offset: bool

    def read(self, text: str) -> int | str:  # noqa: PLR0911 - one return per mistake
        """Return the time that a text holds, or a sentence that says why it holds none.

        The time is in microseconds since 1970: UTC if the format has an offset, else the local
        clock as if it showed UTC.
        """
        found = self.pattern.fullmatch(text)
        if found is None:
            return f"time {text[:60]!r} does not fit the declared format {self.time_format!r}"
        fields = found.groupdict()
        try:
            day = date(int(fields["year"]), int(fields["month"]), int(fields["day"]))
        except ValueError:
            return f"time {text[:60]!r} names a date that does not exist"
        hour, minute, second = (int(fields.get(k) or 0) for k in ("hour", "minute", "second"))
        microsecond = int((fields.get("fraction") or "0").ljust(6, "0"))
        if minute > 59 or second > 59 or hour > 24:
            return f"time {text[:60]!r} names a time of day that does not exist"
        if hour == 24:
            if not self.hour_24:
                return f"time {text[:60]!r}: 24:00 is not declared for this source"
            if minute or second or microsecond:
                return f"time {text[:60]!r} lies after 24:00"
        offset = _offset_minutes(fields.get("offset") or "Z")
        if offset is None:
            return f"time {text[:60]!r} has an offset that no zone has"
        days = day.toordinal() - _EPOCH_ORDINAL
        wall = days * DAY + hour * HOUR + minute * MINUTE + second * SECOND + microsecond
        return wall - offset * MINUTE


def _offset_minutes(text: str) -> int | None:
    """Return an offset in minutes east of UTC, or None if no zone has it."""
    if text == "Z":
        return 0
    hours, minutes = int(text[1:3]), int(text[-2:])
    total = 60 * hours + minutes
    if minutes > 59 or total > _LARGEST_OFFSET:
        return None
    return -total if text[0] == "-" else total


@lru_cache(maxsize=256)
def time_grammar(time_format: str, *, hour_24: bool) -> TimeGrammar:
    """Return the grammar of a declared time format."""
    parts = format_parts(time_format)
    pattern = "".join(
        _TOKENS[letter] if letter else re.escape(literal) for letter, literal in parts
    )
    return TimeGrammar(
        time_format=time_format,
        hour_24=hour_24,
        pattern=re.compile(pattern, re.ASCII),
        has_offset=any(letter == "z" for letter, _ in parts),
    )
