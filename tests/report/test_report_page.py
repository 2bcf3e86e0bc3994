"""The page and the answer about one time, from a folder's tables alone."""

import json
import shutil
from html.parser import HTMLParser

import pytest
from small_site import SITE_BURSTS, SITE_SECONDS, SITE_START, write_site

from dq.config import load_config
from dq.errors import InputError
from dq.gps import gps_to_utc_text, utc_text_to_gps
from dq.night import run_night
from dq.report import explain, write_page
from dq.report.page import span


@pytest.fixture(scope="module")
def finished(tmp_path_factory):
    base = tmp_path_factory.mktemp("report")
    config = write_site(
        base / "site",
        nan=("OV-STRAIN", 150, 151),
        gap=(180.0, 182.0),
        extra='injections = "injections.csv"\n',
    )
    signals = [SITE_START + s for s in (20, SITE_BURSTS[1], 90, 230, 400)]
    lines = ["gps_time", *map(str, signals)]
    (base / "site" / "injections.csv").write_text("\n".join(lines) + "\n")
    run_night(
        load_config(config),
        start=SITE_START,
        end=SITE_START + SITE_SECONDS,
        out=base / "night",
        jobs=1,
    )
    return base / "night"


@pytest.fixture
def night(finished, tmp_path):
    return shutil.copytree(finished, tmp_path / "night")


class Page(HTMLParser):
    """Collects tags, links and image texts; complains of unbalanced tags."""

    VOID = ("meta", "img", "br", "link")

    def __init__(self, text):
        super().__init__()
        self.open, self.links, self.images = [], [], []
        self.feed(text)
        assert self.open == []

    def handle_starttag(self, tag, attrs):
        """Note links and images."""
        attrs = dict(attrs)
        self.links += [attrs[k] for k in ("src", "href") if k in attrs]
        if tag == "img":
            self.images.append(attrs.get("alt", ""))
        if tag not in self.VOID:
            self.open.append(tag)

    def handle_endtag(self, tag):
        """Close the tag that is open."""
        assert self.open.pop() == tag


def test_page_needs_nothing_from_outside(night):
    text = write_page(night).read_text()
    page = Page(text)
    assert all(link.startswith("data:") for link in page.links)
    assert "http" not in text.replace("http-equiv", "")
    assert len(page.images) == 3
    assert all(len(alt) > 30 for alt in page.images)


def test_page_says_what_matters(night):
    text = write_page(night).read_text()
    for part in (
        "a veto can delete a discovery",
        "have the last word",
        "OV-DEAD",
        "constant",
        "OV-A",
        "not finite",
        gps_to_utc_text(SITE_START),
    ):
        assert part in text


def test_page_counts_test_signals_in_the_vetoes(night):
    summary = json.loads((night / "summary.json").read_text())
    told = summary["test_signals"]
    assert (told["analysed"], told["vetoed"]) == (4, 1)
    assert told["low"] < 0.25 < told["high"]
    assert told["expected_by_dead_time"] == pytest.approx(
        4 * summary["dead_time_fraction"]
    )
    text = write_page(night).read_text()
    assert "Of 4 test signals in analysed time the vetoes take 1 (25.0 %" in text
    for line in told["words"]:
        assert line in text


def test_equal_tables_give_equal_bytes(night):
    first = write_page(night).read_bytes()
    assert write_page(night).read_bytes() == first


def test_names_cannot_smuggle_markup(night):
    manifest = json.loads((night / "manifest.json").read_text())
    manifest["left_out"]["<script>alert(1)</script>"] = "a & b"
    (night / "manifest.json").write_text(json.dumps(manifest))
    text = write_page(night).read_text()
    assert "<script>" not in text
    assert "a &amp; b" in text


def test_an_empty_night_has_a_page(night):
    for name in ("strain_transients", "witnesses", "vetoes"):
        path = night / f"{name}.csv"
        path.write_text(path.read_text().splitlines()[0] + "\n")
    path = night / "veto_cost.csv"
    lines = path.read_text().splitlines()
    path.write_text("\n".join([lines[0], lines[-1]]) + "\n")
    text = write_page(night).read_text()
    assert "No transient was found" in text
    assert "No veto was chosen" in text
    assert "No witness found" in text
    Page(text)


def test_explain_a_vetoed_time(night):
    text = explain(night, f"{SITE_START + SITE_BURSTS[1]:.1f}")
    assert "analysed: yes" in text
    assert "yes, by witness-ov-a (category 3, witness, OV-A" in text
    assert "OV-A: SNR >=" in text
    last = text.splitlines()[-1]
    assert last.startswith("  to write down: GPS 1420000071.7 is vetoed")


def test_explain_times_that_were_not_judged(night):
    assert "analysed: no, no data were recorded" in explain(night, SITE_START + 181)
    assert "analysed: no, recorded" in explain(night, SITE_START + 1)
    assert "is not known" in explain(night, SITE_START + 181)


def test_explain_a_quiet_time_names_the_nearest_veto(night):
    text = explain(night, str(SITE_START + 50) + ".25")
    assert "vetoed: no; the nearest veto (witness-ov-a) is" in text
    assert "strain transients within 1 s: none" in text


def test_explain_refuses_other_times_and_folders(night, tmp_path):
    with pytest.raises(InputError, match="lies outside the night"):
        explain(night, SITE_START - 1)
    with pytest.raises(InputError, match="no finished night"):
        explain(tmp_path, SITE_START)


@pytest.mark.reference
@pytest.mark.parametrize(
    ("gps", "utc"),
    [
        (0, "1980-01-06 00:00:00"),
        (46828801, "1981-07-01 00:00:00"),
        (630720013, "2000-01-01 00:00:00"),
        (820108814, "2006-01-01 00:00:00"),
        (1000000000, "2011-09-14 01:46:25"),
        (1025136016, "2012-07-01 00:00:00"),
        (1119744017, "2015-07-01 00:00:00"),
        (1167264016, "2016-12-31 23:59:59"),
        (1167264017, "2016-12-31 23:59:60"),
        (1167264018, "2017-01-01 00:00:00"),
        (1238166018, "2019-04-01 15:00:00"),
        (1400000000, "2024-05-17 16:53:02"),
        (1419724818, "2025-01-01 00:00:00"),
    ],
)
def test_gps_and_utc_across_leap_seconds(gps, utc):
    """IERS bulletin C leap seconds; pairs recomputed from the published list."""
    assert gps_to_utc_text(gps) == utc
    assert utc_text_to_gps(utc) == gps


def test_durations_as_people_say_them():
    assert [span(s) for s in (0.25, 90, 600, 7300)] == [
        "0.25 s",
        "90 s",
        "10.0 min",
        "2.03 h",
    ]
