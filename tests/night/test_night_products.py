"""Products of two channels: samples, gaps, and a planted bilinear coupling."""

import numpy as np
import pytest
from memory_channel import NS, MemoryChannel

from dq.config import load_config
from dq.errors import ChannelError, InputError
from dq.night.inputs import read_inputs
from dq.night.products import ProductData, product_data, product_rows
from dq.night.run import run_night
from dq.tables import WITNESSES, csv_table

GPS = 1_420_000_000


class Recorded(MemoryChannel):
    """A channel in memory with the rest of the reader's face."""

    def __init__(self, *args):
        """Make a channel without problems."""
        super().__init__(*args)
        self.problems, self.read_problems = [], []

    def read(self, start_ns, end_ns):
        """Give series with the reader's methods."""
        from dq.store.reader import Series

        return [
            Series(s.start_ns, s.rate, s.values) for s in super().read(start_ns, end_ns)
        ]


def channels(rng, *, seconds=600, slow_rate=16, offset=40.0):
    t, u = np.arange(seconds * 256) / 256, np.arange(seconds * slow_rate) / slow_rate
    fast = rng.standard_normal(len(t))
    slow = offset + np.sin(2 * np.pi * 0.2 * u)
    return (
        Recorded("OV-F", 256, GPS * NS, fast),
        Recorded("OV-S", slow_rate, GPS * NS, slow),
        fast * np.sin(2 * np.pi * 0.2 * t),
    )


def test_a_product_is_the_samples_product_without_the_slow_offset(rng):
    fast, slow, truth = channels(rng)
    data = ProductData("OV-F@product-OV-S", fast, slow)
    (series,) = data.read(GPS * NS, (GPS + 600) * NS)
    first = round((series.start_ns / NS - GPS) * 256)
    # the interpolation needs 16 slow samples, 1 s, on either side
    assert first == 256
    assert len(series.values) == pytest.approx(598 * 256, abs=16)
    expected = truth[first : first + len(series.values)]
    np.testing.assert_allclose(series.values, expected, atol=0.02 * 4)
    assert data.recorded.starts[0] >= series.start_ns


def test_a_product_does_not_depend_on_where_reading_begins(rng):
    fast, slow, _ = channels(rng, slow_rate=10)
    data = ProductData("p", fast, slow)
    (whole,) = data.read(GPS * NS, (GPS + 600) * NS)
    (part,) = data.read((GPS + 200) * NS + 12345, (GPS + 333) * NS)
    first = round((part.start_ns - whole.start_ns) * 256 / NS)
    np.testing.assert_array_equal(
        part.values, whole.values[first : first + len(part.values)]
    )


def test_where_one_channel_is_missing_there_is_no_product(rng):
    fast, slow, _ = channels(rng)
    fast.values[300 * 256 : 301 * 256] = np.nan
    slow.values[400 * 16 : 402 * 16] = np.nan
    parts = ProductData("p", fast, slow).read(GPS * NS, (GPS + 600) * NS)
    times = [(p.start_ns / NS - GPS, p.end_ns / NS - GPS) for p in parts]
    assert len(times) == 3
    assert times[0][1] == pytest.approx(300, abs=0.01)
    assert times[1] == (pytest.approx(301, abs=0.01), pytest.approx(399, abs=0.1))
    assert times[2][0] == pytest.approx(403, abs=0.1)


def test_the_fast_channel_must_be_the_faster_one(rng):
    fast, slow, _ = channels(rng)
    with pytest.raises(ChannelError, match="exchange them"):
        ProductData("p", slow, fast)


def coupled(channels):
    """Put bursts of noise into OV-B and the strain where both channels are large."""
    rng = np.random.default_rng(11)
    strain, fast = channels["OV-STRAIN"][1], rng.standard_normal(256 * 256)
    slow = 0.3 * rng.standard_normal(256 * 16)
    t, u = np.arange(256 * 256) / 256, np.arange(256 * 16) / 16
    # out of step: a shared rhythm would pass for chance under circular slides
    times = np.arange(12.0, 250.0, 4.25) + rng.uniform(-1.2, 1.2, 56)
    both = times[::4]
    for k, at in enumerate(times):
        envelope = np.exp(-0.5 * ((t - at) / 0.03) ** 2)
        wave = 14.0 * np.cos(2 * np.pi * 40 * (t - at)) * envelope
        fast += wave
        if at in both:
            slow += 10 * np.exp(-0.5 * ((u - at) / 0.8) ** 2) * (-1) ** k
            late = np.arange(256 * 512) / 512 - at
            strain += (
                10.0 * np.cos(2 * np.pi * 40 * late) * np.exp(-0.5 * (late / 0.03) ** 2)
            )
    channels["OV-A"] = (256, rng.standard_normal(256 * 256))
    channels["OV-B"] = (256, fast)
    channels["OV-SLOW"] = (16, slow)


PRODUCT = '[[witnesses.products]]\nfast = "OV-B"\nslow = "OV-SLOW"\n'


def test_a_planted_product_is_the_more_significant_witness(small_site, tmp_path, here):
    config = small_site(dead=False, edit=coupled, extra=PRODUCT)
    out = tmp_path / "night"
    start = 1420000000
    assert run_night(load_config(config), start=start, end=start + 256, out=out)
    table = csv_table((out / "witnesses.csv").read_text(), WITNESSES)
    rows = table.set_index("channel")
    product = rows.loc["OV-B@product-OV-SLOW"]
    assert product["accepted"]
    assert product["significance"] > rows.loc["OV-B", "significance"]
    again = run_night(load_config(config), start=start, end=start + 256, out=out)
    assert again.nothing_to_do


def test_pairs_name_channels_of_the_list(small_site):
    wrong = PRODUCT.replace("OV-SLOW", "OV-SLO")
    config = small_site(dead=False, edit=coupled, extra=wrong)
    with pytest.raises(InputError, match="nearest is 'OV-SLOW'; correct the name"):
        product_rows(read_inputs(load_config(config)))


def test_a_product_is_safe_only_if_both_are(small_site):
    config = small_site(dead=False, edit=coupled, extra=PRODUCT)
    listing = config.parent / "channels.csv"
    for fast, slow, both in (
        ("yes", "yes", "yes"),
        ("yes", "no", "no"),
        ("yes", "", ""),
    ):
        listing.write_text(
            "channel,role,safe\nOV-STRAIN,strain,\n"
            f"OV-B,auxiliary,{fast}\nOV-SLOW,auxiliary,{slow}\n"
        )
        inputs = read_inputs(load_config(config))
        (row,) = product_rows(inputs)
        assert (row.name, row.safe) == ("OV-B@product-OV-SLOW", both)
        assert product_data(inputs, row.name).rate == 256
