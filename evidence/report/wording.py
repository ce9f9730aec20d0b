"""How a number, a probability, an interval and a name of the user's are put into text."""

from __future__ import annotations

import math
import re
from collections.abc import Iterable
from typing import Any

__all__ = [
    "in_words",
    "interval",
    "nats",
    "nats_decimals",
    "number",
    "probability",
    "quantity",
    "short_name",
    "visible",
]

NOTHING = "-"
NAME_LIMIT = 72
FINEST_NATS = 4

# Control characters could drive a terminal, direction and invisible marks could make one name
# look like another, lone surrogates have no encoding.
_UNPRINTABLE = re.compile(
    "[\x00-\x1f\x7f-\x9f\u00ad\u034f\u061c\u115f\u1160\u17b4\u17b5\u180b-\u180f\u200b-\u200f"
    "\u2028-\u202e\u2060-\u206f\u3164\ufe00-\ufe0f\ufeff\uffa0\ufff9-\ufffb\ud800-\udfff"
    "\U000e0000-\U000e0fff]"
)
_SPOKEN = {"\n": "\\n", "\r": "\\r", "\t": "\\t"}


def visible(text: Any) -> str:
    r"""Return the text with every unprintable character as an escape such as ``\u202e``."""
    return _UNPRINTABLE.sub(_escape, str(text))


def _escape(match: re.Match[str]) -> str:
    sign = match.group()
    if sign in _SPOKEN:
        return _SPOKEN[sign]
    code = ord(sign)
    if code > 0xFFFF:
        return f"\\U{code:08x}"
    return f"\\u{code:04x}" if code > 0xFF else f"\\x{code:02x}"


def short_name(name: Any, limit: int = NAME_LIMIT) -> str:
    """Return a name fit for a line: visible, a very long one by its beginning and its end.

    Parameters
    ----------
    name : str
        As the user gave it.
    limit : int
        Characters above which the middle is left out.
    """
    text = visible(name)
    if len(text) <= limit:
        return text
    left_out = len(text) - (limit - 25)
    head = (limit - 25) * 2 // 3
    tail = limit - 25 - head
    return f"{text[:head]}...[{left_out} more]...{text[-tail:]}"


def in_words(text: Any, names: Iterable[str] = ()) -> str:
    """Return a sentence fit for a paragraph: one line, with very long names shortened."""
    sentence = str(text)
    for name in sorted(names, key=len, reverse=True):
        if len(name) > NAME_LIMIT:
            sentence = sentence.replace(name, short_name(name))
    return visible(" ".join(sentence.split()))


def number(value: Any) -> float:
    """Return the value as a float, nan for what a record leaves open (None, text)."""
    if isinstance(value, str | bytes) or value is None:
        return math.nan
    try:
        return float(value)
    except (TypeError, ValueError, OverflowError):
        return math.nan


def nats_decimals(standard_error: Any) -> int:
    """Return how many decimals of a number in nats its standard error justifies.

    Two unless the error says otherwise: as far as the error's first digit when it is smaller
    (at most four), fewer when it is one nat or more.
    """
    error = number(standard_error)
    if not math.isfinite(error) or error <= 0.0:
        return 2
    first_digit = -math.floor(math.log10(error))
    return min(FINEST_NATS, max(2, first_digit)) if error < 1.0 else max(0, 1 + first_digit)


def nats(value: Any, decimals: int = 2) -> str:
    """Return a number with fixed decimals, "-" where there is none."""
    x = number(value)
    if math.isnan(x):
        return NOTHING
    if math.isinf(x):
        return "inf" if x > 0 else "-inf"
    if abs(x) >= 1e10:
        return f"{x:.6g}"
    text = f"{x:.{decimals}f}"
    return text[1:] if text.startswith("-") and not text.strip("-0.") else text


def error_nats(standard_error: Any) -> str:
    """Return a standard error in nats; one too small for the decimals as "<0.0001"."""
    error = number(standard_error)
    decimals = nats_decimals(error)
    if 0.0 < error < 0.5 * 10.0**-decimals:
        return f"<{10.0**-decimals:.{decimals}f}"
    return nats(error, decimals)


def probability(value: Any) -> str:
    """Return a probability with three decimals; what would round to 0 or 1 as a bound."""
    p = number(value)
    if math.isnan(p):
        return NOTHING
    if p < 0.001:
        return "<0.001"
    return ">0.999" if 0.9995 <= p < 1.0 else f"{p:.3f}"


def interval(value: Any, ends: Any) -> str:
    """Return a probability with its interval: "0.957 (0.953 to 0.961)"."""
    shown = probability(value)
    low, high = [number(end) for end in ends] if ends and len(ends) == 2 else (math.nan,) * 2
    if shown == NOTHING or math.isnan(low) or math.isnan(high):
        return shown
    return f"{shown} ({probability(low)} to {probability(high)})"


def quantity(value: Any, sd: Any = None) -> str:
    """Return a number in the user's units: four digits, or as many as two of the sd need."""
    x, spread = number(value), number(sd)
    if math.isnan(x):
        return NOTHING
    if math.isinf(x) or x == 0.0:
        return f"{x:.0f}"
    digits = 4
    if math.isfinite(spread) and spread > 0.0:
        needed = math.floor(math.log10(abs(x))) - math.floor(math.log10(spread)) + 2
        digits = min(10, max(digits, needed))
    return f"{x:#.{digits}g}".rstrip(".")
