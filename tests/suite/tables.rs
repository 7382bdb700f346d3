//! Tables: SQL against polars' own answers, counts against counting, and the same bits for any split of the rows.

use std::collections::BTreeMap;
use std::sync::Arc;

use arrow::array::*;
use arrow::datatypes::{DataType, Field, Float64Type, Schema, UInt64Type};
use polars::prelude::IntoLazy;
use proptest::prelude::*;
use tenparsec::columnar::bridge;
use tenparsec::plan::tables::*;
use tenparsec::tables::{CutRow, Names, Table, Tables, Tally, csv, parquet};

fn names() -> Names {
    Names {
        apparent: BTreeMap::from([("G".to_string(), "g_mag".to_string()), ("R".to_string(), "r_mag".to_string())]),
        colours: vec!["B_R".to_string()],
    }
}

/// Rows of a release, from a small generator of our own.
fn release(rows: usize) -> RecordBatch {
    let mut state = 88_172_645_463_325_252_u64;
    let mut next = move || {
        state ^= state << 13;
        state ^= state >> 7;
        state ^= state << 17;
        (state >> 11) as f64 / (1_u64 << 53) as f64
    };
    let mut column = |share: f64, from: f64, to: f64| -> Vec<Option<f64>> {
        (0..rows).map(|_| (next() > share).then(|| from + (to - from) * next())).collect()
    };
    let narrow =
        |v: Vec<Option<f64>>| Arc::new(v.iter().map(|x| x.map(|x| x as f32)).collect::<Float32Array>()) as ArrayRef;
    let colour = narrow(column(0.1, -1.5, 5.5));
    let absolute = narrow(column(0.05, -6.0, 18.0));
    let direct = narrow(column(0.3, -6.0, 18.0));
    let modulus = narrow(column(0.05, 0.0, 20.0));
    let g = Arc::new(column(0.02, 3.0, 21.0).into_iter().collect::<Float64Array>()) as ArrayRef;
    let wild: Float64Array = column(0.1, -1.0, 1.0)
        .into_iter()
        .enumerate()
        .map(|(i, x)| x.map(|x| x * 10_f64.powi(i as i32 % 31 - 15)))
        .collect();
    let field: StringArray =
        column(0.05, 0.0, 7.0).into_iter().map(|x| x.map(|x| format!("field {}", x as i64))).collect();
    let healpix: Int32Array = column(0.0, -40.0, 40.0).into_iter().map(|x| x.map(|x| x as i32)).collect();
    let id: UInt64Array = (0..rows as u64).map(|i| u64::MAX - i * 7919).collect();
    let verdict: UInt32Array =
        column(0.0, 0.0, 8.0).into_iter().map(|x| x.map_or(0, |x| (x as u32).saturating_sub(4))).collect();
    let accepted: BooleanArray = verdict.values().iter().map(|v| Some(*v == 0)).collect();
    RecordBatch::try_from_iter_with_nullable([
        ("source", Arc::new(id) as ArrayRef, true),
        ("g_mag", g, true),
        ("r_mag", absolute.clone(), true),
        ("field", Arc::new(field), true),
        ("cell", Arc::new(healpix), true),
        ("wild", Arc::new(wild), true),
        ("colour_B_R", direct.clone(), true),
        ("colour_B_R_intrinsic", colour, true),
        ("modulus_p50", modulus, true),
        ("absmag_G_p50", absolute, true),
        ("absmag_G_direct", direct, true),
        ("verdict", Arc::new(verdict), false),
        ("accepted", Arc::new(accepted), false),
    ])
    .unwrap()
}

fn query(sql: &str) -> TablesSettings {
    TablesSettings { query: vec![QuerySettings { name: "q".into(), sql: sql.into() }], ..Default::default() }
}

fn add_up(tables: &Tables, batches: &[RecordBatch]) -> Tally {
    let mut tally = tables.start();
    batches.iter().for_each(|b| tally.add(tables, b).unwrap());
    tally
}

