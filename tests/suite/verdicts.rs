//! Cuts: three-valued logic, what SQL means, messages, counts, and what row-group statistics may claim.

use std::sync::Arc;

use arrow::array::*;
use arrow::datatypes::{DataType, Field, Schema};
use parquet::arrow::ArrowWriter;
use parquet::file::metadata::{ParquetMetaData, ParquetMetaDataReader};
use parquet::file::properties::WriterProperties;
use polars::prelude::IntoLazy;
use proptest::prelude::*;
use tenparsec::columnar::bridge;
use tenparsec::error::Error;
use tenparsec::plan::cuts::{CutSettings, Effect};
use tenparsec::verdicts::statistics::{Verdict, decide};
use tenparsec::verdicts::{BatchVerdict, CutCounts, Cuts};

fn cut(name: &str, keep: &str) -> CutSettings {
    CutSettings { name: name.into(), keep: keep.into(), effect: Effect::Flag }
}

fn cuts(keeps: &[&str], schema: &Schema) -> Result<Cuts, Error> {
    let settings: Vec<CutSettings> = keeps.iter().enumerate().map(|(i, keep)| cut(&format!("cut {i}"), keep)).collect();
    Cuts::new(&settings, schema)
}

/// The condition on each row: true, false, or null.
fn judge(keep: &str, batch: &RecordBatch) -> Vec<Option<bool>> {
    let cuts = cuts(&[keep], &batch.schema()).unwrap_or_else(|e| panic!("{keep}: {e}"));
    let judgement = cuts.evaluate(0, batch).unwrap_or_else(|e| panic!("{keep}: {e}"));
    let fail = judgement.fail();
    (0..batch.num_rows())
        .map(|row| {
            let (keep, missing) = (judgement.keep.value(row), judgement.missing.value(row));
            assert_eq!(fail.value(row), !keep);
            assert!(!(keep && missing));
            if missing { None } else { Some(keep) }
        })
        .collect()
}

fn batch(columns: Vec<(&str, ArrayRef)>) -> RecordBatch {
    RecordBatch::try_from_iter_with_nullable(columns.into_iter().map(|(name, array)| (name, array, true))).unwrap()
}

const T: Option<bool> = Some(true);
const F: Option<bool> = Some(false);
const N: Option<bool> = None;

#[test]
fn truth_tables() {
    // ISO/IEC 9075-2, truth tables of the boolean operators.
    let a = vec![T, T, T, F, F, F, N, N, N];
    let b = vec![T, F, N, T, F, N, T, F, N];
    let rows = batch(vec![
        ("a", Arc::new(BooleanArray::from(a.clone())) as ArrayRef),
        ("b", Arc::new(BooleanArray::from(b.clone()))),
    ]);
    for (keep, expected) in [
        ("a AND b", [T, F, N, F, F, F, N, F, N]),
        ("a OR b", [T, T, T, T, F, N, T, N, N]),
        ("NOT a AND b IS NOT TRUE", [F, F, F, F, T, T, F, N, N]),
        ("a = b", [T, F, N, F, T, N, N, N, N]),
        ("a <> b", [F, T, N, T, F, N, N, N, N]),
        ("NOT a", [F, F, F, T, T, T, N, N, N]),
        ("a IS TRUE", [T, T, T, F, F, F, F, F, F]),
        ("a IS NOT TRUE", [F, F, F, T, T, T, T, T, T]),
        ("a IS FALSE", [F, F, F, T, T, T, F, F, F]),
        ("a IS NOT FALSE", [T, T, T, F, F, F, T, T, T]),
        ("a IS UNKNOWN", [F, F, F, F, F, F, T, T, T]),
        ("a IS NOT NULL", [T, T, T, T, T, T, F, F, F]),
        ("a IS DISTINCT FROM b", [F, T, T, T, F, T, T, T, F]),
        ("a IS NOT DISTINCT FROM b", [T, F, F, F, T, F, F, F, T]),
        ("a AND NULL", [N, N, N, F, F, F, N, N, N]),
        ("a OR NULL", [T, T, T, N, N, N, N, N, N]),
        ("a IN (TRUE, NULL)", [T, T, T, N, N, N, N, N, N]),
        ("a NOT IN (TRUE, NULL)", [F, F, F, N, N, N, N, N, N]),
        ("COALESCE(a, b)", [T, T, T, F, F, F, T, F, N]),
        ("CASE WHEN a THEN b ELSE TRUE END", [T, F, N, T, T, T, T, T, T]),
    ] {
        assert_eq!(judge(keep, &rows), expected, "{keep}");
    }
}

