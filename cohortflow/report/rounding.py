"""How numbers are printed: the only place that rounds.

A printed 0% or 100% means exactly that; a count of 0 means nobody. What is not known is said in words, never
shown as 0. Columns that must foot are rounded together.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from typing import Any

import numpy as np
import pandas as pd

UNKNOWN = "not known"
EXACT = 1e-12
CURRENCY_SIGNS = {"GBP": "£", "EUR": "€", "USD": "$"}
UNITS = {"own": "period", "step": "step"}


def missing(value: Any) -> bool:
    """True for None, NaN and pandas' missing values."""
    return value is None or value is pd.NA or (isinstance(value, (float, np.floating)) and math.isnan(value))


def percent(share: float, decimals: int = 1) -> str:
    """A fraction as a percentage; what would round to 0% or 100% without being so is printed as a bound.

    >>> percent(0.1234), percent(0.0), percent(0.0002), percent(0.99999), percent(1.0), percent(float("nan"))
    ('12.3%', '0%', '<0.1%', '>99.9%', '100%', 'not known')
    """
    if missing(share):
        return UNKNOWN
    if math.isinf(share):
        return "no limit"
    sign, size = ("-" if share < 0 else ""), abs(share)
    if size <= EXACT:
        return "0%"
    if abs(size - 1) <= EXACT:
        return f"{sign}100%"
    step = 10.0**-decimals
    if size * 100 < step / 2:
        return f"{'>-' if share < 0 else '<'}{step:.{decimals}f}%"
    text = f"{size * 100:.{decimals}f}"
    if size < 1 and float(text) >= 100:
        return f"{'<-' if share < 0 else '>'}{100 - step:.{decimals}f}%"
    return f"{sign}{text}%"


def count(number: float) -> str:
    """A number of customers, rows or moves; expected numbers are rounded, and a positive one is never 0.

    >>> count(12345), count(0), count(0.2), count(-7.6), count(float("nan"))
    ('12,345', '0', 'under 1', '-8', 'not known')
    """
    if missing(number):
        return UNKNOWN
    if math.isinf(number):
        return "no limit"
    if abs(number) <= EXACT:
        return "0"
    if abs(number) <= 0.5:
        return "under 1"
    return f"{round(float(number)):,}"


def signed(number: float, form: Callable[[float], str] = count) -> str:
    """The same with a sign in front of a gain.

    >>> signed(12.4), signed(-3), signed(0), signed(0.2)
    ('+12', '-3', '0', 'under 1')
    """
    text = form(number)
    return f"+{text}" if not missing(number) and number > 0 and text[0].isdigit() else text


def span(low: float, high: float, form: Callable[[float], str] = count) -> str:
    """An interval: "11.2% to 13.5%" in short.

    >>> span(0.112, 0.135, percent), span(0.0, 0.161, percent), span(900, 1100.2)
    ('11.2 to 13.5%', '0 to 16.1%', '900 to 1,100')
    """
    if missing(low) or missing(high):
        return UNKNOWN
    first, second = form(low), form(high)
    if first == second:
        return first
    plain = first[:-1].replace(".", "").replace("-", "").isdigit()
    if first.endswith("%") and second.endswith("%") and plain:
        first = first[:-1]
    return f"{first} to {second}"


def decimal(number: float, decimals: int = 1) -> str:
    """A plain number: mean times, effect sizes, statistics.

    >>> decimal(7.44), decimal(1234.5), decimal(float("inf")), decimal(0.0004)
    ('7.4', '1,234.5', 'no limit', '<0.1')
    """
    if missing(number):
        return UNKNOWN
    if math.isinf(number):
        return "no limit"
    step = 10.0**-decimals
    if EXACT < abs(number) < step / 2:
        return f"{'>-' if number < 0 else '<'}{step:.{decimals}f}"
    return f"{number:,.{decimals}f}"


def unit(kind: str, number: float = 2) -> str:
    """The period's name after a number: "month", "months"; steps and own periods have names of their own.

    >>> unit("month"), unit("own", 1), unit("step")
    ('months', 'period', 'steps')
    """
    word = UNITS.get(kind, kind)
    return word if number == 1 else f"{word}s"


def duration(periods: float, kind: str, decimals: int = 1) -> str:
    """A time in periods: "7.4 months"; infinite: "never", because nobody ever gets there.

    >>> duration(7.44, "month"), duration(1, "year", 0), duration(float("inf"), "month")
    ('7.4 months', '1 year', 'never')
    """
    if missing(periods):
        return UNKNOWN
    if math.isinf(periods):
        return "never"
    text = decimal(periods, decimals)
    return f"{text} {unit(kind, 1 if text == '1' else 2)}"


def money(amount: float, currency: str, decimals: int = 0) -> str:
    """An amount of money with its sign or code.

    >>> money(1234.5, "GBP"), money(-3.2, "SEK", 2), money(0.3, "EUR")
    ('£1,234', '-SEK 3.20', 'under €1')
    """
    if missing(amount):
        return UNKNOWN
    mark = CURRENCY_SIGNS.get(currency, f"{currency} ")
    step = 10.0**-decimals
    if EXACT < abs(amount) < step / 2:
        return f"under {mark}{step:,.{decimals}f}"
    return f"{'-' if amount < 0 else ''}{mark}{abs(amount):,.{decimals}f}"


def foot(parts: Sequence[float], total: float | None = None) -> list[int]:
    """Whole numbers near `parts` that add up exactly to the rounded total (largest remainders first).

    `total` is the rounded sum that the column must show; without it, the rounded sum of the parts.

    >>> foot([10.4, 10.4, 10.4])            # 31.2 rounds to 31, three times 10 makes 30
    [11, 10, 10]
    >>> foot([-5.5, 3.5], -2)
    [-5, 3]
    """
    values = np.asarray(parts, dtype=float)
    target = round(float(values.sum())) if total is None else round(float(total))
    whole = np.floor(values)
    short = int(target - whole.sum())
    order = np.argsort(-(values - whole), kind="stable")
    spread, extra = divmod(short, max(len(values), 1))
    whole += spread
    whole[order[:extra]] += 1
    return [int(w) for w in whole]
