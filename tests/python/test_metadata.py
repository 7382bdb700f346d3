"""A release describes itself: units, UCDs, the VOTable header of the IVOA Parquet convention; and any engine reads it.

Standards: VOUnits 1.0 and UCD1+ as astropy checks them; Parquet in the VO (IVOA Note 1.0, 2025): the footer keys
`IVOA.VOTable-Parquet.version` and `IVOA.VOTable-Parquet.content`, the latter a VOTable without data whose FIELDs are the columns.
"""

import io
import warnings

import numpy as np
import polars as pl
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from astropy import units
from astropy.io import votable
from astropy.io.votable.ucd import parse_ucd

import hipparcos
from program import metadata

DATATYPES = {
    pa.bool_(): "boolean",
    pa.int8(): "short",  # VOTable has no signed byte; its unsignedByte cannot hold -1
    pa.int16(): "short",
    pa.int32(): "int",
    pa.uint32(): "long",  # nor an unsigned int
    pa.float32(): "float",
    pa.float64(): "double",
}


@pytest.fixture(scope="module")
def added(hipparcos_release):
    """Fields of the columns that the program computed."""
    return [field for field in hipparcos_release.schema() if field.name not in hipparcos.COLUMNS]


@pytest.fixture(scope="module")
def header(hipparcos_release):
    content = hipparcos_release.footer()["IVOA.VOTable-Parquet.content"]
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        # A title with blanks is a legal name of a table; astropy says that it makes an identifier of it.
        warnings.simplefilter("ignore", votable.exceptions.W03)
        return votable.parse(io.BytesIO(content.encode()), verify="warn").get_first_table()


def test_every_new_column_says_what_it_is(added):
    for field in added:
        said = metadata(field)
        assert {"ucd", "description", "method"} <= said.keys(), f"{field.name} lacks UCD, description or method: {said}"
        assert len(said["description"].split()) >= 3, f"{field.name}: the description says nothing: {said}"


def test_units_are_vounits_of_the_right_kind(added):
    kinds = {
        "zero_point": "mas", "parallax_calibrated": "mas", "parallax_error_calibrated": "mas",
        "distance_p16": "pc", "distance_p50": "pc", "distance_p84": "pc",
        "parallax_over_error": "", "prior_share": "", "verdict": "", "accepted": "",
    }  # fmt: skip
    for field in added:
        unit = metadata(field).get("unit", "")
        parsed = units.Unit(unit, format="vounit")
        expected = units.Unit(kinds.get(field.name, "mag"), format="vounit")
        assert parsed == expected, f"{field.name} has unit {unit!r}"


def test_ucds_are_of_the_controlled_vocabulary(added):
    for field in added:
        parse_ucd(metadata(field)["ucd"], check_controlled_vocabulary=True, has_colon=False)


def test_footer_has_the_version_of_the_convention(hipparcos_release):
    assert hipparcos_release.footer()["IVOA.VOTable-Parquet.version"] == "1.0"


def test_votable_fields_match_the_columns(header, hipparcos_release):
    schema = hipparcos_release.schema()
    assert [field.name for field in header.fields] == schema.names
    for field, column in zip(header.fields, schema):
        said = metadata(column)
        assert str(field.unit or "") == str(units.Unit(said.get("unit", ""), format="vounit")), column.name
        assert (field.ucd or "") == said.get("ucd", ""), column.name
        assert field.datatype == DATATYPES[column.type], column.name
        assert " ".join((field.description or "").split()) == " ".join(said.get("description", "").split()), column.name


def test_votable_header_has_no_rows(header):
    assert header.nrows in (0, None) or len(header.array) == 0


def test_polars_reads_the_same(hipparcos_release):
    """Another reader of Parquet, written from scratch, sees the same numbers, nulls and types."""
    arrow = hipparcos_release.catalogue()
    other = pl.read_parquet(hipparcos_release.parts)
    assert other.columns == arrow.column_names
    for name in arrow.column_names:
        assert other[name].null_count() == arrow[name].null_count, name
        assert other[name].to_arrow().cast(arrow.schema.field(name).type).equals(arrow[name].combine_chunks()), name


def test_row_groups_have_sound_statistics(hipparcos_release):
    """Readers skip row groups by min and max: where they are given for numbers they must bound the values."""
    for part in hipparcos_release.parts:
        file = pq.ParquetFile(part)
        for group in range(file.num_row_groups):
            rows = file.read_row_group(group)
            for k in range(file.metadata.num_columns):
                chunk = file.metadata.row_group(group).column(k)
                statistics = chunk.statistics
                if statistics is None or not statistics.has_min_max:
                    continue
                values = rows[chunk.path_in_schema].drop_null().to_numpy()
                assert statistics.min <= np.min(values) and statistics.max >= np.max(values), (
                    part,
                    group,
                    chunk.path_in_schema,
                )


def test_tables_are_also_csv(hipparcos_release):
    """Each table stands as Parquet and as CSV with the same names, rows and values."""
    tables = sorted((hipparcos_release.folder / "tables").glob("*.parquet"))
    assert tables
    for path in tables:
        parquet, text = pl.read_parquet(path), pl.read_csv(path.with_suffix(".csv"), infer_schema_length=None)
        assert text.columns == parquet.columns, path.name
        assert text.height == parquet.height, path.name
        for name in parquet.columns:
            if parquet[name].dtype.is_numeric():
                np.testing.assert_array_equal(
                    text[name].cast(pl.Float64), parquet[name].cast(pl.Float64), f"{path.name} {name}"
                )
            else:
                assert text[name].cast(pl.String).to_list() == parquet[name].cast(pl.String).to_list(), (
                    path.name,
                    name,
                )