fn mixed() -> RecordBatch {
    let f32s = Float32Array::from(vec![Some(0.1), Some(7.0), None, Some(f32::NAN), Some(f32::INFINITY), Some(-3.0)]);
    let f64s = Float64Array::from(vec![Some(0.1), Some(-7.5), Some(f64::NAN), None, Some(2.0), Some(0.0)]);
    let ints = Int16Array::from(vec![Some(3), Some(-3), None, Some(0), Some(i16::MAX), Some(2)]);
    let bytes = UInt8Array::from(vec![Some(3), Some(255), None, Some(0), Some(7), Some(5)]);
    let ids = UInt64Array::from(vec![u64::MAX, 9_007_199_254_740_993, 0, 1, 2, 3]);
    let longs = Int64Array::from(vec![i64::MAX, i64::MIN, 0, -1, 9_007_199_254_740_993, 5]);
    let texts =
        StringArray::from(vec![Some("alpha"), Some("Beta"), None, Some(""), Some("a_b%"), Some("\u{e9}t\u{e9}")]);
    batch(vec![
        ("f", Arc::new(f32s) as ArrayRef),
        ("d", Arc::new(f64s)),
        ("i", Arc::new(ints)),
        ("u", Arc::new(bytes)),
        ("id", Arc::new(ids)),
        ("l", Arc::new(longs)),
        ("t", Arc::new(texts)),
        ("bp-rp", Arc::new(Float64Array::from(vec![1.0; 6]))),
    ])
}

#[test]
fn not_finite_is_missing_everywhere() {
    let rows = mixed();
    for (keep, expected) in [
        ("f > 5", [F, T, N, N, N, F]),
        ("NOT (f <= 5)", [F, T, N, N, N, F]),
        ("f = f", [T, T, N, N, N, T]),
        ("f IS NULL", [F, F, T, T, T, F]),
        // Made on the way: division by zero, outside the domain, overflow of Float32 and Float64.
        ("1 / d > 0", [T, F, N, N, T, N]),
        ("LN(d) < 1", [T, N, N, N, T, N]),
        ("SQRT(d) IS NULL", [F, T, T, T, F, F]),
        ("f * 3e38 > 0", [T, N, N, N, N, N]),
        ("EXP(1000 * d) > 1", [T, F, N, N, N, F]),
        ("POWER(d, -1) > 0", [T, F, N, N, T, N]),
        ("1 / (1 / d) = 0", [F, F, N, N, F, N]),
        ("i % i = 0", [T, T, N, N, T, T]),
        ("CAST(t AS DOUBLE) IS NULL", [T; 6]),
        ("COALESCE(f, d) > 1", [F, T, N, N, T, F]),
    ] {
        assert_eq!(judge(keep, &rows), expected, "{keep}");
    }
}

