"""Reference values of distance-modulus posteriors in 40-digit arithmetic.

Usage: python posterior_values.py CASES OUTPUT      CASES: one of the keys of `FAMILIES` at the end
Needs: mpmath (1.3 or later).  Everything here follows from the formulas in this file; nothing is read.

Posterior of x = ln(d / kpc):  p(x) ~ d * prior(d) * exp(-(w - 1/d)^2 / (2 s^2)) [* exp(-(mu - e)^2 / (2 t^2))],
w, s in mas, d in kpc, mu = 5 log10(d / 10 pc); the last factor stands only where evidence is given.
Integrals: Gauss-Legendre with 30 nodes on panels over which the log density changes by less than about 6 (or that are
short), out to a density of e^-95 of the maximum.  Quantiles: Newton to 1e-28.  The convolution with a Gaussian
photometric error uses panels cut also at the quantile and at whole standard deviations from it.
"""
import bisect
import csv
import math
import random
import sys

import mpmath as mp

mp.mp.dps = 40
NODES = 30
LEVELS = [mp.ncdf(-1), mp.mpf("0.5"), mp.ncdf(1)]
WIDE = [mp.mpf("0.025"), mp.mpf("0.975")]
MAG = 5 / mp.log(10)


def gauss_legendre(n):
    out = []
    for i in range(1, n + 1):
        z = mp.cos(mp.pi * (i - mp.mpf("0.25")) / (n + mp.mpf("0.5")))
        for _ in range(100):
            p0, p1 = mp.mpf(1), z
            for k in range(2, n + 1):
                p0, p1 = p1, ((2 * k - 1) * z * p1 - (k - 1) * p0) / k
            slope = n * (z * p1 - p0) / (z * z - 1)
            step = p1 / slope
            z -= step
            if abs(step) < mp.mpf(10) ** -38:
                break
        out.append((z, 2 / ((1 - z * z) * slope * slope)))
    return out


RULE = gauss_legendre(NODES)


class Prior:
    """log of the unnormalised prior density in distance, its support in ln d, its moments of ln d."""

    def __init__(self, name, params):
        self.name, self.params = name, [mp.mpf(p) for p in params]
        p = self.params
        self.low, self.high = -mp.inf, mp.inf
        if name == "exponentially-decreasing-density":
            self.power, self.alpha, self.scale = mp.mpf(2), mp.mpf(1), p[0]
            self.log_norm = mp.log(2 * p[0] ** 3)
            self.variance = mp.psi(1, 3)
        elif name == "generalized-gamma":
            self.alpha, self.power, self.scale = p
            shape = (self.power + 1) / self.alpha
            self.log_norm = mp.loggamma(shape) + (self.power + 1) * mp.log(self.scale) - mp.log(self.alpha)
            self.variance = mp.psi(1, shape) / self.alpha**2
        elif name == "uniform-density":
            self.power, self.scale, self.high = mp.mpf(2), None, mp.log(p[0])
            self.log_norm = 3 * self.high - mp.log(3)
            self.variance = mp.mpf(1) / 9
        elif name == "uniform-modulus":
            self.power, self.scale = mp.mpf(-1), None
            self.low, self.high = p[0] / MAG - mp.log(100), p[1] / MAG - mp.log(100)
            self.log_norm = mp.log(self.high - self.low)
            self.variance = (self.high - self.low) ** 2 / 12
        else:
            raise ValueError(name)

    def log_density(self, x):
        value = self.power * x
        if self.scale is not None:
            value -= mp.exp(self.alpha * (x - mp.log(self.scale)))
        return value

    def slope(self, x):
        value = self.power
        if self.scale is not None:
            value -= self.alpha * mp.exp(self.alpha * (x - mp.log(self.scale)))
        return value

    def curvature(self, x):
        return -self.alpha**2 * mp.exp(self.alpha * (x - mp.log(self.scale))) if self.scale is not None else mp.mpf(0)