fn answer(sql: &str, rows: &RecordBatch) -> RecordBatch {
    let tables = Tables::new(&query(sql), &names(), &rows.schema()).unwrap_or_else(|e| panic!("{sql}: {e}"));
    let tally = add_up(&tables, std::slice::from_ref(rows));
    tables.finish(&tally, &[]).unwrap_or_else(|e| panic!("{sql}: {e}")).pop().unwrap().batch
}

const QUERIES: [&str; 22] = [
    "SELECT field, COUNT(*) AS stars, AVG(modulus_p50) AS modulus FROM release WHERE accepted GROUP BY field ORDER BY field",
    "SELECT COUNT(*) AS n, COUNT(modulus_p50) AS m, SUM(cell) AS s, MIN(g_mag) AS lo, MAX(g_mag) AS hi FROM release",
    "SELECT cell % 5 AS c, SUM(g_mag) AS s, AVG(cell) AS a FROM release WHERE cell >= 0 GROUP BY cell % 5 ORDER BY c",
    "SELECT FLOOR(g_mag) AS bin, COUNT(*) AS n FROM release GROUP BY FLOOR(g_mag) ORDER BY bin",
    "SELECT FLOOR(g_mag / 2) * 2 AS bin, COUNT(*) AS n FROM release GROUP BY bin ORDER BY bin",
    "SELECT field, accepted, COUNT(*) AS n FROM release GROUP BY field, accepted ORDER BY field, accepted",
    "SELECT field, COUNT(*) AS n FROM release GROUP BY 1 ORDER BY 2 DESC, 1 LIMIT 3",
    "SELECT field, COUNT(*) AS n FROM release GROUP BY field ORDER BY n DESC, field LIMIT 2 OFFSET 1",
    "SELECT field, STDDEV(g_mag) AS sd, VARIANCE(g_mag) AS v FROM release GROUP BY field ORDER BY field",
    "SELECT field, MIN(field) AS a, MAX(field) AS b, MIN(source) AS i FROM release GROUP BY field ORDER BY field",
    "SELECT cell, AVG(g_mag) - AVG(cell) / 7 AS d FROM release WHERE cell > 0 GROUP BY cell HAVING COUNT(*) > 70 ORDER BY cell",
    "SELECT field, SUM(g_mag) / COUNT(g_mag) AS mean FROM release GROUP BY field ORDER BY field",
    "SELECT AVG(CASE WHEN accepted THEN 1 ELSE 0 END) AS share FROM release",
    "SELECT field, COUNT(*) AS n FROM release WHERE field LIKE 'field 1%' OR modulus_p50 > 15 GROUP BY field ORDER BY field",
    "SELECT verdict, COUNT(*) AS n FROM release GROUP BY verdict ORDER BY verdict DESC",
    "SELECT UPPER(field) AS f, COUNT(*) AS n FROM release WHERE field IS NOT NULL GROUP BY UPPER(field) ORDER BY f",
    "SELECT field AS f, SUM(absmag_G_p50) AS s FROM release r GROUP BY field ORDER BY field DESC",
    "SELECT COUNT(*) AS n, AVG(g_mag) AS a FROM release WHERE g_mag > 100",
    "SELECT field, COUNT(*) AS n FROM release WHERE g_mag > 100 GROUP BY field ORDER BY field",
    "SELECT field, MAX(g_mag - modulus_p50) AS m FROM release GROUP BY field ORDER BY m",
    "SELECT COALESCE(field, 'none') AS f, COUNT(*) AS n FROM release GROUP BY COALESCE(field, 'none') ORDER BY f",
    "SELECT field FROM release GROUP BY field HAVING AVG(modulus_p50) > 9 ORDER BY field",
];

