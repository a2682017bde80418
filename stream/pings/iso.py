"""Times written as text: ISO 8601 and plain numbers, byte by byte.

Guarantee: digits beyond the microsecond are cut off, never rounded; what is not wholly understood is
unreadable.
"""

import numpy as np
from numpy.typing import NDArray

from stream.kernel import kernel

UNREADABLE, MISSING, INSTANT, LOCAL = 0, 1, 2, 3
AUTO, SECONDS, MILLIS, MICROS, NANOS, ISO = 0, 1, 2, 3, 4, 5
UNIT_CODES = {"auto": AUTO, "s": SECONDS, "ms": MILLIS, "us": MICROS, "ns": NANOS, "iso": ISO}

# Sizes that part the units of a bare number: 1e11 s is the year 5138, 1e11 ms the year 1973, and so on.
MILLIS_FROM, MICROS_FROM, NANOS_FROM = 10**11, 10**14, 10**17
# Times taken: 1970 up to what 64-bit nanoseconds hold (2262-04-11).
MAX_US = (2**63 - 1) // 1000

_ZERO, _NINE, _POINT, _COMMA, _COLON, _MINUS, _PLUS, _SPACE = 48, 57, 46, 44, 58, 45, 43, 32
_DAY_US, _HOUR_US, _MINUTE_US, _SECOND_US = 86_400_000_000, 3_600_000_000, 60_000_000, 1_000_000


@kernel
def digits_at_kernel(data: NDArray[np.uint8], start: int, stop: int, n: int) -> int:
    """Read n digits from start on; -1 where one is no digit or lies past stop."""
    if start + n > stop:
        return -1
    value = 0
    for i in range(start, start + n):
        digit = int(np.int64(data[i])) - _ZERO
        if digit < 0 or digit > 9:
            return -1
        value = value * 10 + digit
    return value


@kernel
def days_kernel(year: int, month: int, day: int) -> int:
    """Count days from 1970-01-01; -2**62 for a date that is none. Source: Hinnant 2013, days_from_civil."""
    if month < 1 or month > 12 or day < 1 or year < 1:
        return -(2**62)
    length = 31
    if month == 4 or month == 6 or month == 9 or month == 11:
        length = 30
    elif month == 2:
        is_leap = year % 4 == 0 and (year % 100 != 0 or year % 400 == 0)
        length = 29 if is_leap else 28
    if day > length:
        return -(2**62)
    y = year - 1 if month <= 2 else year
    m = month + 9 if month <= 2 else month - 3
    era = y // 400
    of_era = y - era * 400
    day_of_year = (153 * m + 2) // 5 + day - 1
    return era * 146_097 + of_era * 365 + of_era // 4 - of_era // 100 + day_of_year - 719_468


@kernel
def micros_at_kernel(data: NDArray[np.uint8], start: int, stop: int) -> tuple[int, int]:
    """Read the digits of a fraction of a second; give microseconds and where they end (-1: no digit)."""
    value = 0
    scale = 100_000
    at = start
    while at < stop and data[at] >= _ZERO and data[at] <= _NINE:
        value += (int(np.int64(data[at])) - _ZERO) * scale
        scale //= 10
        at += 1
    return value, (at if at > start else -1)


@kernel
def clock_at_kernel(data: NDArray[np.uint8], start: int, stop: int) -> tuple[int, int]:
    """Read hh:mm[:ss[.f]] or hhmm[ss[.f]]; give microseconds of the day and its end (-1: unreadable)."""
    hour = digits_at_kernel(data, start, stop, 2)
    at = start + 2
    has_colon = at < stop and data[at] == _COLON
    if has_colon:
        at += 1
    minute = digits_at_kernel(data, at, stop, 2)
    at += 2
    second = 0
    micros = 0
    if hour < 0 or minute < 0:
        return 0, -1
    more = at < stop and (data[at] == _COLON if has_colon else (data[at] >= _ZERO and data[at] <= _NINE))
    if more:
        if has_colon:
            at += 1
        second = digits_at_kernel(data, at, stop, 2)
        at += 2
        if second < 0:
            return 0, -1
        if at < stop and (data[at] == _POINT or data[at] == _COMMA):
            micros, at = micros_at_kernel(data, at + 1, stop)
            if at < 0:
                return 0, -1
    is_midnight = hour == 24 and minute == 0 and second == 0 and micros == 0
    # A leap second is written 60 and counts, as in POSIX time, as the first of the next minute.
    if (hour > 23 and not is_midnight) or minute > 59 or second > 60:
        return 0, -1
    return hour * _HOUR_US + minute * _MINUTE_US + second * _SECOND_US + micros, at