class Posterior:
    def __init__(self, prior, w, s, evidence=None):
        self.prior = prior
        self.w = None if w is None else mp.mpf(w)
        self.s = None if w is None else mp.mpf(s)
        self.evidence = None
        if evidence is not None:
            self.evidence = (mp.mpf(evidence[0]) / MAG - mp.log(100), mp.mpf(evidence[1]) / MAG)
        self.panels()

    def log_likelihood(self, x):
        value = mp.mpf(0)
        if self.w is not None:
            value -= ((self.w - mp.exp(-x)) / self.s) ** 2 / 2
        if self.evidence is not None:
            value -= ((x - self.evidence[0]) / self.evidence[1]) ** 2 / 2
        return value

    def log_density(self, x):
        """of x = ln d, unnormalised"""
        return self.prior.log_density(x) + x + self.log_likelihood(x)

    def slope(self, x):
        value = self.prior.slope(x) + 1
        if self.w is not None:
            u = mp.exp(-x) / self.s
            value += u * (u - self.w / self.s)
        if self.evidence is not None:
            value -= (x - self.evidence[0]) / self.evidence[1] ** 2
        return value

    def curvature(self, x):
        value = self.prior.curvature(x)
        if self.w is not None:
            u = mp.exp(-x) / self.s
            value -= u * (2 * u - self.w / self.s)
        if self.evidence is not None:
            value -= 1 / self.evidence[1] ** 2
        return value

    def stationary(self, shift):
        """Zeros of slope + shift by scan and bisection; -1 turns the density in ln d into that in d."""
        low, high = max(self.prior.low, mp.mpf(-60)), min(self.prior.high, mp.mpf(30))
        points = [low + (high - low) * i / 3000 for i in range(3001)]
        extra = []
        if self.w is not None and self.w > 0:
            centre = -mp.log(self.w)
            width = self.s / self.w
            extra = [centre + width * k / 4 for k in range(-60, 61)]
        if self.evidence is not None:
            extra += [self.evidence[0] + self.evidence[1] * k / 4 for k in range(-60, 61)]
        points = sorted(points + [e for e in extra if low < e < high])
        roots = []
        values = [self.slope(p) + shift for p in points]
        for (a, fa), (b, fb) in zip(zip(points, values), zip(points[1:], values[1:])):
            if fa == 0 or fa * fb < 0:
                for _ in range(60):
                    m = (a + b) / 2
                    fm = self.slope(m) + shift
                    if fa * fm <= 0:
                        b = m
                    else:
                        a, fa = m, fm
                x = (a + b) / 2
                for _ in range(6):
                    x -= (self.slope(x) + shift) / self.curvature(x)
                roots.append(x)
        return roots

    def modes(self, shift):
        roots = [r for r in self.stationary(shift) if self.curvature(r) < 0]
        for end, sign in ((self.prior.low, -1), (self.prior.high, 1)):
            if mp.isfinite(end) and sign * (self.slope(end) + shift) > 0:
                roots.append(end)
        return sorted(roots)

    def panels(self):
        peaks = self.modes(0)
        self.top = max(self.log_density(p) for p in peaks)
        cuts = set()
        valleys = sorted(self.stationary(0))
        for index, peak in enumerate(peaks):
            for side in (-1, 1):
                x, y = peak, self.log_density(peak)
                limit = self.prior.low if side < 0 else self.prior.high
                stops = [v for v in valleys if side * (v - peak) > 0] + ([limit] if mp.isfinite(limit) else [])
                stop = min(stops, key=lambda v: abs(v - peak)) if stops else side * mp.inf
                cuts.add(x)
                while y > self.top - 95 and side * (stop - x) > 0:
                    bend = max(abs(self.curvature(x)), mp.mpf("1e-30"))
                    step = min(mp.mpf(1), 2 / mp.sqrt(bend), 5 / max(abs(self.slope(x)), mp.mpf("1e-30")))
                    while True:
                        nxt = x + side * step
                        if side * (stop - nxt) < 0:
                            nxt = stop
                        if abs(self.log_density(nxt) - y) < 6:
                            break
                        step /= 2
                    x, y = nxt, self.log_density(nxt)
                    cuts.add(x)
        self.cuts = sorted(cuts)
        self.mass, self.nodes = [], []
        total = mp.mpf(0)
        self.cumulative = [total]
        for a, b in zip(self.cuts, self.cuts[1:]):
            half, middle = (b - a) / 2, (a + b) / 2
            part = [(middle + half * z, wgt * half * self.density(middle + half * z)) for z, wgt in RULE]
            self.nodes += part
            total += mp.fsum(v for _, v in part)
            self.cumulative.append(total)
        self.total = total

    def density(self, x):
        return mp.exp(self.log_density(x) - self.top)

    def integral(self, a, b, f):
        half, middle = (b - a) / 2, (a + b) / 2
        return half * mp.fsum(wgt * f(middle + half * z) for z, wgt in RULE)

    def quantile(self, p):
        goal = p * self.total
        k = bisect.bisect_right(self.cumulative, goal) - 1
        k = min(k, len(self.cuts) - 2)
        a, b = self.cuts[k], self.cuts[k + 1]
        left, goal, low, high = a, goal - self.cumulative[k], a, b
        x = a + (b - a) * goal / (self.cumulative[k + 1] - self.cumulative[k])
        for _ in range(80):
            error = self.integral(left, x, self.density) - goal
            if error > 0:
                high = x
            else:
                low = x
            step = error / self.density(x)
            nxt = x - step
            if not low <= nxt <= high:
                nxt = (low + high) / 2
            if abs(nxt - x) < mp.mpf(10) ** -28:
                return nxt
            x = nxt
        raise ArithmeticError("quantile")

    def moments(self):
        mean = mp.fsum(x * v for x, v in self.nodes) / self.total
        variance = mp.fsum((x - mean) ** 2 * v for x, v in self.nodes) / self.total
        return mean, variance

    def information(self):
        """Kullback-Leibler divergence of posterior from prior, nats."""
        mean_log = mp.fsum(self.log_likelihood(x) * v for x, v in self.nodes) / self.total
        return mean_log - (mp.log(self.total) + self.top - self.prior.log_norm)

    def convolved(self, p, tau, guess):
        """Quantile of x + Gaussian(0, tau)."""
        root2 = mp.sqrt(2)
        y = guess
        low, high = -mp.inf, mp.inf
        for _ in range(60):
            marks = [y + tau * k for k in range(-13, 14)]
            cuts = sorted(set(self.cuts + [m for m in marks if self.cuts[0] < m < self.cuts[-1]]))
            cdf = pdf = mp.mpf(0)
            for a, b in zip(cuts, cuts[1:]):
                if a >= y + 13 * tau:
                    continue
                half, middle = (b - a) / 2, (a + b) / 2
                whole = b <= y - 13 * tau
                for z, wgt in RULE:
                    x = middle + half * z
                    v = wgt * half * self.density(x)
                    if whole:
                        cdf += v
                        continue
                    q = (y - x) / tau
                    cdf += v * (mp.erfc(-q / root2) / 2)
                    pdf += v * mp.exp(-q * q / 2)
            pdf /= tau * mp.sqrt(2 * mp.pi)
            error = cdf / self.total - p
            if error > 0:
                high = y
            else:
                low = y
            nxt = y - error * self.total / pdf if pdf > 0 else (low + high) / 2
            if not low <= nxt <= high:
                nxt = (low + high) / 2
            if abs(nxt - y) < mp.mpf(10) ** -15:
                return nxt
            y = nxt
        raise ArithmeticError("convolved")


