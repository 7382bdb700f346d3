"""117,955 measured parallaxes become a release, and every number in it is computed here a second time.

Catalogue: van Leeuwen 2007, A&A 474, 653 (hipparcos.py); plan: hipparcos.toml. Nothing is corrected in this plan, so the
release must follow from the catalogue by formulas that are common practice, and from the posterior of quadrature.py.
"""

from collections import Counter
from decimal import Decimal

import numpy as np
import polars as pl
import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.parquet as pq
import pytest

import hipparcos
from conftest import reference_rows
from program import metadata
from quadrature import LEVELS, MAG, Posterior, prior_modulus_variance

LENGTH_KPC = 1.35
TOLERANCE = 2e-6
SEED = 2007
CUTS = ["precise", "coloured", "single", "near"]
POSTERIOR = ["modulus_p16", "modulus_p50", "modulus_p84", "modulus_mean", "modulus_sd", "modulus_mode"]
POSTERIOR += ["absmag_Hp_p16", "absmag_Hp_p50", "absmag_Hp_p84"]


@pytest.fixture(scope="module")
def catalogue(hipparcos_folder):
    return pq.read_table(hipparcos_folder / "hipparcos.parquet")


@pytest.fixture(scope="module")
def made(hipparcos_release):
    return hipparcos_release.catalogue()


def numbers(table, name):
    """A column as float64 with NaN for null."""
    return table[name].to_numpy(zero_copy_only=False).astype(np.float64)


# ---------------------------------------------------------------- the catalogue itself


def test_the_catalogue_is_the_one_described(catalogue):
    assert catalogue.num_rows == hipparcos.ROWS
    assert (numbers(catalogue, "parallax") <= 0).sum() == hipparcos.NOT_POSITIVE
    assert catalogue["b_v"].null_count == 1_143
    assert catalogue["b_v_error"].null_count == 1_660


def test_textbook_parallaxes_are_those_of_the_catalogue(catalogue):
    """Values of tests/reference from memory against the file: equal for vL2007, within 4 errors for other satellites."""
    row_of = {hip: i for i, hip in enumerate(catalogue["hip"].to_pylist())}
    for star in reference_rows("textbook_stars.csv"):
        i = row_of[int(star["hip"])]
        parallax, error = (catalogue[name][i].as_py() for name in ("parallax", "parallax_error"))
        if star["parallax_source"] == "vL2007":
            assert (parallax, error) == (float(star["parallax_mas"]), float(star["parallax_error_mas"])), star["star"]
        else:
            allowed = 4 * np.hypot(error, float(star["parallax_error_mas"]))
            assert abs(parallax - float(star["parallax_mas"])) < allowed, star["star"]


# ---------------------------------------------------------------- every row accounted for


def test_every_row_is_there_in_order(catalogue, made):
    assert made.num_rows == hipparcos.ROWS
    assert made["hip"].equals(catalogue["hip"])


@pytest.mark.parametrize("name", list(hipparcos.COLUMNS))
def test_catalogue_columns_pass_through_unchanged(catalogue, made, name):
    before, after = catalogue.schema.field(name), made.schema.field(name)
    assert after.type == before.type
    assert after.metadata == before.metadata
    assert made[name].null_count == catalogue[name].null_count
    assert made[name].combine_chunks().equals(catalogue[name].combine_chunks())


def test_columns_keep_their_order_and_new_ones_follow(catalogue, made):
    width = catalogue.num_columns
    assert made.column_names[:width] == catalogue.column_names
    expected = {"zero_point", "parallax_calibrated", "parallax_error_calibrated", "parallax_over_error"}
    expected |= {"extinction_Hp", "colour_B_V", "colour_B_V_error", "colour_B_V_intrinsic"}
    expected |= {f"modulus_{x}" for x in ("p16", "p50", "p84", "mode", "mean", "sd")}
    expected |= {f"distance_{x}" for x in ("p16", "p50", "p84")}
    expected |= {"prior_share", "verdict", "accepted"}
    expected |= {f"absmag_Hp_{x}" for x in ("direct", "p16", "p50", "p84")}
    assert set(made.column_names[width:]) == expected


