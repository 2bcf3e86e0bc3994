"""Fringe frequencies against published values and closed forms of an oscillation."""

import numpy as np
import pytest

from dq.motion import (
    Cells,
    FringeSource,
    fringe_frequency,
    fringe_rows,
    length_scale,
    speed_extremes,
)
from dq.motion.filters import Halvings
from dq.motion.fringe import FRINGE_CELL_S, speed_reach

LASER = 1064e-9
GPS = 1_420_000_000


def speeds(values, rate, source):
    stretch = Halvings(values, round(GPS * rate))
    first, low, high = speed_extremes(stretch, source, rate)
    start = (first + np.arange(len(low))) * FRINGE_CELL_S - GPS
    return start, low, high


@pytest.mark.reference
@pytest.mark.parametrize(
    ("speed_um", "frequency"),
    [(1, 1.87970), (5, 9.39850), (10, 18.7970), (25, 46.9925)],
)
def test_published_fringe_frequencies(speed_um, frequency):
    # 2 n |v| / lambda (Accadia et al. 2010, Class. Quantum Grav. 27 194011, from
    # memory); recomputed numerically
    for passes in (1, 2, 4):
        for sign in (-1, 1):
            found = fringe_frequency(
                sign * speed_um * 1e-6, passes=passes, wavelength_m=LASER
            )
            assert found == pytest.approx(passes * frequency, rel=5e-6)


@pytest.mark.reference
@pytest.mark.parametrize(
    ("amplitude_um", "swing_hz", "v_max_um", "top_hz", "top4_hz", "spacing", "fringes"),
    [
        (10, 0.15, 9.42478, 17.7157, 70.8630, 3.3333, 37.594),
        (20, 0.10, 12.5664, 23.6210, 94.4840, 5.0, 75.188),
        (1, 0.20, 1.25664, 2.36210, 9.44840, 2.5, 3.7594),
        (1, 3.0, 18.8496, 35.4315, 141.726, 0.16667, 3.7594),
    ],
)
def test_a_swing_gives_its_arches(
    amplitude_um, swing_hz, v_max_um, top_hz, top4_hz, spacing, fringes
):
    # f_max = 4 pi n f_m A / lambda, one arch every 1 / (2 f_m), 4 n A / lambda fringes
    # in each (Accadia et al. 2010; Soni et al. 2021, Class. Quantum Grav. 38 025016;
    # from memory)
    rate = 64.0
    t = np.arange(int(rate * 61)) / rate
    x = amplitude_um * np.sin(2 * np.pi * swing_hz * t)
    start, low, high = speeds(x, rate, FringeSource(velocity=False, scale=1e-6))
    speed = np.maximum(np.abs(low), np.abs(high))
    # the highest of a cell misses the crest by half a sample at most: 1 - cos(0.15)
    loss = 0.5 * (np.pi * swing_hz / 32) ** 2 + 2e-3
    assert speed.max() * 1e6 == pytest.approx(v_max_um, rel=loss)
    for passes, top in ((1, top_hz), (4, top4_hz)):
        f = fringe_frequency(speed, passes=passes, wavelength_m=LASER)
        assert f.max() == pytest.approx(top, rel=loss)
    if swing_hz > 1:
        return
    f = fringe_frequency(speed, wavelength_m=LASER)
    crest = (f[1:-1] > 0.95 * f.max()) & (f[1:-1] >= f[:-2]) & (f[1:-1] > f[2:])
    assert np.median(np.diff(start[1:-1][crest])) == pytest.approx(
        spacing, abs=FRINGE_CELL_S
    )
    cells = round(10 * spacing / FRINGE_CELL_S)
    mean = fringe_frequency(0.5 * np.abs(low + high), wavelength_m=LASER)
    each = np.sum(mean[:cells]) * FRINGE_CELL_S / (cells * FRINGE_CELL_S / spacing)
    assert each == pytest.approx(fringes, rel=0.01)
    above = np.mean(f[:cells] > top_hz / 2)
    assert above == pytest.approx(2 / 3, abs=2 * FRINGE_CELL_S / spacing)