#[test]
fn numbers_and_text_mean_what_they_say() {
    let rows = mixed();
    for (keep, expected) in [
        // A literal takes the precision of the column beside it.
        ("f = 0.1", [T, F, N, N, N, F]),
        ("f IN (0.1, 7)", [T, T, N, N, N, F]),
        ("f >= 1e-1", [T, T, N, N, N, F]),
        ("d = 0.1", [T, F, N, N, F, F]),
        // Two columns of different precision meet in the wider one: 0.1 is not 0.1f.
        ("f = d", [F, F, N, N, N, F]),
        // Small unsigned numbers do not wrap.
        ("u - 5 < 0", [T, F, N, T, F, F]),
        ("-u < 0", [T, T, N, F, T, T]),
        // 64-bit integers are compared as integers; doubles would merge 2^53 and 2^53 + 1.
        ("l = 9007199254740992", [F; 6]),
        ("l = 9007199254740993", [F, F, F, F, T, F]),
        ("id = 9007199254740992", [F; 6]),
        ("id = 18446744073709551615", [T, F, F, F, F, F]),
        ("id > -1", [T; 6]),
        ("id IN (1, 9007199254740993)", [F, T, F, T, F, F]),
        ("l + 1 IS NULL", [T, F, F, F, F, F]),
        ("l - 1 IS NULL", [F, T, F, F, F, F]),
        ("-l IS NULL", [F, T, F, F, F, F]),
        ("ABS(l) IS NULL", [F, T, F, F, F, F]),
        // The sign of a remainder is that of the dividend (ISO/IEC 9075-2, MOD).
        ("i % 2 = -1", [F, T, N, F, F, F]),
        ("i / 2 = 1.5", [T, F, N, F, F, F]),
        ("i & 1 = 1", [T, T, N, F, T, F]),
        ("i BETWEEN 0 AND 3", [T, F, N, T, F, T]),
        ("i NOT BETWEEN 0 AND 3", [F, T, N, F, T, F]),
        ("i IN (2, 3, NULL)", [T, N, N, N, N, T]),
        ("i NOT IN (2, 3)", [F, T, N, T, T, F]),
        ("i IN (2.5, 3.0)", [T, F, N, F, F, F]),
        ("d IN (0)", [F, F, N, N, F, T]),
        ("FLOOR(d) = -8", [F, T, N, N, F, F]),
        ("ROUND(d) = -8", [F, T, N, N, F, F]),
        ("\"bp-rp\" = 1", [T; 6]),
        ("t = 'alpha'", [T, F, N, F, F, F]),
        ("t < 'a'", [F, T, N, T, F, F]),
        ("t LIKE 'a%'", [T, F, N, F, T, F]),
        ("t LIKE '%a'", [T, T, N, F, F, F]),
        ("t LIKE '_t_'", [F, F, N, F, F, T]),
        ("t NOT LIKE 'a%'", [F, T, N, T, F, T]),
        ("t ILIKE 'BETA'", [F, T, N, F, F, F]),
        ("LENGTH(t) = 3", [F, F, N, F, F, T]),
        ("UPPER(t) = '\u{c9}T\u{c9}'", [F, F, N, F, F, T]),
        ("SUBSTR(t, 1, 2) = 'al'", [T, F, N, F, F, F]),
        ("SUBSTRING(t FROM 2 FOR 2) = 'lp'", [T, F, N, F, F, F]),
        ("t || 'x' = 'Betax'", [F, T, N, F, F, F]),
        ("STARTS_WITH(t, 'a') OR ENDS_WITH(t, 'ta')", [T, T, N, F, T, F]),
        ("t IN ('alpha', 'Beta')", [T, T, N, F, F, F]),
        ("CASE i WHEN 3 THEN 'three' WHEN 2 THEN 'two' END = 'two'", [F, N, N, N, N, T]),
        ("NULLIF(i, 3) IS NULL", [T, F, T, F, F, F]),
        ("CAST(u AS DOUBLE) / 2 > 3", [F, T, N, F, T, F]),
    ] {
        assert_eq!(judge(keep, &rows), expected, "{keep}");
    }
}

#[test]
fn agrees_with_polars_sql() {
    // polars' own reading of the same SQL, an independent implementation, on finite values and nulls.
    let n = 500_i64;
    let x: Vec<Option<f64>> = (0..n).map(|i| (i % 7 != 0).then_some((i * 37 % 101) as f64 / 8.0 - 5.0)).collect();
    let y: Vec<Option<f64>> = (0..n).map(|i| (i % 11 != 0).then_some((i * 53 % 97) as f64 / 4.0 - 11.0)).collect();
    let k: Vec<Option<i64>> = (0..n).map(|i| (i % 13 != 0).then_some(i * 29 % 17 - 8)).collect();
    let t: Vec<Option<String>> = (0..n).map(|i| (i % 5 != 0).then(|| format!("field_{}", i * 7 % 12))).collect();
    let rows = batch(vec![
        ("x", Arc::new(Float64Array::from(x)) as ArrayRef),
        ("y", Arc::new(Float64Array::from(y))),
        ("k", Arc::new(Int64Array::from(k))),
        ("t", Arc::new(StringArray::from(t))),
    ]);
    let frame = bridge::frame(&rows, &["x", "y", "k", "t"]).unwrap();
    for keep in [
        "x > 1.5",
        "x + y * 2 < 3",
        "x - y >= k",
        "x / 4 > y",
        "(k + 8) % 3 = 1",
        "k * 2 + 1 > x",
        "x > 1 AND y < 2 OR k = 3",
        "NOT (x > 1 AND y < 2)",
        "x BETWEEN -1 AND 2.5",
        "k NOT BETWEEN -1 AND 2",
        "k IN (1, 2, 3)",
        "k NOT IN (1, 2, 3)",
        "t IN ('field_1', 'field_2')",
        "t LIKE 'field_1%'",
        "t LIKE 'field__'",
        "t NOT LIKE '%_1%'",
        "t ILIKE 'FIELD_3'",
        "x IS NULL OR y IS NOT NULL",
        "ABS(x) > 2",
        "FLOOR(x) = 2 OR CEIL(y) = -1",
        "SQRT(ABS(x)) < 1.5",
        "EXP(x) > 2",
        "POWER(x, 2) > y",
        "ATAN2(x, y) > 0.5",
        "SIN(x) > COS(y)",
        "LENGTH(t) = 7",
        "UPPER(t) = 'FIELD_1'",
        "SUBSTR(t, 7) = '11'",
        "STARTS_WITH(t, 'field_1')",
        "COALESCE(x, y, 0) > 0",
        "NULLIF(k, 3) > 1",
        "CASE WHEN x > 0 THEN y ELSE k END > 1",
        "CASE k WHEN 1 THEN 10 WHEN 2 THEN 20 ELSE 0 END > 5",
        "x IS DISTINCT FROM y",
        "-x > 2",
        "t = 'field_3' OR t > 'field_8'",
        "LOG10(ABS(x) + 1) > 0.5",
        "DEGREES(x) > 90",
        "MOD(k + 8, 4) = 2",
    ] {
        let mut context = polars::sql::SQLContext::new();
        context.register("rows", frame.clone().lazy());
        let theirs = context.execute(&format!("SELECT ({keep}) AS c FROM rows")).and_then(|l| l.collect());
        let theirs = theirs.unwrap_or_else(|e| panic!("{keep}: {e}"));
        let theirs: Vec<Option<bool>> = theirs.column("c").unwrap().bool().unwrap().iter().collect();
        assert_eq!(judge(keep, &rows), theirs, "{keep}");
    }
}