#[test]
fn queries_agree_with_polars_on_the_whole_frame() {
    let rows = release(5000);
    let columns: Vec<String> = rows.schema().fields().iter().map(|f| f.name().clone()).collect();
    for sql in QUERIES {
        let mut context = polars::sql::SQLContext::new();
        context.register("release", bridge::frame(&rows, &columns).unwrap().lazy());
        let theirs = context.execute(sql).and_then(|l| l.collect()).unwrap_or_else(|e| panic!("{sql}: {e}"));
        let theirs = bridge::batch(&theirs).unwrap();
        let ours = answer(sql, &rows);
        assert_eq!(ours.num_rows(), theirs.num_rows(), "{sql}");
        assert_eq!(ours.num_columns(), theirs.num_columns(), "{sql}");
        for (i, field) in ours.schema().fields().iter().enumerate() {
            assert_eq!(field.name(), theirs.schema().field(i).name(), "{sql}");
            let (a, b) = (ours.column(i), theirs.column(i));
            if matches!(b.data_type(), DataType::Utf8 | DataType::Boolean) {
                assert_eq!(a, b, "{sql}");
                continue;
            }
            let wide = |x: &ArrayRef| {
                arrow::compute::cast(x, &DataType::Float64).unwrap().as_primitive::<Float64Type>().clone()
            };
            let narrow = matches!(b.data_type(), DataType::Float32);
            for (x, y) in wide(a).iter().zip(wide(b).iter()) {
                match (x, y) {
                    // polars adds in doubles and rounds on the way (Float32 sums in single precision).
                    (Some(x), Some(y)) => {
                        let tolerance = if narrow { 2e-5 } else { 1e-12 };
                        assert!((x - y).abs() <= tolerance * y.abs(), "{sql}: {} {x} {y}", field.name());
                    }
                    // A sum of nothing is null here, as SQL has it.
                    (x, y) => assert_eq!(x, y, "{sql}: {}", field.name()),
                }
            }
        }
    }
}

#[test]
fn what_polars_cannot_say() {
    let rows = release(4000);
    let whole =
        answer("SELECT COUNT(*) FILTER (WHERE accepted) AS a, COUNT(*) AS n, SUM(accepted) AS s FROM release", &rows);
    let number = |i: usize| whole.column(i).as_primitive::<arrow::datatypes::Int64Type>().value(0);
    let accepted = rows.column_by_name("accepted").unwrap().as_boolean().true_count() as i64;
    assert_eq!((number(0), number(1), number(2)), (accepted, 4000, accepted));
    // Population and sample variance differ by (n - 1) / n.
    let v = answer(
        "SELECT VAR_POP(g_mag) AS p, VAR_SAMP(g_mag) AS s, STDDEV_POP(g_mag) AS d, COUNT(g_mag) AS n FROM release",
        &rows,
    );
    let real = |i: usize| v.column(i).as_primitive::<Float64Type>().value(0);
    let n = v.column(3).as_primitive::<arrow::datatypes::Int64Type>().value(0) as f64;
    assert!((real(0) / real(1) - (n - 1.0) / n).abs() < 1e-15);
    assert_eq!(real(2), real(0).sqrt());
    // A key in HAVING (polars 0.55 fails on it).
    let having =
        answer("SELECT cell, COUNT(*) AS n FROM release GROUP BY cell HAVING COUNT(*) > 40 AND cell > 0", &rows);
    let cells = rows.column_by_name("cell").unwrap().as_primitive::<arrow::datatypes::Int32Type>();
    let expected: Vec<i64> =
        (1..=40).filter(|c| cells.values().iter().filter(|x| **x == *c).count() > 40).map(i64::from).collect();
    assert_eq!(having.column(0).as_primitive::<arrow::datatypes::Int64Type>().values().to_vec(), expected);
    assert!(!expected.is_empty() && expected.len() < 40);
    // Without ORDER BY: sorted by the keys, nulls last.
    let sorted = answer("SELECT field, COUNT(*) AS n FROM release GROUP BY field", &rows);
    let fields = sorted.column(0).as_string::<i32>();
    assert!(fields.is_null(fields.len() - 1));
    assert!((1..fields.len() - 1).all(|i| fields.value(i - 1) < fields.value(i)));
    // An empty release still answers, with one row where there is no GROUP BY.
    let empty = answer("SELECT COUNT(*) AS n, SUM(cell) AS s, AVG(g_mag) AS a FROM release", &rows.slice(0, 0));
    assert_eq!(empty.num_rows(), 1);
    assert_eq!(empty.column(0).as_primitive::<arrow::datatypes::Int64Type>().value(0), 0);
    assert!(empty.column(1).is_null(0) && empty.column(2).is_null(0));
}

