"""Patterns: the bit sequences that are sent and expected.

`parse_pattern` turns a name into a `Pattern`; a `Reader` gives its packed bytes, word-parallel.
"""

from harness.signal.patterns.base import Pattern, PatternError
from harness.signal.patterns.naming import parse_pattern, table_pattern, word_pattern
from harness.signal.patterns.periodic import BytesPattern, PeriodicPattern, WordPattern
from harness.signal.patterns.readers import ROW_BYTES, Reader
from harness.signal.patterns.sequences import LongRegisterPattern, RegisterPattern, ShortRegisterPattern
from harness.signal.patterns.sources import BernoulliPattern
from harness.signal.patterns.table import KnownPattern, known_patterns

__all__ = [
    "ROW_BYTES",
    "BernoulliPattern",
    "BytesPattern",
    "KnownPattern",
    "LongRegisterPattern",
    "Pattern",
    "PatternError",
    "PeriodicPattern",
    "Reader",
    "RegisterPattern",
    "ShortRegisterPattern",
    "WordPattern",
    "known_patterns",
    "parse_pattern",
    "table_pattern",
    "word_pattern",
]