def digits(x):
    return mp.nstr(x, 17)


HEADER = ("prior,p1,p2,p3,parallax,error,evidence,evidence_error,photometric_error,p16,p50,p84,mode,mean,sd,share,"
          "m16,m50,m84,p025,p975,information,modes").split(",")


def row(name, params, w, s, evidence, tau):
    prior = Prior(name, params)
    post = Posterior(prior, w, s, evidence)
    modulus = lambda x: MAG * x + 10  # d in kpc: 5 log10(1000 d / 10)
    quantiles = [post.quantile(p) for p in LEVELS]
    wide = [post.quantile(p) for p in WIDE]
    modes = post.modes(-1)
    best = max(modes, key=lambda x: post.log_density(x) - x) if modes else None
    mean, variance = post.moments()
    out = [name] + [repr(float(p)) for p in params] + [""] * (3 - len(params))
    out += [repr(float(w)), repr(float(s))] if w is not None else ["", ""]
    out += [repr(float(evidence[0])), repr(float(evidence[1]))] if evidence else ["", ""]
    out += [repr(float(tau))]
    out += [digits(modulus(q)) for q in quantiles]
    out += [digits(modulus(best)), digits(modulus(mean)), digits(MAG * mp.sqrt(variance))]
    out += [digits(min(mp.mpf(1), variance / prior.variance))]
    if tau == 0:
        band = list(quantiles)
    else:
        t = mp.mpf(tau) / MAG
        band = []
        for p, q in zip(LEVELS, quantiles):
            z = mp.sqrt(2) * mp.erfinv(2 * p - 1)
            spread = mp.sqrt(variance + t * t) - mp.sqrt(variance)
            band.append(post.convolved(p, t, q + z * spread))
    # absolute magnitude of a star of apparent magnitude 0
    out += [digits(-modulus(band[2])), digits(-modulus(band[1])), digits(-modulus(band[0]))]
    out += [digits(modulus(q)) for q in wide] + [digits(post.information()), str(len(modes))]
    return out