fn every_table() -> TablesSettings {
    let bins = |from, to, step| BinSettings { from, to, step };
    TablesSettings {
        colour_magnitude: vec![ColourMagnitudeSettings {
            name: None,
            colour: "B_R".into(),
            band: "G".into(),
            colour_bins: bins(-1.0, 5.0, 0.05),
            magnitude_bins: bins(-5.0, 17.0, 0.1),
            absolute: Absolute::Median,
            rows: Rows::Accepted,
            intrinsic: true,
        }],
        magnitude: vec![MagnitudeSettings { name: None, band: "G".into(), bins: bins(5.0, 20.0, 0.5), rows: Rows::All }],
        absolute_magnitude: vec![AbsoluteMagnitudeSettings {
            name: None,
            band: "G".into(),
            bins: bins(-5.0, 17.0, 1.0),
            absolute: Absolute::Direct,
            rows: Rows::Accepted,
        }],
        query: [
            "SELECT field, SUM(wild) AS s, AVG(wild) AS a, STDDEV(wild) AS d, MIN(wild) AS lo, MAX(wild) AS hi FROM release GROUP BY field",
            "SELECT cell, accepted, SUM(modulus_p50) AS s, COUNT(*) AS n, MAX(field) AS f FROM release GROUP BY cell, accepted",
            "SELECT SUM(wild * g_mag) AS s, SUM(cell) AS c FROM release WHERE accepted",
        ]
        .iter()
        .enumerate()
        .map(|(i, sql)| QuerySettings { name: format!("q{i}"), sql: (*sql).into() })
        .collect(),
    }
}

fn cut_row() -> CutRow {
    CutRow {
        cut: "a".into(),
        effect: "flag".into(),
        keep: "x, \"y\" > 5".into(),
        judged: 9,
        fails: 3,
        ..Default::default()
    }
}

fn bytes(tables: &Tables, tally: &Tally) -> Vec<(String, Vec<u8>, Vec<u8>)> {
    let finished = tables.finish(tally, &[cut_row()]).unwrap();
    finished.iter().map(|t| (t.name.clone(), parquet(t).unwrap(), csv(t).unwrap())).collect()
}

proptest! {
    #![proptest_config(ProptestConfig::with_cases(12))]
    #[test]
    fn no_split_changes_a_bit(cuts in prop::collection::vec(0_usize..700, 0..12), backwards in any::<bool>()) {
        let rows = release(700);
        let tables = Tables::new(&every_table(), &names(), &rows.schema()).unwrap();
        let expected = bytes(&tables, &add_up(&tables, std::slice::from_ref(&rows)));

        let mut ends = cuts;
        ends.extend([0, 700]);
        ends.sort_unstable();
        let pieces: Vec<RecordBatch> = ends.windows(2).map(|w| rows.slice(w[0], w[1] - w[0])).collect();
        prop_assert_eq!(&bytes(&tables, &add_up(&tables, &pieces)), &expected, "batches of one tally");

        // One tally a piece, through the ledger's text, merged in some order.
        let mut parts: Vec<Tally> = pieces.iter().map(|p| {
            let tally = add_up(&tables, std::slice::from_ref(p));
            serde_json::from_str(&serde_json::to_string(&tally).unwrap()).unwrap()
        }).collect();
        if backwards { parts.reverse() }
        let mut merged = tables.start();
        parts.iter().for_each(|p| merged.merge(p).unwrap());
        prop_assert_eq!(&bytes(&tables, &merged), &expected, "merged tallies");
        let shuffled: Vec<RecordBatch> = pieces.into_iter().rev().collect();
        prop_assert_eq!(&bytes(&tables, &add_up(&tables, &shuffled)), &expected, "rows in another order");
    }
}

