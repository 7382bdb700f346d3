"""Catalogues of other writers (pyarrow and polars) pass through a build unchanged.

Every page version, encoding and codec that these two write, every width of integer and float, and the types that a
kernel never looks at. Each file is built twice: with a cut that flags (column chunks may be copied as they are) and with
one that drops rows (they must be decoded and written again).
"""

import datetime
import decimal

import numpy as np
import polars as pl
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

import program

ROWS = 2_600
GROUP = 1_100

PLAN = """
[release]
title = "Writers"
catalogue = {catalogue}

[columns]
id = "source"
ra = "ra"
dec = "dec"
parallax = "parallax"
parallax_error = "parallax_error"

[bands.G]
magnitude = "g_mag"
magnitude_error = "g_mag_error"

[[cuts]]
name = "bright"
keep = "g_mag < 15"
effect = "{effect}"

[distance]
prior = "exponentially-decreasing-density"
length_kpc = 1.35
"""


def with_nulls(values, random, kind=None):
    gone = random.random(len(values)) < 0.1
    return pa.array([None if g else v for v, g in zip(values, gone)], kind)


def stars() -> dict[str, pa.Array]:
    """The columns that the plan reads, in mixed types, and those it does not, one of each flat type."""
    random = np.random.default_rng(1859)
    words = random.choice(["disc", "halo", "Größe", "", "a much longer word than the others have"], ROWS)
    day = datetime.date(1989, 8, 8)

    def whole(kind):
        limits = np.iinfo(kind)
        return pa.array(random.integers(limits.min, limits.max, ROWS, dtype=kind, endpoint=True))

    def scaled(digits, scale):
        limit = 10 ** min(digits, 18)
        return [decimal.Decimal(int(random.integers(1 - limit, limit))).scaleb(-scale) for _ in range(ROWS)]

    return {
        "source": pa.array(np.arange(ROWS, dtype=np.int64) * 7_919 + 4_294_967_296),
        "ra": pa.array(random.uniform(0, 360, ROWS)),
        "dec": pa.array(random.uniform(-90, 90, ROWS)),
        "parallax": with_nulls(random.normal(2, 3, ROWS), random, pa.float64()),
        "parallax_error": pa.array(random.uniform(0.05, 1.5, ROWS).astype(np.float32)),
        "g_mag": with_nulls(random.uniform(5, 21, ROWS).round(3), random, pa.float32()),
        "g_mag_error": pa.array(random.uniform(0.001, 0.1, ROWS)),
        "i8": whole(np.int8), "i16": whole(np.int16), "i32": whole(np.int32), "i64": whole(np.int64),
        "u8": whole(np.uint8), "u16": whole(np.uint16), "u32": whole(np.uint32), "u64": whole(np.uint64),
        "i32_null": with_nulls(random.integers(-5, 5, ROWS).tolist(), random, pa.int32()),
        "f32": with_nulls(random.normal(size=ROWS), random, pa.float32()),
        "f64_odd": pa.array(random.choice([0.0, -0.0, np.nan, np.inf, -np.inf, 5e-324, 1.5], ROWS)),
        "flag": with_nulls((random.random(ROWS) < 0.5).tolist(), random, pa.bool_()),
        "word": with_nulls(words.tolist(), random, pa.string()),
        "sorted_word": pa.array([f"field {i:07d}" for i in range(ROWS)]),
        "bytes": with_nulls([bytes(w, "utf-8") for w in words], random, pa.binary()),
        "date": with_nulls([day + datetime.timedelta(int(d)) for d in random.integers(-9000, 9000, ROWS)], random, pa.date32()),
        "time": pa.array(random.integers(0, 2**50, ROWS), pa.timestamp("us")),
        "time_utc": pa.array(random.integers(0, 2**50, ROWS), pa.timestamp("us", "UTC")),
        "d9_2": with_nulls(scaled(9, 2), random, pa.decimal128(9, 2)),
        "d18_4": with_nulls(scaled(18, 4), random, pa.decimal128(18, 4)),
        "d38_10": with_nulls(scaled(38, 10), random, pa.decimal128(38, 10)),
        "empty": pa.nulls(ROWS, pa.float64()),
    }  # fmt: skip