# ---------------------------------------------------------------- formulas, all rows


def test_calibrated_values_are_the_catalogues(made):
    parallax, error = numbers(made, "parallax"), numbers(made, "parallax_error")
    np.testing.assert_array_equal(numbers(made, "zero_point"), 0.0)
    np.testing.assert_array_equal(numbers(made, "parallax_calibrated"), parallax)
    np.testing.assert_allclose(numbers(made, "parallax_error_calibrated"), error, rtol=4e-16)
    np.testing.assert_allclose(numbers(made, "parallax_over_error"), parallax / error, rtol=1e-15)
    np.testing.assert_array_equal(numbers(made, "extinction_Hp"), 0.0)
    np.testing.assert_array_equal(numbers(made, "colour_B_V"), numbers(made, "b_v"))
    np.testing.assert_array_equal(numbers(made, "colour_B_V_error"), numbers(made, "b_v_error"))
    np.testing.assert_array_equal(numbers(made, "colour_B_V_intrinsic"), numbers(made, "b_v"))


def test_direct_magnitude_is_null_exactly_without_positive_parallax(made):
    parallax, direct = numbers(made, "parallax"), made["absmag_Hp_direct"]
    missing = pc.is_null(direct).to_numpy(zero_copy_only=False)
    np.testing.assert_array_equal(missing, parallax <= 0)
    assert missing.sum() == hipparcos.NOT_POSITIVE
    expected = numbers(made, "hp_mag")[~missing] + 5 * np.log10(parallax[~missing]) - 10
    np.testing.assert_allclose(numbers(made, "absmag_Hp_direct")[~missing], expected, rtol=0, atol=1e-13)


def test_named_stars(made):
    """M_Hp = Hp + 5 log10(parallax/mas) - 10 to the last digits, and near the textbook's M_V.

    Hp is a broad band around V. For the A to K stars here Hp - V lies in 0 .. 0.25 (ESA 1997, SP-1200, vol. 1; memory 85%),
    for M dwarfs it falls to -0.4, Betelgeuse varies by 0.3 and Sirius is off its scale: 0.5 mag on top of the difference of
    the parallaxes tells a wrong star, unit or sign, all of which err by more than 1 mag.
    """
    row_of = {hip: i for i, hip in enumerate(made["hip"].to_pylist())}
    stars = reference_rows("textbook_stars.csv")
    assert len(stars) == 18
    for star in stars:
        i = row_of[int(star["hip"])]
        value = {name: made[name][i].as_py() for name in made.column_names}
        direct = value["hp_mag"] + 5 * np.log10(value["parallax"]) - 10
        assert value["absmag_Hp_direct"] == pytest.approx(direct, abs=1e-13), star["star"]
        shift = abs(5 * np.log10(value["parallax"] / float(star["parallax_mas"])))
        assert abs(value["absmag_Hp_direct"] - float(star["m_v"])) < 0.5 + shift, star["star"]
        # Precise parallaxes leave the prior no say: the posterior's median is the direct value, to second order in the
        # relative error r: |bias| is below (5 / ln 10) (a + d/L) r^2 with a <= 5 for this prior.
        r = value["parallax_error"] / value["parallax"]
        if r < 0.05:
            bias = MAG * (5 + 1 / value["parallax"] / LENGTH_KPC) * r * r
            assert abs(value["absmag_Hp_p50"] - value["absmag_Hp_direct"]) < bias + TOLERANCE, star["star"]


