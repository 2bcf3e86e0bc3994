"""GPS seconds and UTC, by the astronomers' library.

Its leap-second list comes with the package; nothing is downloaded.
"""

from __future__ import annotations


def gps_to_utc_text(gps: float) -> str:
    """Write a GPS time as UTC, to the second.

    Examples
    --------
    >>> gps_to_utc_text(1000000000)
    '2011-09-14 01:46:25'
    >>> gps_to_utc_text(1167264017)
    '2016-12-31 23:59:60'
    """
    return _time(gps, "gps").utc.iso[:19]


def utc_text_to_gps(text: str) -> float:
    """Turn UTC such as ``2011-09-14 01:46:25`` into GPS seconds.

    Examples
    --------
    >>> utc_text_to_gps("2024-01-01 00:00:00")
    1388102418.0
    """
    return round(float(_time(text, "iso").gps), 6)


def _time(value, form: str):
    from astropy.time import Time
    from astropy.utils import iers

    iers.conf.auto_download = False
    return Time(value, format=form, scale="tai" if form == "gps" else "utc")
