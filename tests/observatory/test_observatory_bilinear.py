"""A mirror's pitch times the beam's offset: what is added, and that no more moves."""

from dataclasses import replace

import numpy as np
import pytest

from dq.config import load_config
from dq.night import run_night
from dq.night.products import product_name
from dq.observatory import SiteSettings, listing, make_site
from dq.observatory.bilinear import FAMILY, PITCH, PRODUCT, SPOT, SPOT_RMS_MM
from dq.observatory.channels import STRAIN
from dq.observatory.recording import add_contributions, record_auxiliary, record_strain
from dq.observatory.schedule import FAINTEST, STRAIN_LOW_HZ, plan_night, strain_seen
from dq.observatory.snr import NoiseModel
from dq.tables import WITNESSES, csv_table

WITHOUT = SiteSettings(seed=23, duration_s=512)
WITH = replace(WITHOUT, pitch_bursts_per_hour=500)


@pytest.fixture(scope="module")
def plain():
    return plan_night(WITHOUT)


@pytest.fixture(scope="module")
def night():
    return plan_night(WITH)


def signal(night, channel, rate):
    """Give what happens in a channel, without its noise."""
    values = np.zeros(night.settings.duration_s * rate)
    add_contributions(values, sample_rate=rate, items=night.contributions[channel])
    return values


def test_by_default_nothing_of_it_is_there(plain):
    names = {c.name for c in plain.channels}
    assert not {PITCH, SPOT} & names
    assert FAMILY not in listing.transient_truth(plain)
    assert PRODUCT not in listing.coupling_truth(plain)
    assert "products" not in listing.config_text(plain)


def test_every_other_source_stays_as_it_was(plain, night):
    mine = [t for t in night.transients if t.family == FAMILY]
    assert len(mine) > 5
    assert [t for t in night.transients if t.family != FAMILY] == plain.transients
    assert night.own == plain.own
    assert night.injections == plain.injections
    assert listing.label_list(night) == listing.label_list(plain)
    assert listing.injection_list(night) == listing.injection_list(plain)
    rest = [c for c in night.channels if c.name not in (PITCH, SPOT)]
    assert rest == plain.channels
    for name in ("OV-BENCH-ACC-1", "OV-GROUND-Z"):
        spec = next(c for c in plain.channels if c.name == name)
        np.testing.assert_array_equal(
            record_auxiliary(night, spec), record_auxiliary(plain, spec)
        )


def test_the_strain_gains_pitch_times_offset_over_the_arm_and_no_more(plain, night):
    strain, before = record_strain(night)[0], record_strain(plain)[0]
    added = strain - before
    # radians times metres over the arm's length of 3 km
    pitch = 1e-12 * signal(night, PITCH, 4096)
    offset = 1e-3 * signal(night, SPOT, 4096)
    inside = np.isfinite(added) & (np.abs(strain) < WITH.rail)
    expected = (pitch * offset / 3000.0)[inside]
    assert np.abs(expected).max() > 1e-21
    # what rounding to double precision of the strain's 1e-18 leaves
    np.testing.assert_allclose(added[inside], expected, atol=1e-30, rtol=1e-6)
    quiet = pitch[inside] == 0
    assert 0.5 < np.mean(quiet) < 1
    assert np.all(added[inside][quiet] == 0)


def test_the_beam_wanders_about_the_centre(night):
    offset = signal(night, SPOT, 32)
    assert np.sqrt(np.mean(offset**2)) == pytest.approx(SPOT_RMS_MM, rel=0.25)
    assert abs(np.mean(offset)) < 0.1 * SPOT_RMS_MM


def test_truth_holds_the_snr_of_what_is_heard(night):
    model = NoiseModel(strain_seen, sample_rate=4096, f_low_hz=STRAIN_LOW_HZ)
    pitch, offset = signal(night, PITCH, 4096), signal(night, SPOT, 4096)
    heard = 1e-15 / 3000.0 * pitch * offset
    rows = [t for t in night.transients if t.family == FAMILY]
    bursts = len(night.contributions[PITCH])
    assert len(rows) < 0.6 * bursts
    for row in rows:
        low, high = (round(4096 * (row.measured.peak_s + d)) for d in (-0.4, 0.4))
        snr = model.snr(heard[low:high]) / float(night.drift(row.measured.peak_s))
        assert row.measured.snr == pytest.approx(snr, rel=0.05)
        assert row.measured.snr >= FAINTEST
        assert row.seen_by == (PRODUCT,)


def test_the_product_is_what_the_night_calls_it():
    assert product_name(PITCH, SPOT) == PRODUCT


def test_the_night_finds_the_product_and_not_its_parts(tmp_path):
    settings = replace(
        WITH.with_rates(**{f.family: 0.0 for f in WITH.families}),
        duration_s=900,
        pitch_bursts_per_hour=400,
        own_glitch_scale=0.0,
    )
    path = make_site(tmp_path / "site", settings=settings)
    (pair,) = load_config(path).witnesses.products
    assert (pair.fast, pair.slow) == (PITCH, SPOT)
    listed = tmp_path / "site" / "channels.csv"
    kept = ("channel,", STRAIN, PITCH, SPOT, "OV-MIC-NORTH")
    lines = [n for n in listed.read_text().splitlines() if n.startswith(kept)]
    listed.write_text("\n".join(lines) + "\n")
    path.write_text(path.read_text().replace("model = ", "# model = "))
    end = settings.start + settings.duration_s
    run_night(
        load_config(path), start=settings.start, end=end, out=tmp_path / "n", jobs=1
    )
    rows = csv_table((tmp_path / "n" / "witnesses.csv").read_text(), WITNESSES)
    taken = rows[rows["accepted"].fillna(False).astype(bool)]
    assert set(taken["channel"]) == {PRODUCT}
    rows = rows.set_index("channel")
    assert rows.loc[PITCH, "redundant_with"] == PRODUCT
    assert not rows.loc[SPOT, "accepted"]