def table() -> pa.Table:
    columns = stars()
    fields = [
        pa.field(
            name,
            array.type,
            nullable=array.null_count > 0 or name == "flag",
            metadata={"description": f"Column {name}."},
        )
        for name, array in columns.items()
    ]
    return pa.table(list(columns.values()), schema=pa.schema(fields))


# Types that only one of the two writers keeps.
EXTRA = {
    "f16": lambda r: pa.array(r.normal(size=ROWS).astype(np.float16)),
    "fixed": lambda r: pa.array([r.bytes(6) for _ in range(ROWS)], pa.binary(6)),
    "coded": lambda r: pa.array(r.choice(["O", "B", "A", "F", "G", "K", "M"], ROWS).tolist()).dictionary_encode(),
    "large": lambda r: pa.array(r.choice(["x", "yy"], ROWS).tolist(), pa.large_string()),
    "clock": lambda r: pa.array(r.integers(0, 86_400_000_000, ROWS), pa.time64("us")),
    "seconds": lambda r: pa.array(r.integers(0, 10**9, ROWS), pa.timestamp("ms")),
}


def extended() -> pa.Table:
    random = np.random.default_rng(1912)
    made = table()
    for name, make in EXTRA.items():
        made = made.append_column(name, make(random))
    return made


def arrow(path, made=None, **options):
    pq.write_table(table() if made is None else made, path, row_group_size=GROUP, **options)


def delta_encodings():
    encodings = {
        "word": "DELTA_LENGTH_BYTE_ARRAY",
        "sorted_word": "DELTA_BYTE_ARRAY",
        "bytes": "DELTA_LENGTH_BYTE_ARRAY",
    }
    encodings |= {
        name: "DELTA_BINARY_PACKED"
        for name in ("source", "i8", "i16", "i32", "i64", "u8", "u16", "u32", "u64", "i32_null", "date", "time")
    }
    return encodings


def split_encodings():
    names = (
        "ra",
        "dec",
        "parallax",
        "parallax_error",
        "g_mag",
        "g_mag_error",
        "f32",
        "f64_odd",
        "i32",
        "i64",
        "empty",
        "d38_10",
    )
    return {name: "BYTE_STREAM_SPLIT" for name in names}


def from_polars(path, **options):
    # pl.from_arrow forgets which columns are never null; polars writes all as nullable.
    pl.from_arrow(table()).write_parquet(path, row_group_size=GROUP, **options)


WRITERS = {
    "arrow-v1-snappy-dictionary": lambda p: arrow(p, compression="snappy", data_page_version="1.0"),
    "arrow-v2-zstd-dictionary": lambda p: arrow(p, compression="zstd", data_page_version="2.0"),
    "arrow-v1-plain-uncompressed": lambda p: arrow(p, compression="none", use_dictionary=False),
    "arrow-v2-plain-gzip": lambda p: arrow(p, compression="gzip", use_dictionary=False, data_page_version="2.0"),
    "arrow-v1-lz4": lambda p: arrow(p, compression="lz4"),
    "arrow-v2-brotli": lambda p: arrow(p, compression="brotli", data_page_version="2.0"),
    "arrow-v1-delta": lambda p: arrow(p, compression="zstd", use_dictionary=False, column_encoding=delta_encodings()),
    "arrow-v2-delta": lambda p: arrow(p, use_dictionary=False, column_encoding=delta_encodings(), data_page_version="2.0"),
    "arrow-v1-split": lambda p: arrow(p, compression="zstd", use_dictionary=False, column_encoding=split_encodings()),
    "arrow-v2-split": lambda p: arrow(p, use_dictionary=False, column_encoding=split_encodings(), data_page_version="2.0"),
    "arrow-small-pages": lambda p: arrow(p, data_page_size=512, dictionary_pagesize_limit=1024, write_batch_size=64),
    "arrow-page-index": lambda p: arrow(p, write_page_index=True, data_page_size=2048, sorting_columns=None),
    "arrow-page-checksum": lambda p: arrow(p, write_page_checksum=True),
    "arrow-no-statistics": lambda p: arrow(p, write_statistics=False),
    "arrow-no-arrow-schema": lambda p: arrow(p, store_schema=False),
    "arrow-version-1.0": lambda p: arrow(p, version="1.0", coerce_timestamps="ms", allow_truncated_timestamps=True),
    "arrow-decimals-as-integers": lambda p: arrow(p, store_decimal_as_integer=True),
    "arrow-more-types": lambda p: arrow(p, made=extended()),
    "arrow-mixed-codecs": lambda p: arrow(p, compression={n: ["zstd", "snappy", "none", "lz4"][i % 4] for i, n in enumerate(table().column_names)}),
    "polars-zstd": lambda p: from_polars(p, compression="zstd"),
    "polars-snappy-statistics": lambda p: from_polars(p, compression="snappy", statistics="full"),
    "polars-lz4-no-statistics": lambda p: from_polars(p, compression="lz4", statistics=False),
    "polars-gzip-small-pages": lambda p: from_polars(p, compression="gzip", data_page_size=2048),
    "polars-streaming": lambda p: pl.from_arrow(table()).lazy().sink_parquet(p, compression="zstd", row_group_size=GROUP),
}  # fmt: skip


