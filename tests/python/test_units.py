"""Live comparison with astropy on a small catalogue that this file writes.

Parallax errors are 1e-4 of the parallax, so that the posterior must sit on the direct value but for a shift of second
order: bands by magnitude and by flux, extinction by a column of A_V, colours with errors, a zero point, and galaxies of tests/reference as stars.
"""

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from astropy import constants, units
from astropy.coordinates import Distance

import program
from conftest import reference_rows

OFFSET_MAS = -0.021
RELATIVE = 1e-4
LENGTH_KPC = 1.35
RATIO = {"G": 0.84, "B": 1.05, "R": 0.61}
ZERO_POINT = 25.7

PLAN = """
[release]
title = "Units"
catalogue = ["stars.parquet"]
{precision}

[columns]
id = "source"
ra = "ra"
dec = "dec"
parallax = "parallax"
parallax_error = "parallax_error"

[bands.G]
magnitude = "g_mag"
magnitude_error = "g_mag_error"
extinction_ratio = 0.84

[bands.B]
flux = "b_flux"
flux_error = "b_flux_error"
zero_point = 25.7
system = "Vega"
extinction_ratio = 1.05

[bands.R]
magnitude = "r_mag"
magnitude_error = "r_mag_error"
extinction_ratio = 0.61

[colours]
B_R = ["B", "R"]
G_R = ["G", "R"]

[zero_point]
model = "constant"
offset_mas = -0.021

[extinction]
model = "column"
column = "a_v"

[[cuts]]
name = "positive"
keep = "parallax_calibrated > 0"
effect = "flag"

[distance]
prior = "exponentially-decreasing-density"
length_kpc = 1.35
"""


def stars() -> pa.Table:
    """Distances from 1 pc to beyond M31, then the galaxies, then the star of the common-practice example."""
    galaxies = [float(row["distance_pc"]) for row in reference_rows("distance_moduli.csv")]
    parsec = np.concatenate([np.geomspace(1.0, 2e6, 60), galaxies, [10 ** (21.2 / 5 + 1)]])
    random = np.random.default_rng(1989)
    n = parsec.size
    true_mas = 1000.0 / parsec
    g_mag = random.uniform(3, 21, n)
    g_mag[-1] = 17.0
    a_v = random.uniform(0, 4, n)
    a_v[-4:] = 0.0
    b_flux = 10 ** random.uniform(-2, 6, n)
    known = {
        "source": pa.array([f"star {i}" for i in range(n)]),
        "ra": random.uniform(0, 360, n),
        "dec": np.degrees(np.arcsin(random.uniform(-1, 1, n))),
        "parallax": true_mas + OFFSET_MAS,
        "parallax_error": true_mas * RELATIVE,
        "g_mag": g_mag,
        "g_mag_error": random.uniform(0.001, 0.3, n),
        "b_flux": b_flux,
        "b_flux_error": b_flux * random.uniform(0.001, 0.2, n),
        "r_mag": random.uniform(3, 21, n),
        "r_mag_error": random.uniform(0.001, 0.3, n),
        "a_v": a_v,
    }
    unit = {"parallax": "mas", "parallax_error": "mas", "ra": "deg", "dec": "deg", "a_v": "mag"}
    unit |= {name: "mag" for name in known if "_mag" in name}
    fields = [
        pa.field(
            name,
            pa.string() if name == "source" else pa.float64(),
            metadata={"unit": unit[name]} if name in unit else None,
        )
        for name in known
    ]
    return pa.table([pa.array(values) for values in known.values()], schema=pa.schema(fields))


@pytest.fixture(scope="module")
def catalogue():
    return stars()


def built(folder, catalogue, precision):
    pq.write_table(catalogue, folder / "stars.parquet", row_group_size=17)
    (folder / "plan.toml").write_text(PLAN.format(precision=precision))
    return program.build(folder / "plan.toml", folder / "release").catalogue()


@pytest.fixture(scope="module")
def made(catalogue, tmp_path_factory):
    return built(tmp_path_factory.mktemp("double"), catalogue, 'precision = "double"')


def column(table, name):
    return table[name].to_numpy(zero_copy_only=False)


@pytest.fixture(scope="module")
def distance(catalogue):
    """astropy's distances from the calibrated parallaxes."""
    return Distance(parallax=(column(catalogue, "parallax") - OFFSET_MAS) * units.mas)


def pull(distance):
    """How far, in mag, the prior may draw the posterior of a parallax with relative error r off the direct value, at most.

    The log density has slope 2 or 3 less d/L from the prior and curvature 1/r^2 from the parallax; skewness adds terms
    of r^2 too: (5 / ln 10) (5 + d/L) r^2. 2e-6 mag is what the program may err by.
    """
    return 5 / np.log(10) * (5 + distance.to_value(units.kpc) / LENGTH_KPC) * RELATIVE**2 + 2e-6


