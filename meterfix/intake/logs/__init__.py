"""Logs: files found, read and parsed.

Two layouts: a row per time with a column per quantity, and a row per tag and time.
"""

from meterfix.intake.logs.both_paths import parse, parse_many
from meterfix.intake.logs.careful import parse_careful
from meterfix.intake.logs.content import open_content
from meterfix.intake.logs.discover import Found, Looked, NotRead, look, read_stable
from meterfix.intake.logs.fast import parse_fast
from meterfix.intake.logs.tail import Tail, tail_of
from meterfix.intake.logs.text import Refusal, ends_with_line_end

__all__ = [
    "Found",
    "Looked",
    "NotRead",
    "Refusal",
    "Tail",
    "ends_with_line_end",
    "look",
    "open_content",
    "parse",
    "parse_careful",
    "parse_fast",
    "parse_many",
    "read_stable",
    "tail_of",
]