fn find<'a>(tables: &'a [Table], name: &str) -> &'a RecordBatch {
    &tables.iter().find(|t| t.name == name).unwrap().batch
}

#[test]
fn counts_agree_with_counting() {
    let rows = release(20_000);
    let tables = Tables::new(&every_table(), &names(), &rows.schema()).unwrap();
    assert_eq!(
        tables.names(),
        ["cut_counts", "colour_magnitude_G_B_R", "magnitude_G_all", "absolute_magnitude_G_direct", "q0", "q1", "q2"]
    );
    let finished = tables.finish(&add_up(&tables, std::slice::from_ref(&rows)), &[cut_row()]).unwrap();
    let stars = |batch: &RecordBatch| batch.column_by_name("stars").unwrap().as_primitive::<UInt64Type>().clone();
    let edges =
        |batch: &RecordBatch, name: &str| batch.column_by_name(name).unwrap().as_primitive::<Float64Type>().clone();
    let accepted = rows.column_by_name("accepted").unwrap().as_boolean();

    // Every row of the catalogue is in one cell: the counts add up.
    let grid = find(&finished, "colour_magnitude_G_B_R");
    assert_eq!(stars(grid).values().iter().sum::<u64>(), accepted.true_count() as u64);
    let single = find(&finished, "magnitude_G_all");
    assert_eq!(stars(single).values().iter().sum::<u64>(), 20_000);
    assert_eq!(single.num_rows(), 30 + 3);

    // Each cell, counted again by its own edges.
    let colours = rows.column_by_name("colour_B_R_intrinsic").unwrap().as_primitive::<arrow::datatypes::Float32Type>();
    let magnitudes = rows.column_by_name("absmag_G_p50").unwrap().as_primitive::<arrow::datatypes::Float32Type>();
    let inside = |x: Option<f32>, lo: Option<f64>, hi: Option<f64>| match x {
        None => lo.is_none() && hi.is_none(),
        Some(x) => {
            (lo.is_some() || hi.is_some()) && lo.is_none_or(|lo| x >= lo as f32) && hi.is_none_or(|hi| x < hi as f32)
        }
    };
    let (cf, ct) = (edges(grid, "colour_from"), edges(grid, "colour_to"));
    let (mf, mt) = (edges(grid, "absolute_magnitude_from"), edges(grid, "absolute_magnitude_to"));
    let at = |a: &Float64Array, i: usize| a.is_valid(i).then(|| a.value(i));
    let value = |a: &Float32Array, i: usize| a.is_valid(i).then(|| a.value(i));
    for cell in (0..grid.num_rows()).step_by(7).chain([grid.num_rows() - 1]) {
        let expected = (0..rows.num_rows())
            .filter(|row| {
                accepted.value(*row)
                    && inside(value(colours, *row), at(&cf, cell), at(&ct, cell))
                    && inside(value(magnitudes, *row), at(&mf, cell), at(&mt, cell))
            })
            .count() as u64;
        assert_eq!(stars(grid).value(cell), expected, "cell {cell}");
        assert!(expected > 0, "empty cells are left out");
    }
}

#[test]
fn csv_reads_back_to_the_last_bit() {
    let rows = release(300);
    let tables = Tables::new(&every_table(), &names(), &rows.schema()).unwrap();
    let finished = tables.finish(&add_up(&tables, std::slice::from_ref(&rows)), &[cut_row()]).unwrap();
    let text = String::from_utf8(csv(&finished[0]).unwrap()).unwrap();
    assert_eq!(
        text,
        "cut,effect,keep,judged,fails,fails_first,fails_only,missing\na,flag,\"x, \"\"y\"\" > 5\",9,3,0,0,0\n"
    );
    let q0 = finished.iter().find(|t| t.name == "q0").unwrap();
    let bytes = csv(q0).unwrap();
    let mut reader = ::csv::Reader::from_reader(bytes.as_slice());
    for (row, record) in reader.records().enumerate() {
        let record = record.unwrap();
        for column in 1..q0.batch.num_columns() {
            let stored = q0.batch.column(column).as_primitive::<Float64Type>();
            assert_eq!(record[column].parse::<f64>().unwrap().to_bits(), stored.value(row).to_bits());
        }
    }
}