def within(got, expected, tolerance, name):
    miss = np.abs(got - expected) / tolerance
    worst = int(np.nanargmax(np.where(np.isnan(miss), np.inf, miss)))
    assert miss[worst] <= 1, (
        f"{name}, row {worst}: {got[worst]!r} for {expected[worst]!r}, {miss[worst]} times the tolerance"
    )


def test_astropy_has_the_constants_of_the_reference():
    """The constants of tests/reference, which the Rust tests hold the program to, against astropy's."""
    import tomllib

    from conftest import REFERENCE

    known = tomllib.loads((REFERENCE / "magnitude_constants.toml").read_text())
    assert constants.au.to_value(units.m) == known["astronomical_unit"]["value"]
    assert constants.pc.to_value(units.m) == pytest.approx(known["parsec"]["value"], rel=1e-15)
    assert constants.L_bol0.to_value(units.W) == known["luminosity_zero"]["value"]
    assert constants.L_sun.to_value(units.W) == known["sun_absolute"]["luminosity"]
    irradiance = (constants.L_bol0 / (4 * np.pi * (10 * units.pc) ** 2)).to_value(units.W / units.m**2)
    assert irradiance == pytest.approx(known["irradiance_zero"]["value"], rel=1e-9)
    assert units.Magnitude(constants.L_sun, units.M_bol).value == pytest.approx(
        known["sun_absolute"]["value"], abs=0.005
    )
    apparent = units.Magnitude(known["sun_apparent"]["irradiance"] * units.W / units.m**2, units.m_bol)
    assert apparent.value == pytest.approx(known["sun_apparent"]["value"], abs=0.0005)
    ab = (0 * units.ABmag).to_value(units.Jy)
    assert ab == pytest.approx(known["ab_zero_jansky"]["value"], rel=1e-12)


def test_calibrated_parallax(made, catalogue, distance):
    np.testing.assert_array_equal(column(made, "zero_point"), OFFSET_MAS)
    np.testing.assert_allclose(column(made, "parallax_calibrated"), distance.parallax.to_value(units.mas), rtol=1e-12)
    ratio = column(made, "parallax_calibrated") / column(catalogue, "parallax_error")
    np.testing.assert_allclose(column(made, "parallax_over_error"), ratio, rtol=1e-14)


def test_modulus_is_astropys(made, distance):
    for name in ("modulus_p50", "modulus_mean", "modulus_mode"):
        within(column(made, name), distance.distmod.value, pull(distance), name)
    width = 5 / np.log(10) * RELATIVE
    # Sd and half-widths: first order in r; the prior's curvature d/L r^2 is what is left, 6e-5 at the farthest.
    np.testing.assert_allclose(column(made, "modulus_sd"), width, rtol=0.01)
    np.testing.assert_allclose(column(made, "modulus_p84") - column(made, "modulus_p50"), width, rtol=0.01)
    np.testing.assert_allclose(column(made, "modulus_p50") - column(made, "modulus_p16"), width, rtol=0.01)


def test_distance_is_astropys(made, distance):
    """And astropy's modulus of the program's distance is the program's modulus."""
    for q in ("p16", "p50", "p84"):
        own = column(made, f"distance_{q}")
        back = Distance(own * units.pc).distmod.value
        np.testing.assert_allclose(back, column(made, f"modulus_{q}"), rtol=0, atol=1e-12)
    relative = column(made, "distance_p50") / distance.to_value(units.pc)
    within(relative, np.ones_like(relative), pull(distance) * np.log(10) / 5, "distance_p50 over astropy's")


def test_published_moduli_of_galaxies(made, distance):
    """LMC, NGC 4258 and M31 as stars with parallax 1/d: the printed modulus within the rounding of the printed pair."""
    for i, galaxy in enumerate(reference_rows("distance_moduli.csv")):
        row = 60 + i
        modulus = column(made, "modulus_p50")[row]
        rounding = float(galaxy["half_unit_mag"]) + pull(distance)[row]
        assert abs(modulus - float(galaxy["modulus_mag"])) < rounding, galaxy["name"]
        # Common practice: mu = 5 log10(d/Mpc) + 25.
        mpc = float(galaxy["distance_pc"]) / 1e6
        assert modulus == pytest.approx(5 * np.log10(mpc) + 25, abs=pull(distance)[row]), galaxy["name"]


def test_seventeen_and_minus_four_point_two(made, distance):
    """Common practice: m = 17 and M = -4.2 stand at mu = 21.2."""
    assert column(made, "modulus_p50")[-1] == pytest.approx(21.2, abs=pull(distance)[-1])
    assert column(made, "absmag_G_direct")[-1] == pytest.approx(-4.2, abs=1e-11)