def test_posterior_is_there_for_every_row_and_ordered(made):
    for stem in ("modulus", "distance", "absmag_Hp"):
        low, middle, high = (numbers(made, f"{stem}_{q}") for q in ("p16", "p50", "p84"))
        assert np.isfinite(low).all() and np.isfinite(middle).all() and np.isfinite(high).all(), stem
        assert (low < middle).all() and (middle < high).all(), stem
    for q in ("p16", "p50", "p84"):
        np.testing.assert_allclose(
            numbers(made, f"distance_{q}"), 10 ** (numbers(made, f"modulus_{q}") / 5 + 1), rtol=1e-13
        )
    sd = numbers(made, "modulus_sd")
    assert (sd > 0).all()
    share = np.minimum(sd**2 / prior_modulus_variance(), 1.0)
    np.testing.assert_allclose(numbers(made, "prior_share"), share, rtol=1e-6)


# ---------------------------------------------------------------- the posterior, 1,000 rows


def chosen(table):
    """1,000 rows: 675 of all, 200 without positive parallax, and the 125 that strain a quadrature most."""
    parallax, error = numbers(table, "parallax"), numbers(table, "parallax_error")
    ratio = parallax / error
    random = np.random.default_rng(SEED)
    rows = list(random.choice(table.num_rows, 675, replace=False))
    rows += list(random.choice(np.flatnonzero(parallax <= 0), 200, replace=False))
    # Two humps, one at the parallax and one of the prior far behind it: with 2 to 6 errors both hold some probability,
    # with 7 to 8 the far one holds a millionth, too little for a quantile and enough for the standard deviation.
    humps = np.flatnonzero((parallax > 10) & (ratio > 2) & (ratio < 6))
    slight = np.flatnonzero((parallax > 10) & (ratio > 7) & (ratio < 8))
    for strained in (np.argsort(-ratio), np.argsort(ratio), np.argsort(-error), humps, slight):
        rows += list(strained[:25])  # most and least precise, largest error, humps
    return np.array(rows)


@pytest.fixture(scope="module")
def recomputed(catalogue):
    rows = chosen(catalogue)
    columns = [numbers(catalogue, name)[rows] for name in ("parallax", "parallax_error", "hp_mag", "hp_mag_error")]
    found = []
    for parallax, error, magnitude, magnitude_error in zip(*columns):
        posterior = Posterior(parallax, error, LENGTH_KPC)
        low, middle, high = (posterior.modulus_quantile(level) for level in LEVELS)
        mean, sd = posterior.modulus_moments()
        absolute = posterior.absolute_quantiles(magnitude, magnitude_error)
        found.append([low, middle, high, mean, sd, posterior.modulus_mode(), *absolute])
    return rows, dict(zip(POSTERIOR, np.array(found).T))


def worst(rows, got, expected, table, name, tolerance):
    """A sentence about the row that misses most, or nothing when all are within the tolerance."""
    miss = np.abs(got - expected)
    miss[~np.isfinite(miss)] = np.inf
    i = int(np.argmax(miss))
    if miss[i] <= tolerance:
        return None
    row = rows[i]
    star = {c: table[c][int(row)].as_py() for c in ("hip", "parallax", "parallax_error", "hp_mag", "hp_mag_error")}
    return f"{name}: {(miss > tolerance).sum()} of {len(rows)} rows off, worst {got[i]!r} for {expected[i]!r} at {star}"


@pytest.mark.parametrize("name", POSTERIOR)
def test_posterior_agrees_with_an_independent_quadrature(made, recomputed, name):
    rows, expected = recomputed
    assert len(rows) == 1000 and (numbers(made, "parallax")[rows] <= 0).sum() >= 200
    miss = worst(rows, numbers(made, name)[rows], expected[name], made, name, TOLERANCE)
    assert not miss, miss


def test_distances_agree_with_an_independent_quadrature(made, recomputed):
    """2e-6 mag of modulus are 0.92e-6 of the distance."""
    rows, expected = recomputed
    misses = []
    for q in ("p16", "p50", "p84"):
        distance = 10 ** (expected[f"modulus_{q}"] / 5 + 1)
        got = numbers(made, f"distance_{q}")[rows]
        misses.append(worst(rows, got / distance, np.ones(len(rows)), made, f"distance_{q} ratio", TOLERANCE / MAG))
    assert not any(misses), "\n".join(filter(None, misses))