@kernel
def offset_at_kernel(data: NDArray[np.uint8], start: int, stop: int) -> tuple[int, int]:
    """Read Z, +hh, +hhmm or +hh:mm up to stop; give microseconds and the kind of time."""
    if start == stop:
        return 0, LOCAL
    sign = data[start]
    if sign == 90 or sign == 122:  # Z, z
        return 0, (INSTANT if start + 1 == stop else UNREADABLE)
    if sign != _PLUS and sign != _MINUS:
        return 0, UNREADABLE
    hours = digits_at_kernel(data, start + 1, stop, 2)
    minutes = 0
    at = start + 3
    if at < stop:
        if data[at] == _COLON:
            at += 1
        minutes = digits_at_kernel(data, at, stop, 2)
        at += 2
    if hours < 0 or hours > 23 or minutes < 0 or minutes > 59 or at != stop:
        return 0, UNREADABLE
    offset = hours * _HOUR_US + minutes * _MINUTE_US
    return (offset if sign == _PLUS else -offset), INSTANT


@kernel
def iso_kernel(data: NDArray[np.uint8], start: int, stop: int) -> tuple[int, int]:
    """Read one ISO 8601 time (extended or basic form, `T` or a space between); give t_us and its kind."""
    year = digits_at_kernel(data, start, stop, 4)
    at = start + 4
    is_extended = at < stop and data[at] == _MINUS
    if is_extended:
        at += 1
    month = digits_at_kernel(data, at, stop, 2)
    at += 2
    if is_extended:
        if at >= stop or data[at] != _MINUS:
            return 0, UNREADABLE
        at += 1
    day = digits_at_kernel(data, at, stop, 2)
    at += 2
    if year < 0 or month < 0 or day < 0 or at >= stop:
        return 0, UNREADABLE
    days = days_kernel(year, month, day)
    between = data[at]
    if days <= -(2**61) or (between != 84 and between != 116 and between != _SPACE):  # T, t
        return 0, UNREADABLE
    clock_us, at = clock_at_kernel(data, at + 1, stop)
    if at < 0:
        return 0, UNREADABLE
    offset_us, kind = offset_at_kernel(data, at, stop)
    return days * _DAY_US + clock_us - offset_us, kind


@kernel
def epoch_us_kernel(whole: int, billionths: int, unit: int) -> int:
    """Turn a number of units since 1970 into microseconds; -1 where it lies outside the times taken."""
    if unit == AUTO:
        unit = SECONDS
        if whole >= NANOS_FROM:
            unit = NANOS
        elif whole >= MICROS_FROM:
            unit = MICROS
        elif whole >= MILLIS_FROM:
            unit = MILLIS
    if unit == SECONDS:
        return whole * 1_000_000 + billionths // 1000 if whole <= MAX_US // 1_000_000 else -1
    if unit == MILLIS:
        return whole * 1000 + billionths // 1_000_000 if whole <= MAX_US // 1000 else -1
    if unit == MICROS:
        return whole if whole <= MAX_US else -1
    return whole // 1000


@kernel
def number_kernel(data: NDArray[np.uint8], start: int, stop: int, unit: int) -> int:
    """Read a plain decimal number as a time; -1 where it is none."""
    whole = 0
    at = start
    while at < stop and data[at] >= _ZERO and data[at] <= _NINE:
        whole = whole * 10 + (int(np.int64(data[at])) - _ZERO)
        at += 1
    if at == start or at - start > 19 or whole < 0:  # 19 digits may pass 2**63 and turn negative
        return -1
    billionths = 0
    if at < stop:
        if data[at] != _POINT or at + 1 == stop:
            return -1
        at += 1
        scale = 100_000_000
        while at < stop and data[at] >= _ZERO and data[at] <= _NINE:
            billionths += (int(np.int64(data[at])) - _ZERO) * scale
            scale //= 10
            at += 1
        if at < stop:
            return -1
    return epoch_us_kernel(whole, billionths, unit)


@kernel
def text_times_kernel(
    offsets: NDArray[np.int64],
    data: NDArray[np.uint8],
    unit: int,
    t_out: NDArray[np.int64],
    kind_out: NDArray[np.uint8],
) -> int:
    """Read a column of texts as times.

    Parameters
    ----------
    offsets : int64[n + 1]   where each text starts and the last one ends
    data : uint8[m]          UTF-8 bytes
    unit : int64             code of UNIT_CODES
    t_out : int64[n]         written: microseconds since 1970, in UTC or on the local clock
    kind_out : uint8[n]      written: UNREADABLE, MISSING, INSTANT or LOCAL

    Returns
    -------
    n_instant : int64        how many are INSTANT

    Source: ISO 8601-1:2019 (date and time of day, extended and basic), RFC 3339 (space for `T`).
    """
    n_instant = 0
    for i in range(len(t_out)):
        start, stop = offsets[i], offsets[i + 1]
        while start < stop and data[start] == _SPACE:
            start += 1
        while start < stop and data[stop - 1] == _SPACE:
            stop -= 1
        t_us, kind = 0, UNREADABLE
        if start == stop:
            kind = MISSING
        else:
            if unit != ISO:
                t_us = number_kernel(data, start, stop, unit)
                kind = INSTANT if t_us >= 0 else UNREADABLE
            if kind == UNREADABLE and unit in (ISO, AUTO):
                t_us, kind = iso_kernel(data, start, stop)
        t_out[i] = t_us
        kind_out[i] = kind
        if kind == INSTANT:
            n_instant += 1
    return n_instant
