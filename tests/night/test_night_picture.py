"""The picture against the table: maxima equal peaks; what cannot be drawn is said."""

from decimal import Decimal

import numpy as np
import pytest
from memory_channel import NS, MemoryChannel
from small_site import SITE_BURSTS, SITE_SECONDS, SITE_START

from dq.cli.main import main
from dq.config import parse_config
from dq.night.channel import analyse_channel
from dq.night.picture import energy_map, picture_window
from dq.tiles.plan import tile_step

GPS, RATE = 1_420_000_000, 512


def config():
    return parse_config(
        {
            "site": {"name": "Orrin Vale", "strain": "OV-STRAIN"},
            "data": {"files": ["x.h5"], "channels": "channels.csv"},
        }
    )


@pytest.fixture(scope="module")
def planted():
    """Bursts around a seam of blocks, the range from 100 s to 160 s."""
    rng = np.random.default_rng(12)
    x = rng.standard_normal(300 * RATE)
    t = np.arange(len(x)) / RATE
    seam = 64 * 2 - GPS % 64
    bursts = ((104.2, 30, 8, 12), (seam, 90, 5.66, 25), (140.7, 140, 40, 60))
    for t0, f0, q, rho in bursts:
        tau = q / (2 * np.pi * f0)
        h = np.cos(2 * np.pi * f0 * (t - t0)) * np.exp(-(((t - t0) / tau) ** 2))
        x += rho * h / np.sqrt(np.sum(h**2))
    data = MemoryChannel("OV-STRAIN", RATE, GPS * NS, x)
    start, end = (GPS + 100) * NS, (GPS + 160) * NS
    options = {"ready": None, "start_ns": start, "end_ns": end, "config": config()}
    return energy_map(data, **options), analyse_channel(data, **options), bursts


def test_the_pictures_maxima_are_the_tables_peaks(planted):
    picture, result, bursts = planted
    table = result.transients
    assert len(table) >= len(bursts)
    step = tile_step(0.2)
    for _, row in table.iterrows():
        at = row.gps_time - GPS - 100
        sigma_t = row.q / (4 * np.pi * row.frequency_hz)
        # the peak is moved off the plan's grid by up to a spacing on each axis
        near_t = np.abs(0.5 * (picture.time_s[1:] + picture.time_s[:-1]) - at)
        middle = np.sqrt(picture.frequency[1:] * picture.frequency[:-1])
        near_f = np.abs(np.log(middle / row.frequency_hz))
        part = picture.energy[near_f < 4 * step / row.q][:, near_t < sigma_t + 0.09]
        z = 1 + row.snr**2 / 2
        # the plan's best tile loses at most its mismatch against the moved one
        assert 0.8 * z <= part.max() <= 1.001 * z


def test_the_brightest_pixel_is_the_loudest_transient(planted):
    picture, result, _ = planted
    loudest = result.transients.loc[result.transients.snr.idxmax()]
    i, j = np.unravel_index(np.nanargmax(picture.energy), picture.energy.shape)
    assert np.isfinite(picture.energy).all()
    assert picture.time_s[j] + GPS + 100 == pytest.approx(loudest.gps_time, abs=0.2)
    assert picture.frequency[i] == pytest.approx(loudest.frequency_hz, rel=0.05)


def test_the_window_is_the_transient_and_half_a_second(planted):
    _, result, _ = planted
    row = result.transients.loc[result.transients.snr.idxmax()]
    at = Decimal(f"{row.gps_time:.6f}")
    start, end = picture_window(result, Decimal(GPS), Decimal(GPS + 300), at)
    assert start / NS == pytest.approx(row.gps_start - 0.5, abs=2e-3)
    assert end / NS == pytest.approx(row.gps_end + 0.5, abs=2e-3)


def find(small_site, tmp_path, *options):
    config_path = small_site()
    times = ["--start", str(SITE_START), "--end", str(SITE_START + SITE_SECONDS)]
    out = ["--out", str(tmp_path / "found.csv")]
    verb = ["find", str(config_path), "OV-STRAIN", *times, *out, *options]
    return main(verb)


def test_find_draws_the_transient_at_a_time(small_site, tmp_path):
    target = tmp_path / "one.png"
    at = str(SITE_START + SITE_BURSTS[1])
    for name in ("one.png", "two.png"):
        options = ("--picture", str(tmp_path / name), "--at", at)
        assert find(lambda n=name: small_site(n[:3]), tmp_path, *options) == 0
    content = target.read_bytes()
    assert content.startswith(b"\x89PNG")
    assert content == (tmp_path / "two.png").read_bytes()


@pytest.mark.parametrize(
    ("name", "options", "text"),
    [
        ("a.png", (), "256 s: one picture holds at most 64 s; give --at"),
        ("a.jpg", ("--at", str(SITE_START + 40)), "ends in .png"),
        ("no/a.png", ("--at", str(SITE_START + 40)), "does not exist"),
        ("a.png", ("--at", str(SITE_START - 1)), "outside the range"),
        ("a.png", ("--at", str(SITE_START + 90)), "the nearest one peaks at"),
    ],
)
def test_a_picture_that_cannot_be_drawn(
    small_site, tmp_path, capsys, name, options, text
):
    code = find(small_site, tmp_path, "--picture", str(tmp_path / name), *options)
    assert code == 2
    error = capsys.readouterr().err.strip().splitlines()[-1]
    assert text in error
    assert not list(tmp_path.glob("**/a.*g"))
    assert not (tmp_path / "found.csv").exists()


def test_at_without_a_picture_is_a_mistake(small_site, tmp_path, capsys):
    assert find(small_site, tmp_path, "--at", str(SITE_START + 40)) == 2
    assert "--picture" in capsys.readouterr().err