# ---------------------------------------------------------------- cuts


def keeps(made):
    """The plan's four keep-conditions as SQL has them: true, false or null."""

    def decided(condition, *inputs):
        known = np.all([np.isfinite(x) for x in inputs], axis=0)
        return np.where(known, condition, False), ~known

    ratio, colour, modulus = numbers(made, "parallax_over_error"), numbers(made, "b_v"), numbers(made, "modulus_p50")
    components, goodness = numbers(made, "components"), numbers(made, "goodness_of_fit")
    return [
        decided(ratio > 5, ratio),
        decided((colour > -0.3) & (colour < 1.8), colour),
        decided((components == 1) & (goodness < 5), components, goodness),
        decided(modulus < 9.5, modulus),
    ]


def test_verdict_and_accepted(made):
    bits = sum((~keep).astype(np.uint32) << i for i, (keep, _) in enumerate(keeps(made)))
    assert made.schema.field("verdict").type == pa.uint32()
    assert made.schema.field("accepted").type == pa.bool_()
    assert made["verdict"].null_count == made["accepted"].null_count == 0
    np.testing.assert_array_equal(made["verdict"].to_numpy(), bits)
    np.testing.assert_array_equal(made["accepted"].to_numpy(), bits == 0)
    assert 1000 < (bits == 0).sum() < hipparcos.ROWS - 1000, "the plan's cuts must keep some rows and flag some"
    described = " ".join(metadata(made.schema.field("verdict")).values())
    assert all(name in described for name in CUTS), f"the verdict's field metadata names no cuts: {described}"


def test_cut_counts(made, hipparcos_release):
    """A cut fails a row whatever the others say; fails it first of all in the plan's order; is the only one; or is null."""
    fails = np.array([~keep for keep, _ in keeps(made)])
    missing = [unknown for _, unknown in keeps(made)]
    table = hipparcos_release.table("cut_counts").to_pylist()
    assert [row["cut"] for row in table] == CUTS
    for i, row in enumerate(table):
        expected = {
            "judged": made.num_rows,  # no cut of this plan drops rows
            "fails": fails[i].sum(),
            "fails_first": (fails[i] & ~fails[:i].any(axis=0)).sum(),
            "fails_only": (fails[i] & (fails.sum(axis=0) == 1)).sum(),
            "missing": missing[i].sum(),
        }
        assert {name: row[name] for name in expected} == expected, row["cut"]
    assert sum(row["fails_first"] for row in table) == (~made["accepted"].to_numpy()).sum()


# ---------------------------------------------------------------- tables


def edges(first, last, step):
    """The doubles nearest to the decimal numbers first, first + step, ... last."""
    first, last, step = (Decimal(x) for x in (first, last, step))
    return np.array([float(first + i * step) for i in range(int((last - first) / step) + 1)])


def cells(values, edges):
    """Lower and upper edge of each value's bin, a value on an edge counting in the bin above; open ends None, missing twice."""
    known = np.isfinite(values)
    at = np.searchsorted(edges, values, side="right")
    ends = [None, *edges.tolist(), None]
    return [(ends[i], ends[i + 1]) if ok else (None, None) for i, ok in zip(at.tolist(), known.tolist())]


def compare_counts(table, axes, keep):
    """`table` against a recount of the rows that `keep` marks; axes: quantity -> (values, edges)."""
    names = [f"{quantity}_{end}" for quantity in axes for end in ("from", "to")]
    assert table.column_names == [*names, "stars"]
    of_row = [cells(values[keep], bins) for values, bins in axes.values()]
    expected = Counter(sum(pairs, ()) for pairs in zip(*of_row))
    got = {tuple(row[name] for name in names): row["stars"] for row in table.to_pylist()}
    assert len(got) == table.num_rows, "a cell stands in the table twice"
    assert {cell: stars for cell, stars in got.items() if stars} == dict(expected)
    assert sum(got.values()) == keep.sum(), "every row must be in one cell"
    return got