#[test]
fn dictionary_decimal_and_view_columns_can_be_named() {
    let dictionary: DictionaryArray<arrow::datatypes::Int8Type> =
        vec![Some("a"), None, Some("b")].into_iter().collect();
    let decimal = Decimal128Array::from(vec![Some(150), None, Some(-20)]).with_precision_and_scale(10, 2).unwrap();
    let rows = batch(vec![
        ("dict", Arc::new(dictionary) as ArrayRef),
        ("dec", Arc::new(decimal)),
        ("view", Arc::new(StringViewArray::from(vec![Some("a"), None, Some("b")]))),
    ]);
    assert_eq!(judge("dict = 'a'", &rows), [T, N, F]);
    assert_eq!(judge("dec = 1.5", &rows), [T, N, F]);
    assert_eq!(judge("view = 'b'", &rows), [F, N, T]);
}

#[test]
fn wrong_conditions_are_explained() {
    let schema = Schema::new(vec![
        Field::new("ruwe", DataType::Float32, true),
        Field::new("parallax_over_error", DataType::Float32, true),
        Field::new("Field", DataType::Utf8, true),
        Field::new("accepted", DataType::Boolean, false),
        Field::new("source", DataType::UInt64, false),
        Field::new("epoch", DataType::Date32, true),
        Field::new("tags", DataType::List(Arc::new(Field::new("item", DataType::Utf8, true))), true),
    ]);
    for (keep, says) in [
        ("rewe < 1.4", "There is no column `rewe`. Did you mean `ruwe`?"),
        ("field = 'a'", "Did you mean `Field`? Names match by case."),
        ("bp-rp > 1", "There is no column `bp`"),
        ("ruwe <", "cannot be read: it ends where an expression"),
        ("ruwe < 1.4 1", "ends before `1` (line 1, column 12)"),
        ("ruwe < 1.4)", "ends before `)`"),
        ("ruwe < 1.4; ruwe", "ends before `;`"),
        ("ruwe < 'a", "Unterminated string literal"),
        ("", "is empty"),
        ("ruwe + 1", "`ruwe + 1` is a number, not a condition; compare it with something, as in `ruwe + 1 > 5`."),
        ("ruwe", "`ruwe` is a number, not a condition"),
        ("Field", "`Field` is text, not a condition"),
        ("NULL", "always NULL"),
        ("1 > 0", "names no column"),
        ("TRUE", "names no column"),
        ("count(*) > 3", "`count(*)` is an aggregate over many rows"),
        ("ruwe > AVG(ruwe)", "`AVG(ruwe)` is an aggregate"),
        ("ruwe > median(ruwe)", "is an aggregate"),
        ("ROW_NUMBER() OVER (ORDER BY ruwe) < 5", "is a window function"),
        ("ruwe > (SELECT 1)", "is a subquery"),
        ("ruwe IN (SELECT 1)", "is a subquery"),
        ("EXISTS (SELECT 1)", "is a subquery"),
        ("ruwe > ANY(ARRAY[1, 2])", "is not supported"),
        ("epoch > '2016-01-01'", "Column `epoch` has the type Date32"),
        ("tags = 'a'", "Column `tags` has the type List"),
        ("ruwe > '5'", "compares a number with text. Numbers are written without quotes"),
        ("Field > 5", "compares text with an integer"),
        ("accepted > FALSE", "orders booleans"),
        ("accepted = 1", "compares a boolean with an integer"),
        ("ruwe AND accepted", "`ruwe` is a number, but a condition is needed there"),
        ("NOT ruwe", "a condition is needed there"),
        ("ruwe ^ 2 > 1", "write a power as `POWER(x, y)`"),
        ("source + 1 > 5", "CAST(source AS BIGINT)"),
        ("LOG(ruwe) > 1", "write LN or LOG10"),
        ("isnan(ruwe)", "`isnan(ruwe)` is not needed"),
        ("sqr(ruwe) > 1", "There is no function `sqr`. Did you mean `sqrt`?"),
        ("sqrt(ruwe, 2) > 1", "takes one argument, not 2"),
        ("sqrt(Field) > 1", "`Field` is text, but a number is needed there"),
        ("Field LIKE ruwe", "LIKE needs a pattern in single quotes"),
        ("ruwe > 1e999", "`1e999` is not a number that a 64-bit float can hold"),
        ("other.ruwe > 1", "column of another table"),
        ("CAST(ruwe AS DATE) IS NULL", "CAST to DATE is not supported"),
        ("CASE WHEN accepted THEN 1 ELSE 'a' END = 1", "mixes an integer and text"),
        ("ruwe > 1 AND rewe < 2 OR nothing = 3", "`rewe`"),
    ] {
        let error = cuts(&[keep], &schema).err().unwrap_or_else(|| panic!("`{keep}` was accepted"));
        let text = error.to_string();
        assert!(text.contains(says), "`{keep}` says: {text}");
        assert!(text.starts_with("cuts[0].keep: "), "{text}");
        assert_eq!(error.exit_code(), 2);
        assert!(!text.contains("Resolved plan") && !text.contains("sql parser error"), "{text}");
    }
    let nested = format!("{}ruwe > 1{}", "(".repeat(300), ")".repeat(300));
    assert!(cuts(&[&nested], &schema).unwrap_err().to_string().contains("nested too deeply"));
    let chain = vec!["ruwe > 1"; 3000].join(" AND ");
    assert!(cuts(&[&chain], &schema).unwrap_err().to_string().contains("too long"));
    let sum = format!("ruwe > {}", vec!["1"; 200].join(" + "));
    assert!(cuts(&[&sum], &schema).unwrap_err().to_string().contains("too long a chain"));
    let long = format!("Field = '{}'", "x".repeat(100_000));
    assert!(cuts(&[&long], &schema).unwrap_err().to_string().contains("at most"));
    let fine = vec!["ruwe > 1"; 300].join(" AND ");
    assert!(cuts(&[&fine], &schema).is_ok());
}