#[test]
fn queries_that_cannot_be_answered_say_so() {
    let schema = release(1).schema();
    for (sql, says) in [
        ("SELECT * FROM release", "selects whole rows"),
        ("SELECT field FROM release", "neither in GROUP BY nor inside an aggregate"),
        ("SELECT 1 AS one FROM release", "selects single rows"),
        ("SELECT COUNT(*) FROM catalogue", "There is no table `catalogue`; the one table is `release`."),
        ("SELECT COUNT(*)", "without FROM"),
        ("SELECT COUNT(*) FROM release, release", "More than one table"),
        ("SELECT COUNT(*) FROM release JOIN other ON true", "A join"),
        ("SELECT COUNT(*) FROM (SELECT * FROM release)", "A subquery or function in FROM"),
        ("WITH a AS (SELECT 1) SELECT COUNT(*) FROM release", "WITH"),
        ("SELECT COUNT(*) FROM release UNION SELECT COUNT(*) FROM release", "UNION"),
        ("SELECT DISTINCT field FROM release", "GROUP BY the same columns instead"),
        ("SELECT COUNT(DISTINCT field) FROM release", "must remember every value"),
        ("SELECT MEDIAN(g_mag) FROM release", "needs all values at once"),
        ("SELECT QUANTILE_CONT(g_mag, 0.5) FROM release", "needs all values at once"),
        ("SELECT FIRST(g_mag) FROM release", "is not among the aggregates"),
        ("SELECT SUM(g_mag) OVER (PARTITION BY field) FROM release", "is a window function"),
        ("SELECT field, g_mag, COUNT(*) FROM release GROUP BY field", "Column `g_mag` is neither in GROUP BY"),
        (
            "SELECT field, COUNT(*) FROM release GROUP BY field HAVING g_mag > 3",
            "Column `g_mag` is neither in GROUP BY",
        ),
        ("SELECT COUNT(*) FROM release WHERE COUNT(*) > 3", "is an aggregate over many rows"),
        ("SELECT AVG(SUM(g_mag)) FROM release", "is an aggregate over many rows"),
        ("SELECT COUNT(*) FROM release WHERE gmag > 3", "Did you mean `g_mag`?"),
        ("SELECT COUNT(*) FROM release WHERE g_mag", "after WHERE is not a condition"),
        ("SELECT SUM(field) FROM release", "needs numbers"),
        ("SELECT AVG(g_mag, cell) FROM release", "takes one argument, not 2"),
        ("SELECT COUNT(*) AS n, SUM(cell) AS n FROM release", "Two columns would be called `n`"),
        ("SELECT COUNT(*) FROM release GROUP BY 3", "There is no selected column 3"),
        ("SELECT COUNT(*) FROM release GROUP BY 1", "is an aggregate over many rows"),
        ("SELECT field, COUNT(*) FROM release GROUP BY ROLLUP (field)", "is not supported"),
        ("SELECT field FROM release GROUP BY ALL", "GROUP BY ALL is not supported"),
        ("SELECT COUNT(*) FROM release LIMIT 'a'", "LIMIT and OFFSET take a whole number"),
        ("SELECT COUNT(* FROM release", "cannot be read"),
        ("SELECT COUNT(*) FROM release; SELECT 1", "One SQL query is expected, 2 are given."),
        ("DROP TABLE release", "This is not a SELECT."),
        ("", "is empty"),
    ] {
        let error = Tables::new(&query(sql), &names(), &schema).err().unwrap_or_else(|| panic!("`{sql}` was accepted"));
        let text = error.to_string();
        assert!(text.contains(says), "`{sql}` says: {text}");
        assert!(text.starts_with("tables.query[0].sql: "), "{text}");
    }
}