def test_colour_magnitude_counts(made, hipparcos_release):
    keep = made["accepted"].to_numpy()
    colour, magnitude = numbers(made, "colour_B_V_intrinsic"), numbers(made, "absmag_Hp_p50")
    colour_edges, magnitude_edges = edges("-0.5", "2.5", "0.0625"), edges("-6", "16", "0.25")
    assert np.isin(colour[keep], colour_edges).sum() > 500, "the check of edges needs values on edges"
    axes = {"colour": (colour, colour_edges), "absolute_magnitude": (magnitude, magnitude_edges)}
    got = compare_counts(hipparcos_release.table("colour_magnitude_Hp_B_V"), axes, keep)
    # numpy's own histogram, which closes the last bin above where ours is open: no value stands there.
    assert not (colour[keep] == colour_edges[-1]).any() and not (magnitude[keep] == magnitude_edges[-1]).any()
    counts, _, _ = np.histogram2d(colour[keep], magnitude[keep], bins=[colour_edges, magnitude_edges])
    ours = np.zeros_like(counts)
    for (left, right, bright, faint), stars in got.items():
        if None not in (left, right, bright, faint):
            ours[np.searchsorted(colour_edges, left), np.searchsorted(magnitude_edges, bright)] = stars
    np.testing.assert_array_equal(ours, counts)


def test_decimal_edges_and_missing_values(made, hipparcos_release):
    """All rows by direct magnitude: missing colours and magnitudes have cells of their own, 0.150 is on the edge 0.15."""
    colour, magnitude = numbers(made, "colour_B_V_intrinsic"), numbers(made, "absmag_Hp_direct")
    colour_edges = edges("-0.4", "1.9", "0.05")
    assert np.isin(colour, colour_edges).sum() > 1_000
    assert not np.isin(-0.4 + 0.05 * np.arange(47), colour_edges).all(), "the naive edges must differ for this to tell"
    axes = {"colour": (colour, colour_edges), "absolute_magnitude": (magnitude, edges("-8", "16", "0.1"))}
    compare_counts(hipparcos_release.table("fine"), axes, np.ones(made.num_rows, bool))


def test_magnitude_counts(made, hipparcos_release):
    axes = {"magnitude": (numbers(made, "hp_mag"), edges("2", "13", "0.1"))}
    compare_counts(hipparcos_release.table("magnitude_Hp_all"), axes, np.ones(made.num_rows, bool))
    axes = {"absolute_magnitude": (numbers(made, "absmag_Hp_p50"), edges("-6", "14", "0.5"))}
    compare_counts(hipparcos_release.table("absolute_magnitude_Hp"), axes, made["accepted"].to_numpy())


def test_query_table(made, hipparcos_release):
    """The plan's SQL against polars' own expressions."""
    rows = pl.from_arrow(made.select(["components", "modulus_p50", "hp_mag", "b_v", "parallax_over_error"]))
    expected = (
        rows.filter(pl.col("parallax_over_error") > 3)
        .group_by("components")
        .agg(
            pl.len().alias("stars"),
            pl.col("modulus_p50").mean().alias("modulus"),
            pl.col("hp_mag").min().alias("brightest"),
            pl.col("b_v").max().alias("reddest"),
        )
        .sort("components")
    )
    got = pl.from_arrow(hipparcos_release.table("by_components"))
    assert got.columns == expected.columns
    for name in expected.columns:
        # A mean of 10^5 numbers: polars' sum rounds at each step, to a relative 1e-12 at worst here.
        np.testing.assert_allclose(
            got[name], expected[name].to_numpy(), rtol=1e-12 if name == "modulus" else 0, err_msg=name
        )