def plan(folder, catalogue, effect="flag"):
    path = folder / f"{effect}.toml"
    path.write_text(PLAN.format(catalogue=catalogue, effect=effect))
    return path


def leaf_types(path):
    """What each leaf column is on disk, below what a reader makes of it."""
    schema = pq.ParquetFile(path).schema
    leaves = [schema.column(k) for k in range(len(schema))]
    return {
        leaf.path: (leaf.physical_type, str(leaf.logical_type), leaf.max_definition_level, leaf.length)
        for leaf in leaves
    }


def same(before: pa.Table, after: pa.Table):
    for field in before.schema:
        found = after.schema.field(field.name)
        assert found.type == field.type, f"{field.name}: {field.type} became {found.type}"
        assert found.metadata == field.metadata or not field.metadata, f"{field.name}: field metadata changed"
        left, right = before[field.name].combine_chunks(), after[field.name].combine_chunks()
        if pa.types.is_floating(field.type):  # NaN is not equal to itself; -0.0 and the payload of NaN must survive too
            assert left.is_null().equals(right.is_null()), field.name
            bits = {16: np.uint16, 32: np.uint32, 64: np.uint64}[field.type.bit_width]
            left, right = (x.drop_null().to_numpy().view(bits) for x in (left, right))
            assert np.array_equal(left, right), field.name
        else:
            assert left.equals(right), field.name


@pytest.mark.parametrize("writer", list(WRITERS))
def test_columns_pass_through_a_build_that_flags(writer, tmp_path):
    source = tmp_path / "stars.parquet"
    WRITERS[writer](source)
    before = pq.read_table(source)
    release = program.build(plan(tmp_path, ["stars.parquet"]), tmp_path / "release")
    after = release.catalogue()
    assert after.num_rows == ROWS
    assert after.column_names[: before.num_columns] == before.column_names
    same(before, after)
    known, written = leaf_types(source), leaf_types(release.parts[0])
    assert {path: written[path] for path in known} == known


@pytest.mark.parametrize("writer", list(WRITERS))
def test_columns_pass_through_a_build_that_drops(writer, tmp_path):
    source = tmp_path / "stars.parquet"
    WRITERS[writer](source)
    before = pq.read_table(source)
    dropped = program.build(plan(tmp_path, ["stars.parquet"], "drop"), tmp_path / "dropped").catalogue()
    keep = pa.array([g is not None and g < 15 for g in before["g_mag"].to_pylist()])
    assert 0 < sum(keep.to_pylist()) < ROWS
    same(before.filter(keep), dropped)
    # What was computed must not depend on the rows that went away.
    flagged = program.build(plan(tmp_path, ["stars.parquet"]), tmp_path / "flagged").catalogue()
    same(flagged.filter(keep).drop_columns(["verdict", "accepted"]), dropped)