#[test]
fn all_faults_come_at_once() {
    let schema = Schema::new(vec![Field::new("ruwe", DataType::Float32, true)]);
    let settings = [cut("a", "ruwe < 1"), cut("a", "nothing < 1 AND nowhere > 2"), cut("", "ruwe <"), cut("d", "ruwe")];
    let error = Cuts::new(&settings, &schema).unwrap_err();
    let keys: Vec<String> = error.each().map(|e| e.place.key.clone().unwrap()).collect();
    assert_eq!(keys, ["cuts[1].name", "cuts[1].keep", "cuts[1].keep", "cuts[2].name", "cuts[2].keep", "cuts[3].keep"]);
    let many: Vec<CutSettings> = (0..33).map(|i| cut(&format!("c{i}"), "ruwe < 1")).collect();
    assert!(Cuts::new(&many, &schema).unwrap_err().to_string().starts_with("cuts: There are 33 cuts"));
    assert!(Cuts::new(&many[..32], &schema).is_ok());
}

#[test]
fn columns_are_those_named() {
    let cuts = cuts(&["d > f AND ABS(d) < 3 OR t = 'x'"], &mixed().schema()).unwrap();
    assert_eq!(cuts.columns(0), ["d", "f", "t"]);
    // Only these are needed to evaluate.
    let some = mixed().project(&[0, 1, 6]).unwrap();
    assert!(cuts.evaluate(0, &some).is_ok());
    let error = cuts.evaluate(0, &mixed().project(&[0, 1]).unwrap()).unwrap_err();
    assert_eq!(error.place.column.as_deref(), Some("t"));
}

