"""Logs with a row per time and a column per quantity: files found, read and parsed."""

from meterfix.intake.logs.content import open_content
from meterfix.intake.logs.discover import Found, Looked, NotRead, look, read_stable
from meterfix.intake.logs.fast import parse_fast
from meterfix.intake.logs.tail import Tail, tail_of
from meterfix.intake.logs.text import Refusal, ends_with_line_end
from meterfix.intake.logs.wide import parse, parse_careful, parse_many

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
