"""Labelled examples planted again, quieter and in other noise.

Few labels say little about how a family looks near the threshold. A whitened snippet
around a loud example, scaled down and added to whitened noise from elsewhere, shows it.
Its own noise comes along, scaled down as well, so a replanted example is never louder
than half its parent.
"""

from __future__ import annotations

import numpy as np

#: A replanted example has at most this share of its parent's SNR, so that the parent's
#: noise adds at most a quarter of the variance (own choice).
LARGEST_SHARE = 0.5


def faded_snippet(
    white: np.ndarray, *, centre: int, half: int, taper: int
) -> tuple[np.ndarray, np.ndarray]:
    """Cut a whitened stretch around an example and fade its ends.

    Parameters
    ----------
    white : ndarray, shape (n,)
        Whitened strain, unit variance.
    centre, half, taper : int
        Samples: middle, half-length, and length of the cosine fade inside each end.

    Returns
    -------
    snippet, fade : ndarray, shape (2 * half,)
        The faded samples, and the fade itself (1 in the middle).

    Raises
    ------
    ValueError
        The stretch leaves the data, holds missing samples, or the fade is too long.
    """
    first, last = centre - half, centre + half
    if first < 0 or last > len(white):
        raise ValueError(
            f"samples {first}..{last} leave the data of {len(white)}; cut a shorter "
            "snippet"
        )
    if not 0 <= taper <= half:
        raise ValueError(f"taper={taper} must lie within 0..{half}")
    out = np.array(white[first:last], dtype=float)
    if not np.all(np.isfinite(out)):
        raise ValueError(f"samples {first}..{last} hold missing values")
    fade = np.ones(len(out))
    rise = 0.5 - 0.5 * np.cos(np.pi * (np.arange(taper) + 0.5) / max(taper, 1))
    fade[:taper] = rise
    fade[len(fade) - taper :] = rise[::-1]
    return out * fade, fade


def replant(
    snippet: np.ndarray,
    fade: np.ndarray,
    noise: np.ndarray,
    *,
    at: int,
    parent_snr: float,
    snr: float,
) -> np.ndarray:
    """Add a quieter copy of a snippet to other noise.

    Parameters
    ----------
    snippet, fade : ndarray, shape (m,)
        From :func:`faded_snippet`.
    noise : ndarray, shape (n,)
        Whitened noise without a transient near the place.
    at : int
        Sample of the noise that the snippet's middle comes to.
    parent_snr, snr : float
        SNR of the example and of the copy.

    Returns
    -------
    ndarray, shape (n,)
        Unit variance again: under the copy the noise is lowered by what the snippet's
        own noise adds.

    Raises
    ------
    ValueError
        The copy would be louder than half its parent, or does not fit.
    """
    share = snr / parent_snr
    if not 0 < share <= LARGEST_SHARE:
        raise ValueError(
            f"snr={snr:g} must lie above 0 and at most {LARGEST_SHARE:g} of the "
            f"example's {parent_snr:g}; the example's own noise would count"
        )
    first = at - len(snippet) // 2
    if first < 0 or first + len(snippet) > len(noise):
        raise ValueError(f"a snippet of {len(snippet)} samples does not fit at {at}")
    out = np.array(noise, dtype=float)
    under = slice(first, first + len(snippet))
    out[under] = np.sqrt(1.0 - (share * fade) ** 2) * out[under] + share * snippet
    return out


def draw_snrs(
    parent_snr: float, count: int, *, lowest: float, rng: np.random.Generator
) -> np.ndarray:
    """Draw SNRs for copies, logarithmically uniform from ``lowest`` to half the parent.

    Returns
    -------
    ndarray, shape (count,)
        Empty where the parent is too quiet to be replanted.
    """
    top = LARGEST_SHARE * parent_snr
    if top <= lowest:
        return np.zeros(0)
    return np.exp(rng.uniform(np.log(lowest), np.log(top), count))
