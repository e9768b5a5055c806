"""Numbers as a reader sees them."""

from __future__ import annotations

import math
from collections.abc import Sequence

MINUS = "\N{MINUS SIGN}"
NOTHING = "\N{EN DASH}"


def number(value: object, digits: int = 3) -> str:
    """Write a number with so many figures that count; a dash where there is none."""
    found = as_float(value)
    if math.isnan(found):
        return NOTHING
    if math.isinf(found):
        return "unlimited" if found > 0 else f"{MINUS}unlimited"
    if found == 0:
        return "0"
    magnitude = math.floor(math.log10(abs(found)))
    if magnitude < -4 or magnitude >= 9:
        return signed(f"{found:.{digits - 1}e}")
    return signed(f"{found:,.{max(0, digits - 1 - magnitude)}f}")


def fixed(value: object, decimals: int = 2) -> str:
    """Write a number with so many decimals; a dash where there is none."""
    found = as_float(value)
    if math.isnan(found):
        return NOTHING
    if math.isinf(found):
        return number(found)
    text = f"{found:,.{decimals}f}"
    return signed(text if float(text.replace(",", "")) else text.lstrip("-"))


def percent(value: object) -> str:
    """Write a share in per cent, without claiming 0 or 100 where it is not."""
    found = as_float(value)
    if math.isnan(found):
        return NOTHING
    if 0 < found < 0.005:
        return "<1%"
    if 0.995 <= found < 1:
        return ">99%"
    return signed(f"{100 * found:.0f}%")


def signed(text: str) -> str:
    """Replace a hyphen by a minus sign."""
    return text.replace("-", MINUS)


def as_float(value: object) -> float:
    """Return a float, NaN for anything that is not a number."""
    if value is None or isinstance(value, bool | str):
        return math.nan
    try:
        return float(value)  # type: ignore[arg-type]
    except (TypeError, ValueError):
        return math.nan


def counted(count: int, noun: str, plural: str = "") -> str:
    """Write a count with its noun: 1 period, 2 periods."""
    return f"{count:,} {noun if count == 1 else plural or noun + 's'}"


def listed(names: Sequence[str], at_most: int = 6) -> str:
    """Write names as a list in a sentence, the rest as a count."""
    shown, rest = list(names[:at_most]), len(names) - at_most
    if rest > 0:
        return f"{', '.join(shown)} and {rest} more"
    return shown[0] if len(shown) == 1 else " and ".join(filter(None, [", ".join(shown[:-1]), *shown[-1:]]))


def cut(name: str, at_most: int) -> str:
    """Return a name that fits a picture: cut in the middle, so that both ends stay readable."""
    if len(name) <= at_most:
        return name
    head = (at_most - 1 + 1) // 2
    return f"{name[:head]}…{name[len(name) - (at_most - 1 - head) :]}"