#[test]
fn batches_of_any_size_give_the_same() {
    let rows = mixed();
    let keep = "f > 5 OR t LIKE 'a%' OR l + 1 IS NULL";
    let whole = judge(keep, &rows);
    for size in [1, 2, 4] {
        let mut pieces = Vec::new();
        for start in (0..6).step_by(size) {
            pieces.extend(judge(keep, &rows.slice(start, size.min(6 - start))));
        }
        assert_eq!(pieces, whole);
    }
    assert_eq!(judge(keep, &rows.slice(0, 0)), []);
}

proptest! {
    #[test]
    fn counts_agree_with_counting(
        rows in prop::collection::vec(any::<[Option<bool>; 3]>(), 0..60),
        effects in any::<[bool; 3]>(),
        split in 0_usize..60,
    ) {
        let names = ["a", "b", "c"];
        let column = |i: usize| Arc::new(rows.iter().map(|r| r[i]).collect::<BooleanArray>()) as ArrayRef;
        let whole = batch(names.iter().enumerate().map(|(i, n)| (*n, column(i))).collect());
        let settings: Vec<CutSettings> = names.iter().zip(effects).map(|(n, drop)| {
            CutSettings { effect: if drop { Effect::Drop } else { Effect::Flag }, ..cut(n, n) }
        }).collect();
        let cuts = Cuts::new(&settings, &whole.schema()).unwrap();

        let run = |batch: &RecordBatch, counts: &mut CutCounts| {
            let mut left = batch.clone();
            let mut verdict = BatchVerdict::new(left.num_rows());
            for i in 0..3 {
                verdict.apply(i, &cuts.evaluate(i, &left).unwrap());
                if let Some(stays) = verdict.drop_failing(cuts.dropping(), counts) {
                    left = arrow::compute::filter_record_batch(&left, &BooleanArray::new(stays, None)).unwrap();
                }
            }
            prop_assert_eq!(verdict.rows(), left.num_rows());
            let (masks, accepted) = verdict.finish(counts);
            for (mask, accepted) in masks.values().iter().zip(accepted.values()) {
                prop_assert_eq!(*mask == 0, accepted);
            }
            Ok(masks.values().to_vec())
        };
        let mut counts = CutCounts::new(&cuts);
        let masks = run(&whole, &mut counts)?;

        // The same, row by row from the definition.
        let mut expected = CutCounts::new(&cuts);
        let mut expected_masks = Vec::new();
        for row in &rows {
            expected.read += 1;
            let mut mask = 0_u32;
            let mut dropped = false;
            for i in 0..3 {
                if dropped { break; }
                expected.cuts[i].judged += 1;
                if row[i].is_none() { expected.cuts[i].missing += 1; }
                if row[i] != Some(true) {
                    mask |= 1 << i;
                    dropped = effects[i];
                }
            }
            for i in 0..3 {
                if mask >> i & 1 == 1 {
                    expected.cuts[i].fails += 1;
                    if mask & ((1 << i) - 1) == 0 { expected.cuts[i].fails_first += 1; }
                    if mask == 1 << i { expected.cuts[i].fails_only += 1; }
                }
            }
            if dropped { expected.dropped += 1 } else { expected_masks.push(mask) }
            if mask == 0 { expected.accepted += 1 }
        }
        prop_assert_eq!(&counts, &expected);
        prop_assert_eq!(&masks, &expected_masks);
        prop_assert_eq!(counts.read, counts.accepted + counts.flagged() + counts.dropped);

        // In two batches, merged backwards, through the ledger's text.
        let split = split.min(rows.len());
        let (mut first, mut second) = (CutCounts::new(&cuts), CutCounts::new(&cuts));
        run(&whole.slice(0, split), &mut first)?;
        run(&whole.slice(split, rows.len() - split), &mut second)?;
        let mut second: CutCounts = serde_json::from_str(&serde_json::to_string(&second).unwrap()).unwrap();
        second.merge(&first);
        prop_assert_eq!(&second, &counts);
    }
}

/// A Parquet file of one row group, and its footer.
fn footer(rows: &RecordBatch, truncate: Option<usize>) -> ParquetMetaData {
    let mut bytes = Vec::new();
    let properties = WriterProperties::builder().set_statistics_truncate_length(truncate).build();
    let mut writer = ArrowWriter::try_new(&mut bytes, rows.schema(), Some(properties)).unwrap();
    writer.write(rows).unwrap();
    writer.close().unwrap();
    ParquetMetaDataReader::new().parse_and_finish(&bytes::Bytes::from(bytes)).unwrap()
}

