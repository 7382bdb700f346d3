"""The yardstick itself: quadrature.py against mpmath at 30 digits, and against closed forms."""

import mpmath
import numpy as np
import pytest

from quadrature import LEVELS, MAG, Posterior, prior_modulus_variance

LENGTH = 1.35
# parallax, error, magnitude error: data-dominated, prior-dominated, negative, absurdly negative, two humps side by side.
ROWS = [
    (796.92, 17.81, 0.01),
    (379.21, 1.58, 0.0024),
    (548.31, 1.51, 0.0048),
    (10.0, 0.1, 0.001),
    (1.0, 0.3, 0.02),
    (0.0, 0.5, 0.05),
    (-1.0, 0.5, 0.0),
    (-258.45, 259.41, 0.2),
    (-40.0, 3.0, 0.01),
    (12.0, 2.5, 0.1),
    (30.0, 6.0, 0.003),
    (100.0, 18.0, 0.93),
    (2.88, 0.09, 0.3),
]


class Exact:
    """The same posterior with tanh-sinh quadrature at 30 digits, split at `posterior`'s bends so that no hump is missed."""

    def __init__(self, w, s, posterior):
        self.w, self.s, self.length = mpmath.mpf(w), mpmath.mpf(s), mpmath.mpf(LENGTH)
        self.peak = mpmath.mpf(posterior.peak)
        masses = posterior.cumulative
        keep = [0] + [int(np.searchsorted(masses, q)) for q in (1e-25, 1e-12, 1e-4, 0.01, 0.2, 0.5, 0.8, 0.99, 0.9999)]
        bends = [mpmath.mpf(posterior.edges[k]) for k in keep if k < posterior.edges.size]
        self.points = sorted(set(bends + [mpmath.mpf(u) for u in (posterior.edges[0] - 1, posterior.edges[-1] + 1)]))
        self.total = self.integral(lambda u: 1, self.points)

    def density(self, u):
        d = mpmath.exp(u)
        return mpmath.exp(3 * u - d / self.length - ((self.w - 1 / d) / self.s) ** 2 / 2 - self.peak)

    def integral(self, function, points):
        value, error = mpmath.quad(lambda u: function(u) * self.density(u), points, error=True, maxdegree=9)
        assert error < mpmath.mpf(10) ** -18 * max(abs(value), 1), f"30-digit quadrature fails too: {error}"
        return value

    def below(self, u):
        return self.integral(lambda _: 1, [p for p in self.points if p < u] + [u]) / self.total

    def absolute_miss(self, x, level, magnitude, error):
        """How far `x` is from the quantile of M = m - mu, m ~ N(magnitude, error): one Newton step, in mag."""

        def z(u):
            return (x - magnitude + 10 + 5 / mpmath.log(10) * u) / error

        bends = [((magnitude - x - 10) + k * error) * mpmath.log(10) / 5 for k in (-40, -12, -6, -2, 0, 2, 6, 12)]
        points = sorted(set(self.points + [u for u in bends if self.points[0] < u < self.points[-1]]))
        below = self.integral(lambda u: mpmath.ncdf(z(u)), points) / self.total
        slope = self.integral(lambda u: mpmath.npdf(z(u)), points) / self.total / error
        return (below - mpmath.mpf(level)) / slope


@pytest.fixture(autouse=True)
def thirty_digits():
    with mpmath.workdps(30):
        yield


@pytest.mark.parametrize(("w", "s", "error"), ROWS)
def test_thirty_digits(w, s, error):
    posterior = Posterior(w, s, LENGTH)
    exact = Exact(w, s, posterior)
    mag = 5 / mpmath.log(10)

    for level in LEVELS:
        u = mpmath.mpf((posterior.modulus_quantile(level) - 10.0) / MAG)
        # One Newton step from the answer tells how far it is from the root.
        miss = mag * (exact.below(u) - mpmath.mpf(level)) / (exact.density(u) / exact.total)
        assert abs(miss) < 1e-9, f"modulus quantile {level} is {float(miss)} mag off"

    mean, sd = posterior.modulus_moments()
    exact_mean = exact.integral(lambda u: u, exact.points) / exact.total
    exact_sd = mpmath.sqrt(exact.integral(lambda u: (u - exact_mean) ** 2, exact.points) / exact.total)
    assert abs(mean - (10 + mag * exact_mean)) < 1e-9
    assert abs(sd - mag * exact_sd) < 1e-9

    cubic = [-1 / exact.s**2, exact.w / exact.s**2, mpmath.mpf(-2), 1 / exact.length]
    roots = mpmath.polyroots(cubic, maxsteps=200, extraprec=200, asc=True)
    modes = [mpmath.log(r.real) for r in map(mpmath.mpc, roots) if abs(r.imag) < 1e-20 * abs(r) and r.real > 0]
    best = max(modes, key=lambda u: mpmath.log(exact.density(u)) - u)
    assert abs(posterior.modulus_mode() - (10 + mag * best)) < 1e-9

    if error > 0:
        for level, x in zip(LEVELS, posterior.absolute_quantiles(12.0, error)):
            miss = exact.absolute_miss(x, level, mpmath.mpf(12), mpmath.mpf(error))
            assert abs(miss) < 1e-9, f"absolute magnitude quantile {level} is {float(miss)} mag off"


def test_no_data_is_the_prior():
    """With an error of 1e9 mas the posterior is the prior: mode 2 L, median 2.674060 L (root of the incomplete gamma function)."""
    posterior = Posterior(0.0, 1e9, LENGTH)
    median = float(mpmath.findroot(lambda x: mpmath.gammainc(3, 0, x, regularized=True) - 0.5, 2.674))
    assert abs(posterior.modulus_quantile(0.5) - (10 + 5 * np.log10(median * LENGTH))) < 1e-9
    assert abs(posterior.modulus_mode() - (10 + 5 * np.log10(2 * LENGTH))) < 1e-9
    mean, sd = posterior.modulus_moments()
    assert abs(mean - (10 + MAG * (float(mpmath.digamma(3)) + np.log(LENGTH)))) < 1e-9
    assert abs(sd**2 - prior_modulus_variance()) < 1e-9


def test_two_humps_are_both_found():
    """At 12 +- 2.5 mas the data hump near 85 pc holds about four fifths and the prior hump near 3 kpc the rest."""
    posterior = Posterior(12.0, 2.5, LENGTH)
    near = posterior.cdf(np.log(0.4))
    assert 0.7 < near < 0.9, f"the near hump holds {near}"
