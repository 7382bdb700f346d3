"""An independent posterior of the distance modulus, by adaptive quadrature with numpy alone.

Likelihood: parallax w ~ N(1/d, s), w and s in mas, d in kpc. Prior: p(d) = d^2 exp(-d/L) / (2 L^3)
(Bailer-Jones 2015, PASP 127, 994). All integrals run in u = ln d, where the density of u is proportional to
d^3 exp(-d/L - (w - 1/d)^2 / (2 s^2)); the modulus is mu = 10 + (5 / ln 10) u.

Method: panels with 20 Gauss-Legendre nodes, halved until both halves together agree with the whole to 1e-15 of the total
(less for w/s above 2, where rounding forbids it). The density is not always a single hump: a near and a far one (data
and prior) may stand side by side, so the first panels stand around every root of the derivative. Cut where the density
has fallen by exp(-100). Accuracy, checked against 30 digits in test_quadrature.py: better than 1e-9 mag in every
quantity. Nothing is shared with the program.
"""

import numpy as np
from scipy.special import ndtr, ndtri

NODES, WEIGHTS = np.polynomial.legendre.leggauss(20)
MAG = 5.0 / np.log(10.0)
LEVELS = (float(ndtr(-1.0)), 0.5, float(ndtr(1.0)))
DROP = 100.0


def real_positive_roots(coefficients):
    roots = np.roots(coefficients)
    return np.sort(roots.real[(np.abs(roots.imag) < 1e-6 * np.abs(roots)) & (roots.real > 0)])