def log_uniform(rng, a, b):
    return math.exp(rng.uniform(math.log(a), math.log(b)))


def photometric(rng, width):
    """0 to 1 mag; often near the posterior's own width, where convolution is hardest."""
    pick = rng.random()
    if pick < 0.1:
        return 0.0
    if pick < 0.5:
        return log_uniform(rng, 1e-3, 1.0)
    return min(1.0, max(1e-4, width * log_uniform(rng, 0.03, 5)))


RATIOS = [-20, -8, -3, -1, -0.3, 0, 0.5, 1, 1.5, 2, 2.5, 3, 3.5, 4, 4.5, 5, 6, 7, 8, 9, 10, 12, 15, 20, 30, 50, 100, 300, 1e3,
          1e4, 1e5, 1e6]


def scale_and_error(rng, product):
    """length (kpc) in 0.02..100 and error (mas) in 1e-4..1e2 with the wanted product."""
    low, high = max(0.02, product / 1e2), min(100.0, product / 1e-4)
    length = log_uniform(rng, low, high)
    return length, product / length


def edsd_cases(rng):
    for ratio in RATIOS:
        for product in [3e-6, 1e-4, 3e-3, 0.03, 0.1, 0.3, 1, 3, 30, 1e3, 9e3]:
            length, error = scale_and_error(rng, product * math.exp(rng.uniform(-0.1, 0.1)))
            signal = ratio * math.exp(rng.uniform(-0.1, 0.1))
            yield [length], signal * error, error, None, photometric(rng, 2.17 / max(2.0, abs(signal)))
    for _ in range(60):  # two modes of comparable mass: s and the height of the far shelf play against each other
        signal = rng.uniform(2.5, 7.5)
        near = (2 * math.exp(-signal**2 / 2) * signal / 2.5066) ** (1 / 3) * math.exp(rng.uniform(-1.5, 1.5))
        length, error = scale_and_error(rng, 1 / (near * signal))
        yield [length], signal * error, error, None, photometric(rng, 0.5)
    for _ in range(60):  # a survey's mix
        length = log_uniform(rng, 0.3, 3)
        error = log_uniform(rng, 0.02, 1)
        distance = length * log_uniform(rng, 0.1, 8)
        yield [length], rng.gauss(1 / distance, error), error, None, log_uniform(rng, 1e-3, 0.05)


