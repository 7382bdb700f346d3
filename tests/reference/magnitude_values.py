"""Writes magnitude_values.csv: conversions between distance, parallax, flux and magnitude at 40 digits (mpmath).

Formulas are common practice: mu = 5 log10(d/pc) - 5; M = m + 5 log10(parallax/mas) - 10 - A;
m = zp - 2.5 log10 f, error (2.5/ln 10) e_f/f. Run as `python magnitude_values.py > magnitude_values.csv`.
Inputs are the decimal numbers shown, read as exact decimals; a test reads them as the nearest f64.
"""

from mpmath import log, log10, mp, mpf, nstr

mp.dps = 40

PARSEC = ["4.84813681109536e-6", "1", "1.3012", "5.15", "9.999999", "10", "10.000001", "49590", "761000", "7.576e6", "1.4e10"]
MODULI = ["-31.572125665882297", "-5", "-0.001", "0", "0.001", "18.477", "21.2", "29.397", "45.7"]
PARALLAXES = ["768.0665", "100", "7.54", "0.55", "0.0201", "1e-7"]
ABSOLUTE = [
    ("-1.46", "379.21", "0"),
    ("0.77", "194.17475728155339", "0"),
    ("17", "0.0057543993733715694", "0"),
    ("21.3417", "0.0137", "2.731"),
    ("2.1077", "7.54", "0.01"),
    ("13.5", "1000", "-0.02"),
]
FLUX = [("1", "0", "25.7"), ("15849.31924611", "31.7", "25.8010"), ("0.37", "0.21", "22.5"), ("1361", "0.5", "-18.997351629448459")]


def row(kind, inputs, value):
    fields = list(inputs) + [""] * (3 - len(inputs))
    print(",".join([kind, *fields, nstr(value, 22, strip_zeros=False, min_fixed=-20, max_fixed=22)]))


print("# Derived with 40-digit arithmetic by magnitude_values.py (formulas there); status: derived.")
print("kind,a,b,c,value")
for d in PARSEC:
    row("modulus_from_parsec", [d], 5 * log10(mpf(d)) - 5)
for mu in MODULI:
    row("parsec_from_modulus", [mu], mpf(10) ** (mpf(mu) / 5 + 1))
for w in PARALLAXES:
    row("modulus_from_parallax_mas", [w], 10 - 5 * log10(mpf(w)))
for m, w, a in ABSOLUTE:
    row("absolute_magnitude", [m, w, a], mpf(m) + 5 * log10(mpf(w)) - 10 - mpf(a))
for f, e, zp in FLUX:
    row("magnitude_from_flux", [f, zp], mpf(zp) - mpf("2.5") * log10(mpf(f)))
    row("magnitude_error_from_flux", [f, e], mpf("2.5") / log(10) * mpf(e) / mpf(f))
