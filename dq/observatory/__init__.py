"""The invented site Orrin Vale: a made night with known truth; no stage imports it.

curves     noise spectra: design curves, ground models, sensors, lines
noise      Gaussian noise of a spectrum, mains, tones, slow drift
waveforms  disturbances and chirps as functions of time
snr        optimal SNR, peak time and peak frequency of a waveform
settings   rates, couplings, strengths
channels   the channel list, with noise and habits
families   random members of every family
bilinear   a mirror's pitch times the beam's offset: an option
schedule   what happens when, how loud, and who sees it
recording  samples, storage types, files
listing    lists for the user, truth for the tests
site       ``make_site``
"""

from dq.observatory.settings import COUPLINGS, FAMILY_RATES, SiteSettings
from dq.observatory.site import make_site

__all__ = ["COUPLINGS", "FAMILY_RATES", "SiteSettings", "make_site"]