#[test]
fn statistics_decide_what_they_can() {
    let rows = batch(vec![
        ("i", Arc::new(Int32Array::from(vec![3, 5, 9])) as ArrayRef),
        ("n", Arc::new(Int64Array::from(vec![Some(3), None, Some(9)]))),
        ("u", Arc::new(UInt32Array::from(vec![5, 3_000_000_000, 4_000_000_000]))),
        ("void", Arc::new(Int64Array::from(vec![None, None, None]))),
        ("b", Arc::new(BooleanArray::from(vec![true, true, true]))),
        ("t", Arc::new(StringArray::from(vec!["b", "c", "d"]))),
        ("f", Arc::new(Float64Array::from(vec![1.0, 2.0, 3.0]))),
        ("dec", Arc::new(Decimal128Array::from(vec![150, 160, 200]).with_precision_and_scale(10, 2).unwrap())),
    ]);
    let footer = footer(&rows, Some(64));
    let (keep, fail, missing) = (Some(Verdict::AllKeep), Some(Verdict::AllFail), Some(Verdict::AllMissing));
    for (condition, expected) in [
        ("i > 2", keep),
        ("i > 3", None),
        ("i > 9", fail),
        ("2 < i", keep),
        ("i <= 9", keep),
        ("i >= 2.5", keep),
        ("i = 4", None),
        ("i = 2", fail),
        ("i <> 2", keep),
        ("i BETWEEN 3 AND 9", keep),
        ("i NOT BETWEEN 3 AND 9", fail),
        ("i IN (1, 2)", fail),
        ("i NOT IN (1, 2)", keep),
        ("i NOT IN (1, NULL)", missing),
        ("i IS NULL", fail),
        ("i IS NOT NULL", keep),
        ("NOT i > 9", keep),
        ("i > 2 AND i < 10", keep),
        ("i > 9 OR i < 3", fail),
        ("i > 9 OR f > 0", None),
        ("i > 9 AND f > 0", fail),
        ("i > 2 OR f > 0", keep),
        ("n > 2", None),
        ("n > 9", None),
        ("n > 2 OR i > 2", keep),
        ("n > 9 AND i > 9", fail),
        ("n IS NULL", None),
        ("(n > 2) IS NOT FALSE", keep),
        ("(n > 9) IS TRUE", fail),
        ("void > 2", missing),
        ("void IS NULL", keep),
        ("NOT void > 2", missing),
        ("u > 4", keep),
        ("u < 0", fail),
        ("u > 4000000000", fail),
        ("b", keep),
        ("NOT b", fail),
        ("b = FALSE", fail),
        ("t >= 'b'", keep),
        ("t > 'd'", fail),
        ("t < 'd'", None),
        // Never on floats: a NaN may hide beside any minimum and maximum.
        ("f > 0", None),
        ("f < 100", None),
        ("f IS NOT NULL", None),
        ("dec > 1.4", keep),
        ("dec > 3", fail),
        ("dec >= 1.5", None),
        // Not in the file: computed later.
        ("computed > 5", None),
        ("i + 1 > 0", None),
    ] {
        let read = tenparsec::columnar::sql::parse(condition).unwrap();
        assert_eq!(decide(&read, footer.row_group(0)), expected, "{condition}");
    }
}

#[derive(Debug, Clone)]
struct Rows {
    i: Vec<Option<i8>>,
    u: Vec<Option<u64>>,
    b: Vec<Option<bool>>,
    t: Vec<Option<String>>,
    f: Vec<Option<f32>>,
    c: Vec<Option<i64>>,
}

fn small_rows() -> impl Strategy<Value = Rows> {
    // Few distinct values and few rows, so that whole row groups often agree; sometimes all null or none.
    (1_usize..5, 0_u8..3).prop_flat_map(|(n, nulls)| {
        let weight = match nulls {
            0 => 0.001,
            1 => 0.3,
            _ => 0.9,
        };
        fn column<S: Strategy>(s: S, n: usize, weight: f64) -> impl Strategy<Value = Vec<Option<S::Value>>>
        where
            S::Value: Clone,
        {
            prop::collection::vec(prop::option::weighted(1.0 - weight, s), n)
        }
        (
            column(-3_i8..4, n, weight),
            column(prop::sample::select(vec![0_u64, 2, 3, 1 << 63, u64::MAX]), n, weight),
            column(any::<bool>(), n, weight),
            column("[ab\u{e9}]{0,4}", n, weight),
            column(prop::sample::select(vec![-2.0_f32, 0.0, 1.0, 3.0, f32::NAN, f32::INFINITY]), n, weight),
            column(-300_i64..300, n, weight),
        )
            .prop_map(|(i, u, b, t, f, c)| Rows { i, u, b, t, f, c })
    })
}

