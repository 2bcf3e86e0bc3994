"""GPS seconds and UTC, by the astronomers' library of fundamental routines.

``erfa`` comes with astropy, the leap-second list with it; nothing is downloaded. It is
used without the rest of astropy, whose import alone would take longer than an answer.
"""

from __future__ import annotations

import warnings

#: GPS 0 is 1980-01-06 00:00:00 UTC, a Julian day; TAI was 19 s ahead of UTC, and
#: is 19 s ahead of GPS for good.
_EPOCH_JD = 2444244.5
_TAI_MINUS_GPS_S = 19.0
_DAY_S = 86400.0


def gps_to_utc_text(gps: float) -> str:
    """Write a GPS time as UTC, to the second.

    Examples
    --------
    >>> gps_to_utc_text(1000000000)
    '2011-09-14 01:46:25'
    >>> gps_to_utc_text(1167264017)
    '2016-12-31 23:59:60'
    """
    import erfa

    day, second = divmod(float(gps) + _TAI_MINUS_GPS_S, _DAY_S)
    with warnings.catch_warnings():
        # leap seconds of years to come are not known to anyone
        warnings.simplefilter("ignore", erfa.ErfaWarning)
        utc = erfa.taiutc(_EPOCH_JD + day, second / _DAY_S)
        # to the millisecond, then cut: a second is not over before it ends
        year, month, date, clock = erfa.d2dtf("UTC", 3, *utc)
    hour, minute, second = (int(clock[name]) for name in ("h", "m", "s"))
    return f"{year:04d}-{month:02d}-{date:02d} {hour:02d}:{minute:02d}:{second:02d}"


def utc_text_to_gps(text: str) -> float:
    """Turn UTC such as ``2011-09-14 01:46:25`` into GPS seconds.

    Examples
    --------
    >>> utc_text_to_gps("2024-01-01 00:00:00")
    1388102418.0
    """
    import erfa

    date, _, clock = text.strip().replace("T", " ").partition(" ")
    hour, minute, second = (clock or "0:0:0").split(":")
    days = [int(part) for part in date.split("-")]
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", erfa.ErfaWarning)
        utc = erfa.dtf2d("UTC", *days, int(hour), int(minute), float(second))
        day, rest = erfa.utctai(*utc)
    seconds = (float(day) - _EPOCH_JD) * _DAY_S + float(rest) * _DAY_S
    return round(seconds - _TAI_MINUS_GPS_S, 6)