def uniform_cases(rng):
    for ratio in RATIOS:
        for cut in [0.03, 0.3, 0.8, 0.97, 1.03, 1.5, 5, 100]:  # limit in units of error/parallax distance
            error = log_uniform(rng, 1e-4, 1e2)
            signal = ratio * math.exp(rng.uniform(-0.1, 0.1))
            centre = 1 / (max(abs(signal), 1.0) * error)
            if signal > 5 and abs(cut - 1) < 0.1:  # let the limit cut the peak itself
                limit = centre * (1 + rng.uniform(-4, 4) / signal)
            else:
                limit = cut * centre
            yield [min(max(limit, 1e-6), 1e6)], signal * error, error, None, photometric(rng, 2.17 / max(2.0, abs(signal)))


def gamma_cases(rng):
    for ratio in RATIOS:
        for product in [1e-4, 0.03, 0.3, 1, 30, 3e3]:
            length, error = scale_and_error(rng, product * math.exp(rng.uniform(-0.3, 0.3)))
            alpha, beta = log_uniform(rng, 0.3, 4), rng.uniform(0, 6)
            signal = ratio * math.exp(rng.uniform(-0.1, 0.1))
            yield [alpha, beta, length], signal * error, error, None, photometric(rng, 2.17 / max(2.0, abs(signal)))


def modulus_cases(rng):
    for ratio in RATIOS:
        for _ in range(5):
            start = rng.uniform(-5, 15)
            stop = start + log_uniform(rng, 0.5, 20)
            signal = ratio * math.exp(rng.uniform(-0.1, 0.1))
            inside = rng.uniform(start - 1, stop + 1)
            error = min(1e2, max(1e-4, 10 ** (-(inside - 10) / 5) / max(abs(signal), 0.5)))
            yield [start, stop], signal * error, error, None, photometric(rng, 2.17 / max(2.0, abs(signal)))


def evidence_cases(rng):
    for index in range(120):
        length = log_uniform(rng, 0.1, 10)
        mu = 10 + 5 * math.log10(length * log_uniform(rng, 0.1, 8))
        extra = (mu, log_uniform(rng, 0.005, 3))
        if index % 3 == 0:
            w = error = None
        else:
            signal = rng.choice(RATIOS[:28])
            error = min(1e2, max(1e-4, 10 ** (-(mu + rng.gauss(0, 1) - 10) / 5) / max(abs(signal), 0.5)))
            w = signal * error
        yield [length], w, error, extra, photometric(rng, extra[1])


FAMILIES = {
    "exponential": ("exponentially-decreasing-density", edsd_cases, 1),
    "uniform": ("uniform-density", uniform_cases, 2),
    "gamma": ("generalized-gamma", gamma_cases, 3),
    "modulus": ("uniform-modulus", modulus_cases, 4),
    "evidence": ("exponentially-decreasing-density", evidence_cases, 5),
}


def main():
    name, cases, seed = FAMILIES[sys.argv[1]]
    with open(sys.argv[2], "w", newline="") as handle:
        handle.write("# written by posterior_values.py; 40-digit arithmetic, printed to 17 digits; m16, m50, m84: absolute\n"
                     "# magnitude of a star of apparent magnitude 0 with the photometric error of its row; units kpc, mas, mag\n")
        writer = csv.writer(handle, lineterminator="\n")
        writer.writerow(HEADER)
        for params, w, s, evidence, tau in cases(random.Random(seed)):
            try:
                writer.writerow(row(name, params, w, s, evidence, tau))
                handle.flush()
            except ArithmeticError as error:
                print("left out", params, w, s, evidence, tau, error, file=sys.stderr)


if __name__ == "__main__":
    main()