#[test]
fn all_faults_of_tables_come_at_once() {
    let mut settings = every_table();
    settings.colour_magnitude[0].colour = "B_G".into();
    settings.colour_magnitude[0].magnitude_bins.step = f64::NAN;
    settings.magnitude[0].band = "g".into();
    settings.absolute_magnitude[0].band = "R".into();
    settings.query[0].name = "a/b".into();
    settings.query[1].name = "Cut_Counts".into();
    settings.query[2].sql = "SELECT nothing FROM release".into();
    let error = Tables::new(&settings, &names(), &release(1).schema()).unwrap_err();
    let said: Vec<(String, String)> = error.each().map(|e| (e.place.key.clone().unwrap(), e.message.clone())).collect();
    let expected = [
        ("tables.colour_magnitude[0].colour", "There is no colour `B_G` under [colours]. Did you mean `B_R`?"),
        ("tables.colour_magnitude[0].magnitude_bins", "finite numbers"),
        ("tables.magnitude[0].band", "There is no band `g`"),
        ("tables.absolute_magnitude[0].band", "needs the column `absmag_R_direct`, which this plan does not compute"),
        ("tables.query[0].name", "becomes a file name"),
        ("tables.query[1].name", "would be called `Cut_Counts`"),
        ("tables.query[2].sql", "There is no column `nothing`"),
    ];
    assert_eq!(said.len(), expected.len(), "{said:?}");
    for ((key, message), (expected_key, says)) in said.iter().zip(expected) {
        assert_eq!(key, expected_key);
        assert!(message.contains(says), "{message}");
    }
    // Two tables of one name.
    let mut twice = every_table();
    twice.magnitude.push(twice.magnitude[0].clone());
    let error = Tables::new(&twice, &names(), &release(1).schema()).unwrap_err();
    assert_eq!(error.place.key.as_deref(), Some("tables.magnitude[1].name"));
    // Too many cells.
    let mut fine = every_table();
    fine.colour_magnitude[0].colour_bins.step = 0.001;
    fine.colour_magnitude[0].magnitude_bins.step = 0.001;
    let error = Tables::new(&fine, &names(), &release(1).schema()).unwrap_err();
    assert!(error.message.contains("cells; at most"), "{error}");
}

#[test]
fn sums_beyond_64_bits_and_strange_tallies_are_refused() {
    let rows =
        RecordBatch::try_from_iter([("n", Arc::new(Int64Array::from(vec![i64::MAX, i64::MAX])) as ArrayRef)]).unwrap();
    let tables = Tables::new(&query("SELECT SUM(n) AS s FROM release"), &names(), &rows.schema()).unwrap();
    let tally = add_up(&tables, std::slice::from_ref(&rows));
    let error = tables.finish(&tally, &[]).unwrap_err();
    assert!(error.message.contains("sum(n) is beyond 64 bits"), "{error}");
    assert_eq!(
        answer("SELECT AVG(n) AS a FROM release", &rows).column(0).as_primitive::<Float64Type>().value(0),
        2_f64.powi(63)
    );
    // The tally of another plan.
    let other = Tables::new(&query("SELECT MAX(n) AS s FROM release"), &names(), &rows.schema()).unwrap();
    assert!(other.finish(&tally, &[]).unwrap_err().message.contains("other tables"));
    assert!(other.start().add(&tables, &rows).is_err());
}

#[test]
fn a_schema_of_a_table_has_names_people_read() {
    let batch = answer("SELECT field, COUNT(*), avg(\"g_mag\") FROM release GROUP BY release.field", &release(50));
    let names: Vec<String> = batch.schema().fields().iter().map(|f: &Arc<Field>| f.name().clone()).collect();
    assert_eq!(names, ["field", "COUNT(*)", "avg(\"g_mag\")"]);
    let _: &Schema = batch.schema_ref();
}

#[test]
fn workers_may_share_them() {
    fn shared<T: Send + Sync>() {}
    shared::<Tables>();
    shared::<Tally>();
    shared::<tenparsec::verdicts::Cuts>();
}