def apparent(catalogue, band):
    """Apparent magnitude and error of a band, by astropy where it stands as a flux."""
    if band != "B":
        name = band.lower()
        return column(catalogue, f"{name}_mag"), column(catalogue, f"{name}_mag_error")
    flux = column(catalogue, "b_flux") * units.electron / units.s
    instrumental = units.Magnitude(flux)
    # Error by a numerical derivative of astropy's magnitude, not by the textbook factor.
    step = 1e-6
    slope = (units.Magnitude(flux * (1 - step)).value - units.Magnitude(flux * (1 + step)).value) / (2 * step)
    return instrumental.value + ZERO_POINT, slope * column(catalogue, "b_flux_error") / column(catalogue, "b_flux")


@pytest.mark.parametrize("band", ["G", "B", "R"])
def test_absolute_magnitudes(made, catalogue, distance, band):
    magnitude, error = apparent(catalogue, band)
    extinction = RATIO[band] * column(catalogue, "a_v")
    np.testing.assert_allclose(column(made, f"extinction_{band}"), extinction, rtol=1e-15)
    expected = magnitude - distance.distmod.value - extinction
    np.testing.assert_allclose(column(made, f"absmag_{band}_direct"), expected, rtol=0, atol=1e-11)
    # Magnitude error and modulus width in quadrature.
    total = np.hypot(error, 5 / np.log(10) * RELATIVE)
    for name, shift in (("p16", -total), ("p50", 0.0), ("p84", total)):
        within(column(made, f"absmag_{band}_{name}"), expected + shift, pull(distance), name)


@pytest.mark.parametrize(("colour", "blue", "red"), [("B_R", "B", "R"), ("G_R", "G", "R")])
def test_colours(made, catalogue, colour, blue, red):
    (m1, e1), (m2, e2) = apparent(catalogue, blue), apparent(catalogue, red)
    np.testing.assert_allclose(column(made, f"colour_{colour}"), m1 - m2, rtol=0, atol=1e-13)
    np.testing.assert_allclose(column(made, f"colour_{colour}_error"), np.sqrt(e1**2 + e2**2), rtol=1e-9)
    reddening = (RATIO[blue] - RATIO[red]) * column(catalogue, "a_v")
    np.testing.assert_allclose(column(made, f"colour_{colour}_intrinsic"), m1 - m2 - reddening, rtol=0, atol=1e-13)


def test_single_precision_is_the_rounding_of_double(made, catalogue, tmp_path):
    single = built(tmp_path, catalogue, "")
    for field in single.schema:
        double = made.schema.field(field.name)
        if field.name in catalogue.column_names or not pa.types.is_floating(double.type):
            assert field.type == double.type, field.name
            assert single[field.name].equals(made[field.name]), field.name
        else:
            assert (field.type, double.type) == (pa.float32(), pa.float64()), field.name
            rounded = column(made, field.name).astype(np.float32)
            np.testing.assert_array_equal(column(single, field.name), rounded, err_msg=field.name)


BAD_FLUXES = [0.0, -3.0, np.nan, np.inf, None, 5.0, 5.0, 5.0]
BAD_ERRORS = [0.1, 0.1, 0.1, 0.1, 0.1, np.nan, None, -0.1]


def test_missing_flux_gives_null_and_never_a_number(catalogue, tmp_path):
    """A flux that is not positive and finite has no magnitude; without a valid error only the errors are missing."""
    names = catalogue.column_names
    base = catalogue.slice(20, 1)
    rows = pa.concat_tables([base] * len(BAD_FLUXES))
    rows = rows.set_column(
        names.index("b_flux"), catalogue.schema.field("b_flux"), pa.array(BAD_FLUXES, pa.float64(), from_pandas=False)
    )
    field = catalogue.schema.field("b_flux_error")
    rows = rows.set_column(names.index("b_flux_error"), field, pa.array(BAD_ERRORS, pa.float64(), from_pandas=False))
    made = built(tmp_path, rows, 'precision = "double"')
    assert made.num_rows == len(BAD_FLUXES)
    no_flux = [True] * 5 + [False] * 3
    for name in ("absmag_B_direct", "colour_B_R", "colour_B_R_intrinsic"):
        assert [value is None for value in made[name].to_pylist()] == no_flux, name
    for name in ("absmag_B_p16", "absmag_B_p84", "colour_B_R_error"):
        assert all(value is None for value in made[name].to_pylist()), name
    for name in ("absmag_G_direct", "absmag_G_p50", "modulus_p50", "colour_G_R"):
        assert made[name].null_count == 0, name
    for name in made.column_names[len(names) :]:
        values = made[name].drop_null()
        if pa.types.is_floating(values.type):
            assert np.isfinite(values.to_numpy()).all(), f"{name} holds a NaN or an infinity instead of null"