def test_a_velocity_is_taken_as_it_is():
    rate = 128.0
    t = np.arange(int(rate * 40)) / rate
    v = 4.0 * np.cos(2 * np.pi * 0.5 * t)
    start, low, high = speeds(v, rate, FringeSource(velocity=True, scale=1e-3))
    # four samples a cell at 32 Hz, the first at its start
    truth = 4e-3 * np.cos(2 * np.pi * 0.5 * (start + 1.5 / 32))
    np.testing.assert_allclose(0.5 * (low + high), truth, atol=5e-5)
    # and its displacement, differentiated, gives the same
    x = 4.0 / (2 * np.pi * 0.5) * np.sin(2 * np.pi * 0.5 * t)
    _, low2, high2 = speeds(x, rate, FringeSource(velocity=False, scale=1e-3))
    np.testing.assert_allclose(low2, low, atol=5e-5)
    np.testing.assert_allclose(high2, high, atol=5e-5)


def test_sensor_noise_is_held_at_the_low_pass(rng):
    # white noise of density S differentiated up to f has (2 pi)^2 S f^3 / 3; up to half
    # of this rate it would be 90 times as much
    rate, density = 256.0, 1e-3
    x = rng.standard_normal(int(rate * 600)) * density * np.sqrt(rate / 2)
    _, low, high = speeds(x, rate, FringeSource(velocity=False, scale=1.0))
    bound = 2 * np.pi * density * np.sqrt(8.0**3 / 3)
    assert np.sqrt(np.mean(low**2 + high**2) / 2) < 1.3 * bound
    # an offset and a line of 50 Hz leave nothing
    t = np.arange(len(x)) / rate
    line = 1e4 + np.sin(2 * np.pi * 50 * t)
    _, low, high = speeds(line, rate, FringeSource(velocity=False, scale=1.0))
    assert np.max(np.abs(high)) < 1e-2 * 2 * np.pi * 50


def test_a_sample_touches_speeds_within_the_reach_only():
    for rate in (16.0, 32.0, 100.0, 512.0):
        x = np.zeros(int(rate * 20))
        x[len(x) // 2] = 1.0
        start, low, high = speeds(x, rate, FringeSource(velocity=False, scale=1.0))
        reach = speed_reach(rate)
        far = (start > 10 + reach) | (start + FRINGE_CELL_S < 10 - reach)
        assert far.any()
        assert np.all(low[far] == 0.0)
        assert np.all(high[far] == 0.0)
        assert high.max() > 0


@pytest.mark.parametrize(
    ("unit", "quantity", "scale"),
    [
        ("m", "displacement", 1.0),
        ("um", "displacement", 1e-6),
        ("\N{MICRO SIGN}m", "Displacement", 1e-6),
        ("\N{GREEK SMALL LETTER MU}m", "displacement", 1e-6),
        ("nm", "displacement", 1e-9),
        ("mm/s", "velocity", 1e-3),
        ("\N{MICRO SIGN}m / s", "velocity", 1e-6),
        ("nm s^-1", "velocity", 1e-9),
        ("um.s-1", "velocity", 1e-6),
        ("count", "displacement", None),
        ("m/s", "displacement", None),
        ("um", "velocity", None),
        ("m/s^2", "velocity", None),
        ("", "displacement", None),
        ("um", "acceleration", None),
        ("xm", "displacement", None),
    ],
)
def test_units(unit, quantity, scale):
    found = length_scale(unit, quantity)
    assert found == scale if scale is None else found == pytest.approx(scale)


def test_rows_say_the_predicted_frequency_over_the_edge():
    speed = np.array([0, 3, 6, 12, 12, 3, 0, 30, 0]) * 1e-6
    cells = Cells(np.arange(16, 25), speed, FRINGE_CELL_S)
    table = fringe_rows(
        cells, passes=2, edge_hz=10.0, ladder=[1.0, 2.0, 4.0], wavelength_m=LASER
    )
    # 2 n v / lambda = 3.759 Hz per um/s: 11.3, 22.6, 45.1, 45.1, 11.3 and 112.8 Hz;
    # 2.0 to 2.625 s, and second 3 begins a new row in any case
    np.testing.assert_allclose(
        table["snr"], [1.12782, 2.25564, 4.51128, 1.12782, 11.2782], rtol=1e-5
    )
    np.testing.assert_allclose(table["gps_start"], [2.125, 2.25, 2.375, 2.625, 2.875])
    np.testing.assert_allclose(table["gps_end"], [2.25, 2.375, 2.625, 2.75, 3.0])
    np.testing.assert_allclose(table["frequency_hz"], 10 * table["snr"])
    np.testing.assert_allclose(table["amplitude"], np.array([3, 6, 12, 3, 30]) * 1e-6)
    assert np.all(table["q"] > 0)
    assert list(table["tile_count"]) == [1, 1, 2, 1, 1]
