"""Counting statistics against published tables and the library's distributions."""

import numpy as np
import pytest
import scipy.stats

from dq.counting import (
    binomial_chance,
    clopper_pearson,
    garwood,
    poisson_significance,
)

# Smith et al. 2011, Class. Quantum Grav. 28 235005, definition from memory; values
# recomputed from the sum.
SIGNIFICANCE = {
    (1, 0.1): 1.02153,
    (3, 0.5): 1.84201,
    (10, 1): 6.95302,
    (10, 5): 1.49719,
    (20, 5): 6.46191,
    (50, 10): 18.7317,
    (100, 10): 62.2677,
}


@pytest.mark.reference
@pytest.mark.parametrize(("case", "value"), SIGNIFICANCE.items())
def test_significance_table(case, value):
    assert float(poisson_significance(*case)) == pytest.approx(value, rel=5e-6)


@pytest.mark.reference
def test_significance_equals_the_library_tail(rng):
    n = rng.integers(1, 80, 500)
    mu = rng.uniform(0.01, 60, 500)
    theirs = -scipy.stats.poisson.logsf(n - 1, mu) / np.log(10)
    np.testing.assert_allclose(
        poisson_significance(n, mu), theirs, rtol=1e-9, atol=1e-12
    )


def test_significance_far_beyond_underflow():
    """Against the sum in exact integer arithmetic by mpmath-free logarithms."""
    for n, mu in ((1000, 10.0), (5000, 100.0), (400, 0.001)):
        k = np.arange(n, n + 4000)
        from scipy.special import gammaln, logsumexp

        terms = k * np.log(mu) - mu - gammaln(k + 1)
        want = -logsumexp(terms) / np.log(10)
        assert want > 300
        assert float(poisson_significance(n, mu)) == pytest.approx(want, rel=1e-10)


def test_significance_is_continuous_where_the_formula_changes():
    n = np.arange(150, 400)
    s = poisson_significance(n, 10.0)
    assert np.all(np.diff(s) > 0)
    assert np.all(np.abs(np.diff(s, 2)) < 0.02)


def test_significance_at_the_borders():
    assert poisson_significance(0, 3.0) == 0
    assert np.isinf(poisson_significance(2, 0.0))
    assert poisson_significance(0, 0.0) == 0


GARWOOD = {  # Garwood 1936, Biometrika 28 437; Gehrels 1986, ApJ 303 336
    0: (0, 3.6889),
    1: (0.0253, 5.5716),
    2: (0.2422, 7.2247),
    3: (0.6187, 8.7673),
    5: (1.6235, 11.6683),
    10: (4.7954, 18.3904),
    20: (12.2165, 30.8884),
    50: (37.1110, 65.9188),
    100: (81.3640, 121.6268),
}


@pytest.mark.reference
@pytest.mark.parametrize(("count", "interval"), GARWOOD.items())
def test_garwood_table(count, interval):
    assert garwood(count) == pytest.approx(interval, abs=6e-5)


CLOPPER = {  # Clopper & Pearson 1934, Biometrika 26 404
    (0, 10): (0, 0.30850),
    (1, 10): (0.00253, 0.44502),
    (5, 10): (0.18709, 0.81291),
    (10, 10): (0.69150, 1),
    (0, 100): (0, 0.03622),
    (50, 100): (0.39832, 0.60168),
    (95, 100): (0.88717, 0.98357),
    (99, 100): (0.94554, 0.99975),
    (0, 300): (0, 0.01222),
}


@pytest.mark.reference
@pytest.mark.parametrize(("case", "interval"), CLOPPER.items())
def test_clopper_pearson_table_and_library(case, interval):
    assert clopper_pearson(*case) == pytest.approx(interval, abs=6e-6)
    outside = scipy.stats.binomtest(*case).proportion_ci(method="exact")
    assert clopper_pearson(*case) == pytest.approx(tuple(outside), abs=1e-9)


def test_no_trials_say_nothing():
    assert clopper_pearson(0, 0) == (0.0, 1.0)


def test_binomial_chance_equals_the_library():
    for k, n, p in ((3, 10, 0.1), (0, 5, 0.2), (7, 7, 0.5), (40, 100, 0.3)):
        want = scipy.stats.binom.sf(k - 1, n, p)
        assert binomial_chance(k, n, p) == pytest.approx(want, rel=1e-9)
    assert binomial_chance(6, 5, 0.2) == 0.0
    assert binomial_chance(2, 5, 0.0) == 0.0