fn conditions() -> impl Strategy<Value = String> {
    let op = || prop::sample::select(vec!["=", "<>", "<", "<=", ">", ">="]);
    let whole = || (-4_i32..5).prop_map(|n| n.to_string());
    let number = || {
        prop_oneof![whole(), (-9_i32..10).prop_map(|n| format!("{:.1}", f64::from(n) / 2.0)), Just("NULL".to_string())]
    };
    let text = || prop_oneof!["[ab\u{e9}]{0,4}".prop_map(|t| format!("'{t}'")), Just("NULL".to_string())];
    let leaf = prop_oneof![
        (prop::sample::select(vec!["i", "f", "c"]), op(), number()).prop_map(|(x, o, y)| format!("{x} {o} {y}")),
        (op(), number()).prop_map(|(o, y)| format!("{y} {o} i")),
        (op(), prop::sample::select(vec!["0", "2", "-1", "9223372036854775808", "18446744073709551615", "2.5"]))
            .prop_map(|(o, y)| format!("u {o} {y}")),
        (op(), text()).prop_map(|(o, y)| format!("t {o} {y}")),
        (number(), number()).prop_map(|(x, y)| format!("i BETWEEN {x} AND {y}")),
        (number(), number()).prop_map(|(x, y)| format!("c NOT BETWEEN {x} AND {y}")),
        (number(), number()).prop_map(|(x, y)| format!("i IN ({x}, {y})")),
        (text(), text()).prop_map(|(x, y)| format!("t NOT IN ({x}, {y})")),
        prop::sample::select(vec![
            "b",
            "b = TRUE",
            "b <> TRUE",
            "i IS NULL",
            "f IS NULL",
            "t IS NOT NULL",
            "b IS UNKNOWN",
            "TRUE",
            "NULL"
        ])
        .prop_map(str::to_string),
    ];
    leaf.prop_recursive(3, 12, 2, |inner| {
        prop_oneof![
            (inner.clone(), prop::sample::select(vec!["AND", "OR"]), inner.clone())
                .prop_map(|(a, o, b)| format!("({a}) {o} ({b})")),
            inner.clone().prop_map(|a| format!("NOT ({a})")),
            (inner, prop::sample::select(vec!["TRUE", "NOT TRUE", "FALSE", "NOT FALSE", "NULL", "NOT NULL"]))
                .prop_map(|(a, what)| format!("({a}) IS {what}")),
        ]
    })
}

proptest! {
    #![proptest_config(ProptestConfig::with_cases(1500))]
    #[test]
    fn statistics_never_claim_too_much(rows in small_rows(), condition in conditions(), truncate in prop::option::of(1_usize..4)) {
        let cents = Decimal128Array::from(rows.c.iter().map(|x| x.map(i128::from)).collect::<Vec<_>>());
        let rows = batch(vec![
            ("i", Arc::new(Int8Array::from(rows.i)) as ArrayRef),
            ("u", Arc::new(UInt64Array::from(rows.u))),
            ("b", Arc::new(BooleanArray::from(rows.b))),
            ("t", Arc::new(StringArray::from(rows.t))),
            ("f", Arc::new(Float32Array::from(rows.f))),
            ("c", Arc::new(cents.with_precision_and_scale(9, 2).unwrap())),
        ]);
        let footer = footer(&rows, truncate);
        let read = tenparsec::columnar::sql::parse(&condition).unwrap();
        if let Some(verdict) = decide(&read, footer.row_group(0)) {
            // A condition without a column is refused as a cut; for the proof it is tied to one.
            let tied = format!("({condition}) AND (i IS NULL OR i IS NOT NULL)");
            let expected = match verdict {
                Verdict::AllKeep => T,
                Verdict::AllFail => F,
                Verdict::AllMissing => N,
            };
            for (row, truth) in judge(&tied, &rows).into_iter().enumerate() {
                prop_assert_eq!(truth, expected, "{} in row {} of {:?}", condition, row, rows);
            }
        }
    }
}