class Posterior:
    """Posterior of one star: `parallax` and `error` in mas, `length` in kpc."""

    def __init__(self, parallax, error, length):
        self.w, self.s, self.length = float(parallax), float(error), float(length)
        # d/du of the log density of u, times d^2, is zero: d^3/L - 3 d^2 + (w/s^2) d - 1/s^2 = 0.
        self.stationary = np.log(self._roots(3.0))
        self.peak = max(self._log_density(u) for u in self.stationary)
        # w - 1/d cancels in a precise parallax: no panel can be known better than the rounding that this leaves.
        self.tolerance = max(1e-15, 4e-16 * abs(self.w) / self.s)
        self._refine()

    def _roots(self, power):
        return real_positive_roots([1.0 / self.length, -power, self.w / self.s**2, -1.0 / self.s**2])

    def _log_density(self, u):
        d = np.exp(u)
        return 3.0 * u - d / self.length - 0.5 * ((self.w - 1.0 / d) / self.s) ** 2

    def density(self, u):
        """Density of u = ln(d/kpc), scaled to 1 at its highest point."""
        return np.exp(self._log_density(u) - self.peak)

    def _edge(self, u, step):
        while self._log_density(u) > self.peak - DROP:
            u += step
        return u

    def _refine(self):
        low = self._edge(self.stationary[0], -0.05)
        high = self._edge(self.stationary[-1], 0.05)
        points = [np.linspace(low, high, 25)]
        for u in self.stationary:
            d = np.exp(u)
            curvature = abs(-d / self.length + (self.w / d - 2.0 / d**2) / self.s**2)
            points.append(
                u + np.array([-32, -16, -8, -4, -2, -1, 0, 1, 2, 4, 8, 16, 32]) / np.sqrt(max(curvature, 1.0))
            )
        points = np.unique(np.concatenate(points))
        points = points[(points >= low) & (points <= high)]
        self.edges, self.masses = self._adapt(points, self.density)
        self.total = self.masses.sum()
        self.cumulative = np.concatenate([[0.0], np.cumsum(self.masses)]) / self.total

    @staticmethod
    def _panels(a, b, function):
        half = 0.5 * (b - a)
        return (function(0.5 * (a + b)[:, None] + half[:, None] * NODES) @ WEIGHTS) * half

    def _adapt(self, points, function):
        """Panels, left to right, on which the nodes integrate `function` to the tolerance, and the integrals."""
        a, b = points[:-1], points[1:]
        whole = self._panels(a, b, function)
        done = []
        for _ in range(60):
            middle = 0.5 * (a + b)
            left, right = self._panels(a, middle, function), self._panels(middle, b, function)
            total = whole.sum() + sum(mass.sum() for *_, mass in done)
            settled = np.abs(left + right - whole) <= self.tolerance * total
            done.append((a[settled], b[settled], whole[settled]))
            a, b = np.concatenate([a[~settled], middle[~settled]]), np.concatenate([middle[~settled], b[~settled]])
            whole = np.concatenate([left[~settled], right[~settled]])
            if a.size == 0:
                break
        else:
            raise ArithmeticError(f"quadrature of parallax {self.w}, error {self.s} does not settle")
        start, stop, mass = (np.concatenate(parts) for parts in zip(*done))
        order = np.argsort(start)
        return np.append(start[order], stop[order][-1]), mass[order]

    def cdf(self, u):
        """Probability that ln d is below `u`."""
        k = int(np.clip(np.searchsorted(self.edges, u) - 1, 0, self.masses.size - 1))
        part = self._panels(self.edges[k : k + 1], np.array([u]), self.density)[0]
        return self.cumulative[k] + part / self.total

    def _solve(self, level, low, high, cdf, pdf):
        """Root of cdf = level between `low` and `high`: Newton, halving when a step leaves the bracket."""
        x = 0.5 * (low + high)
        for _ in range(200):
            miss = cdf(x) - level
            low, high = (x, high) if miss < 0 else (low, x)
            slope = pdf(x)
            step = x - miss / slope if slope > 0 else low - 1.0
            nearer = step if low < step < high else 0.5 * (low + high)
            if abs(nearer - x) < 1e-14 * max(1.0, abs(x)):
                return nearer
            x = nearer
        raise ArithmeticError(f"quantile {level} of parallax {self.w}, error {self.s} does not settle")

    def modulus_quantile(self, level):
        """Modulus in mag below which the probability is `level`."""
        k = int(np.searchsorted(self.cumulative, level) - 1)
        u = self._solve(level, self.edges[k], self.edges[k + 1], self.cdf, lambda u: self.density(u) / self.total)
        return 10.0 + MAG * u

    def modulus_moments(self):
        """Mean and standard deviation of the modulus in mag."""
        half, middle = 0.5 * np.diff(self.edges)[:, None], 0.5 * (self.edges[:-1] + self.edges[1:])[:, None]
        u = middle + half * NODES
        mass = self.density(u) * half * WEIGHTS / self.total
        mean = (mass * u).sum()
        return 10.0 + MAG * mean, MAG * np.sqrt((mass * (u - mean) ** 2).sum())

    def modulus_mode(self):
        """Modulus in mag of the distance where p(d), the density in distance and not in modulus, is highest."""
        u = np.log(self._roots(2.0))
        best = u[np.argmax(self._log_density(u) - u)]
        for _ in range(3):  # polish what the companion matrix rounded
            d = np.exp(best)
            slope = 2.0 - d / self.length + (self.w / d - 1.0 / d**2) * -1.0 / self.s**2
            curvature = -d / self.length + (self.w / d - 2.0 / d**2) / self.s**2
            best -= slope / curvature if curvature < 0 else 0.0
        return 10.0 + MAG * best

    def absolute_quantiles(self, magnitude, error):
        """Quantiles of M = m - mu at LEVELS, m ~ N(magnitude, error) in mag and independent of mu."""
        if error == 0.0:
            return [magnitude - self.modulus_quantile(1.0 - level) for level in LEVELS]
        mean, sd = self.modulus_moments()

        def probability(x, kernel):
            # P(M <= x): over ln d of density times Phi((x - m + mu)/error); panels where the kernel bends, too.
            bend = (magnitude - x - 10.0) / MAG + np.arange(-9.0, 9.5, 0.75) * error / MAG
            points = np.unique(np.concatenate([self.edges, bend[(bend > self.edges[0]) & (bend < self.edges[-1])]]))
            a, b = points[:-1], points[1:]
            return (
                self._panels(a, b, lambda u: self.density(u) * kernel((x - magnitude + 10.0 + MAG * u) / error)).sum()
                / self.total
            )

        def cdf(x):
            return probability(x, ndtr)

        def pdf(x):
            return probability(x, lambda z: np.exp(-0.5 * z * z) / np.sqrt(2.0 * np.pi)) / error

        result = []
        for level in LEVELS:
            guess = magnitude - mean + ndtri(level) * np.hypot(sd, error)
            reach = np.hypot(sd, error)
            low, high = guess - reach, guess + reach
            while cdf(low) > level:
                low -= reach
            while cdf(high) < level:
                high += reach
            result.append(self._solve(level, low, high, cdf, pdf))
        return result


def prior_modulus_variance():
    """Variance of the modulus under the prior, any length: ln d of a gamma law of shape 3 has variance pi^2/6 - 5/4."""
    return MAG**2 * (np.pi**2 / 6.0 - 1.25)