def test_flagging_copies_column_chunks_as_they_are(tmp_path):
    """A build that drops nothing leaves codec, encodings and compressed size of each chunk as the catalogue has them."""
    source = tmp_path / "stars.parquet"
    WRITERS["arrow-mixed-codecs"](source)
    release = program.build(plan(tmp_path, ["stars.parquet"]), tmp_path / "release")
    before = pq.read_metadata(source)
    written = [(part, group) for part in map(pq.read_metadata, release.parts) for group in range(part.num_row_groups)]
    assert len(written) == before.num_row_groups
    for group, (part, own) in enumerate(written):
        for k in range(before.num_columns):
            old, new = before.row_group(group).column(k), part.row_group(own).column(k)
            assert set(new.encodings) == set(old.encodings), (group, old.path_in_schema)
            for what in ("path_in_schema", "compression", "total_compressed_size", "num_values"):
                assert getattr(new, what) == getattr(old, what), (group, old.path_in_schema, what)


def test_lists_and_structs_pass_through_or_are_refused_with_a_sentence(tmp_path):
    random = np.random.default_rng(1925)
    lists = [None if i % 11 == 0 else random.integers(0, 9, i % 5).tolist() for i in range(ROWS)]
    made = table().append_column("epochs", pa.array(lists, pa.list_(pa.int32())))
    pairs = [None if i % 13 == 0 else {"x": i, "y": None if i % 3 else str(i)} for i in range(ROWS)]
    made = made.append_column("pair", pa.array(pairs, pa.struct([("x", pa.int64()), ("y", pa.string())])))
    arrow(tmp_path / "stars.parquet", made=made)
    done = program.run("build", plan(tmp_path, ["stars.parquet"]), "--output", tmp_path / "release", "--threads", 2)
    if done.returncode == 0:
        same(pq.read_table(tmp_path / "stars.parquet"), program.Release(tmp_path / "release").catalogue())
    else:
        assert done.returncode in (1, 2), program.told(done)
        assert "stars.parquet" in done.stderr and ("epochs" in done.stderr or "pair" in done.stderr), program.told(done)
        assert not (tmp_path / "release").exists()


def test_files_of_different_writers_make_one_release(tmp_path):
    """Same columns and types, other codecs and pages: rows in the order of the file names."""
    made = table()
    whole = made.cast(pa.schema([field.with_nullable(True) for field in made.schema]))
    (tmp_path / "catalogue").mkdir()
    arrow(tmp_path / "catalogue" / "b.parquet", made=whole.slice(1000), compression="zstd", data_page_version="2.0")
    arrow(tmp_path / "catalogue" / "a.parquet", made=whole.slice(0, 1000), compression="snappy", use_dictionary=False)
    release = program.build(plan(tmp_path, ["catalogue/*.parquet"]), tmp_path / "release")
    same(whole, release.catalogue())


def changed(name, make):
    made = table()
    at = made.column_names.index(name)
    return made.set_column(at, name, make(made[name]))


DIFFERENT = {
    "another type": ("i32", lambda: changed("i32", lambda c: c.cast(pa.int64()))),
    "text for a number": ("g_mag_error", lambda: changed("g_mag_error", lambda c: c.cast(pa.string()))),
    "another scale": ("d9_2", lambda: changed("d9_2", lambda c: c.cast(pa.decimal128(10, 3)))),
    "another time zone kind": ("time", lambda: changed("time", lambda c: c.cast(pa.timestamp("ms"), safe=False))),
    "a column less": ("flag", lambda: table().drop_columns(["flag"])),
    "a column more": ("surplus", lambda: table().append_column("surplus", pa.array(np.arange(ROWS)))),
}


@pytest.mark.parametrize("difference", list(DIFFERENT))
def test_files_that_differ_are_refused_by_name(difference, tmp_path):
    column, make = DIFFERENT[difference]
    arrow(tmp_path / "first.parquet")
    arrow(tmp_path / "second.parquet", made=make())
    catalogue = ["first.parquet", "second.parquet"]
    done = program.run("build", plan(tmp_path, catalogue), "--output", tmp_path / "release", "--threads", 2)
    assert done.returncode in (1, 2), program.told(done)
    for name in (*catalogue, column):
        assert name in done.stderr, f"the message does not name {name}\n{program.told(done)}"
    assert "panicked" not in done.stderr, program.told(done)
    assert not list((tmp_path / "release").rglob("*.parquet")), "parts were written all the same"
