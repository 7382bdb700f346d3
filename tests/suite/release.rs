//! The release as a whole: values by hand, counts that add up, same bytes for any number of threads, interruption.

use crate::world::{PLAN, World, bytes_of, rows_of, stars, with, write};
use arrow::array::{Array, ArrayRef, AsArray, Float64Array, RecordBatch};
use arrow::datatypes::{Float32Type, Float64Type, Int64Type, UInt32Type};
use std::sync::Arc;

const DROP: &str = "[[cuts]]\nname = \"fits\"\nkeep = \"fit < 1.2\"\neffect = \"drop\"\n[distance]";

fn f64s(batch: &RecordBatch, name: &str) -> Vec<Option<f64>> {
    let column = batch.column_by_name(name).unwrap_or_else(|| panic!("no column {name}"));
    match column.data_type() {
        arrow::datatypes::DataType::Float32 => {
            column.as_primitive::<Float32Type>().iter().map(|x| x.map(f64::from)).collect()
        }
        _ => column.as_primitive::<Float64Type>().iter().collect(),
    }
}

#[test]
fn values_follow_their_formulas() {
    let world = World::new();
    world.plan(&PLAN.replace("title = \"test\"", "title = \"test\"\nprecision = \"double\""));
    let rows = rows_of(&world.release());
    let column = |name: &str| f64s(&rows, name);
    let (parallax, error) = (column("parallax"), column("parallax_error"));
    let (g, r, g_error, a_v) = (column("g"), column("r"), column("g_error"), column("a_v"));
    let near = |name: &str, row: usize, expected: f64| {
        let found = column(name)[row].unwrap();
        assert!((found - expected).abs() <= 1e-12 * expected.abs().max(1.0), "{name} row {row}: {found} {expected}");
    };
    for row in [0, 1, 499, 500, 1234, 2999] {
        let (p, e) = (parallax[row].unwrap() + 0.02, error[row].unwrap());
        let calibrated = ((1.1 * e).powi(2) + 0.01_f64.powi(2)).sqrt();
        let (g, r, a) = (g[row].unwrap(), r[row].unwrap(), a_v[row].unwrap());
        near("zero_point", row, -0.02);
        near("parallax_calibrated", row, p);
        near("parallax_error_calibrated", row, calibrated);
        near("parallax_over_error", row, p / calibrated);
        near("extinction_G", row, 0.84 * a);
        near("colour_G_R", row, g - r);
        near("colour_G_R_intrinsic", row, g - r - (0.84 - 0.6) * a);
        assert!(column("colour_G_R_error")[row].is_none(), "R has no error");
        let direct = column("absmag_G_direct")[row];
        match p > 0.0 {
            true => near("absmag_G_direct", row, g + 5.0 * p.log10() - 10.0 - 0.84 * a),
            false => assert!(direct.is_none()),
        }
        let median = column("modulus_p50")[row].unwrap();
        near("distance_p50", row, 10f64.powf(median / 5.0 + 1.0));
        // R counts as exact, so its quantiles are those of the modulus mirrored
        near("absmag_R_p50", row, r - 0.6 * a - median);
        near("absmag_R_p16", row, r - 0.6 * a - column("modulus_p84")[row].unwrap());
        assert!(g_error[row].unwrap() > 0.0);
        let (narrow, wide) = (
            column("modulus_p84")[row].unwrap() - column("modulus_p16")[row].unwrap(),
            column("absmag_G_p84")[row].unwrap() - column("absmag_G_p16")[row].unwrap(),
        );
        assert!(wide >= narrow, "photometric error cannot sharpen: {wide} {narrow}");
        let accepted = rows.column_by_name("accepted").unwrap().as_boolean().value(row);
        assert_eq!(accepted, p / calibrated > 5.0);
        assert_eq!(
            rows.column_by_name("verdict").unwrap().as_primitive::<UInt32Type>().value(row),
            u32::from(!accepted)
        );
    }
}

#[test]
fn catalogue_columns_pass_unchanged_and_in_order() {
    let world = World::new();
    let rows = rows_of(&world.release());
    let before = stars(3000);
    for (i, field) in before.schema().fields().iter().enumerate() {
        assert_eq!(rows.schema().field(i).name(), field.name());
        assert_eq!(rows.column(i).as_ref(), before.column(i).as_ref(), "{}", field.name());
    }
}

#[test]
fn every_computed_column_says_what_it_is() {
    let world = World::new();
    let rows = rows_of(&world.release());
    for field in rows.schema().fields().iter().skip(stars(1).num_columns()) {
        for key in ["ucd", "description", "method", "lineage"] {
            assert!(field.metadata().get(key).is_some_and(|text| !text.is_empty()), "{} has no {key}", field.name());
        }
    }
}

#[test]
fn lineage_changes_with_what_a_column_depends_on_and_with_nothing_else() {
    let lineage = |plan: &str| {
        let world = World::new();
        world.plan(plan);
        let rows = rows_of(&world.release());
        let of = |name: &str| rows.schema().field_with_name(name).unwrap().metadata()["lineage"].clone();
        ["zero_point", "extinction_G", "colour_G_R_intrinsic", "modulus_p50", "absmag_G_p50", "absmag_R_p50", "verdict"]
            .map(of)
    };
    let base = lineage(PLAN);
    assert_eq!(base, lineage(&PLAN.replace("title = \"test\"", "title = \"another\"")));
    let ratio = lineage(&PLAN.replace("0.84", "0.85"));
    assert_eq!(
        [ratio[0].as_str(), &ratio[1], &ratio[3], &ratio[5]].map(|x| base.iter().any(|b| b == x)),
        [true, false, true, true]
    );
    assert_ne!(ratio[2], base[2]);
    assert_ne!(ratio[4], base[4]);
    let zero = lineage(&PLAN.replace("-0.02", "-0.03"));
    let same: Vec<bool> = zero.iter().zip(&base).map(|(a, b)| a == b).collect();
    assert_eq!(same, [false, true, true, false, false, false, false]);
}

#[test]
fn the_same_bytes_for_any_number_of_threads() {
    for drop in [false, true] {
        let world = World::with_stars(&stars(7000));
        let plan = if drop { PLAN.replace("[distance]", DROP) } else { PLAN.to_owned() };
        world.plan(&plan.replace("title = \"test\"", "title = \"test\"\nrows_per_part = 1200"));
        let mut first = None;
        for threads in ["1", "2", "3", "8"] {
            let said = world.run(&["build", "plan.toml", "--threads", threads, "--overwrite"]);
            assert_eq!(said.code, 0, "{}", said.err);
            let bytes = bytes_of(&world.path("release"));
            assert!(bytes.len() > 6);
            match &first {
                None => first = Some(bytes),
                Some(first) => {
                    for (a, b) in first.iter().zip(&bytes) {
                        assert!(a == b, "{} differs with {threads} threads", a.0);
                    }
                    assert_eq!(first.len(), bytes.len());
                }
            }
        }
    }
}

#[test]
fn dropped_rows_are_gone_counted_and_the_rest_unchanged() {
    let world = World::new();
    world.plan(&PLAN.replace("[distance]", DROP));
    let said = world.build();
    assert_eq!(said.code, 0, "{}", said.err);
    let rows = rows_of(&world.path("release"));
    let kept = f64s(&stars(3000), "parallax").len();
    let fit = rows.column_by_name("fit").unwrap().as_primitive::<Float32Type>();
    assert!(fit.iter().all(|x| x.unwrap() < 1.2));
    let manifest: serde_json::Value =
        serde_json::from_slice(&std::fs::read(world.path("release/manifest.json")).unwrap()).unwrap();
    let count = |key: &str| manifest[key].as_u64().unwrap();
    assert_eq!(count("rows_in"), kept as u64);
    assert_eq!(count("rows_written") + count("rows_dropped"), count("rows_in"));
    assert_eq!(count("rows_written"), rows.num_rows() as u64);
    assert!(count("rows_dropped") > 100);

    // the survivors are what a build without the cut has for them
    let plain = World::new();
    let all = rows_of(&plain.release());
    let keep: arrow::array::BooleanArray =
        all.column_by_name("fit").unwrap().as_primitive::<Float32Type>().iter().map(|x| x.map(|x| x < 1.2)).collect();
    let expected = arrow::compute::filter_record_batch(&all, &keep).unwrap();
    for name in ["id", "field", "parallax", "modulus_p50", "absmag_G_p84", "prior_share"] {
        assert_eq!(
            rows.column_by_name(name).unwrap().as_ref(),
            expected.column_by_name(name).unwrap().as_ref(),
            "{name}"
        );
    }
}

#[test]
fn a_missing_value_fails_its_cut_and_is_counted() {
    let batch = stars(1000);
    let old = batch.column_by_name("parallax").unwrap().as_primitive::<Float64Type>().clone();
    let holes: Float64Array = (0..1000).map(|i| (i % 10 != 0).then(|| old.value(i))).collect();
    let world = World::with_stars(&with(&batch, "parallax", Arc::new(holes) as ArrayRef));
    world.release();
    let text = std::fs::read_to_string(world.path("release/tables/cut_counts.csv")).unwrap();
    let mut lines = csv::Reader::from_reader(text.as_bytes());
    let headers = lines.headers().unwrap().clone();
    let row = lines.records().next().unwrap().unwrap();
    let value = |name: &str| row[headers.iter().position(|h| h == name).unwrap()].parse::<u64>().unwrap();
    assert_eq!(value("judged"), 1000);
    assert_eq!(value("missing"), 100);
    assert!(value("fails") > 100 && value("fails") == value("fails_first") && value("fails") == value("fails_only"));
}

#[test]
fn tables_agree_with_the_parts() {
    let world = World::new();
    let release = world.release();
    let rows = rows_of(&release);
    let ids = rows.column_by_name("id").unwrap().as_primitive::<Int64Type>();
    assert_eq!(ids.len(), 3000);
    let field = rows.column_by_name("field").unwrap().as_string::<i32>();
    let modulus = f64s(&rows, "modulus_p50");
    let text = std::fs::read_to_string(release.join("tables/by_field.csv")).unwrap();
    for record in csv::Reader::from_reader(text.as_bytes()).records() {
        let record = record.unwrap();
        let mine: Vec<f64> = (0..3000).filter(|i| field.value(*i) == &record[0]).filter_map(|i| modulus[i]).collect();
        assert_eq!(record[1].parse::<usize>().unwrap(), mine.len());
        let mean = mine.iter().sum::<f64>() / mine.len() as f64;
        assert!((record[2].parse::<f64>().unwrap() - mean).abs() < 1e-9, "{record:?} {mean}");
    }
}

#[test]
fn a_killed_build_leaves_nothing_whole_and_continues_to_the_same_bytes() {
    let world = World::with_stars(&stars(200_000));
    write(&world.path("stars.parquet"), &stars(200_000), 5000);
    world.plan(&PLAN.replace("title = \"test\"", "title = \"test\"\nrows_per_part = 10_000"));
    let expected = bytes_of(&world.release());
    std::fs::remove_dir_all(world.path("release")).unwrap();
    let mut interrupted = 0;
    for round in 0..30 {
        let mut child = std::process::Command::new(env!("CARGO_BIN_EXE_tenparsec"))
            .args(["build", "plan.toml", "--threads", "1", "--quiet"])
            .current_dir(world.folder.path())
            .spawn()
            .unwrap();
        std::thread::sleep(std::time::Duration::from_millis(20 + 7 * round));
        child.kill().unwrap();
        child.wait().unwrap();
        if world.looks_whole() {
            break;
        }
        interrupted += 1;
    }
    assert!(interrupted > 0, "no build was caught in the middle");
    if !world.looks_whole() {
        let said = world.build();
        assert_eq!(said.code, 0, "{}", said.err);
    }
    assert!(!world.path("release/ledger.jsonl").exists());
    assert!(bytes_of(&world.path("release")) == expected, "the continued release differs");
}

#[test]
fn a_signal_stops_a_build_that_the_same_command_continues() {
    let world = World::with_stars(&stars(200_000));
    write(&world.path("stars.parquet"), &stars(200_000), 5000);
    world.plan(&PLAN.replace("title = \"test\"", "title = \"test\"\nrows_per_part = 10_000"));
    let expected = bytes_of(&world.release());
    let mut stopped = 0;
    for round in 0..30 {
        if stopped == 2 {
            break;
        }
        let _ = std::fs::remove_dir_all(world.path("release"));
        // later and later, until the signal falls into the work, however fast the machine is
        let (signal, wait) = (["INT", "TERM"][round % 2], 40 + 25 * round);
        let program = env!("CARGO_BIN_EXE_tenparsec");
        let script = format!(
            "{program} build plan.toml --threads 1 & sleep $(printf '0.%03d' {wait}); kill -{signal} $!; wait $!"
        );
        let said = crate::world::said(
            std::process::Command::new("bash").args(["-mc", &script]).current_dir(world.folder.path()).output(),
        );
        if said.code != 75 {
            // before the program listened, or after it was done
            assert!([0, 130, 143].contains(&said.code), "{}: {}", said.code, said.err);
            continue;
        }
        stopped += 1;
        assert!(said.err.contains("of 20 parts done") && said.err.contains("continue"), "{}", said.err);
        assert!(!world.looks_whole());
        let leftovers = std::fs::read_dir(world.path("release/catalogue")).into_iter().flatten().flatten();
        assert!(leftovers.into_iter().all(|file| file.path().extension().is_some_and(|e| e == "parquet")));
        let said = world.build();
        assert_eq!(said.code, 0, "{}", said.err);
        assert!(bytes_of(&world.path("release")) == expected, "the continued release differs");
    }
    assert!(stopped > 0, "no build was stopped in the middle");
}

#[test]
fn an_unfinished_release_of_another_plan_is_not_mixed() {
    let world = World::with_stars(&stars(20));
    std::fs::create_dir(world.path("release")).unwrap();
    let said = world.build();
    assert_eq!(said.code, 0, "an empty folder is fine: {}", said.err);
    // what a kill between ledger and manifest leaves
    let manifest = world.path("release/manifest.json");
    let text = std::fs::read_to_string(&manifest).unwrap();
    std::fs::remove_file(&manifest).unwrap();
    let value: serde_json::Value = serde_json::from_str(&text).unwrap();
    let header = serde_json::json!({"format": "tenparsec ledger", "revision": 1, "tenparsec_version": value["tenparsec_version"],
        "plan_blake3": "0000", "catalogue_fingerprint": "0000", "parts": 1});
    std::fs::write(world.path("release/ledger.jsonl"), format!("{header}\n")).unwrap();
    let said = world.build();
    assert_eq!(said.code, 1);
    assert!(said.err.contains("another plan") && said.err.contains("--overwrite"), "{}", said.err);
    assert_eq!(world.run(&["build", "plan.toml", "--overwrite"]).code, 0);
}

#[test]
fn statistics_spare_decoding_but_never_change_a_count() {
    // ids rise, so footers decide `id < N` for most row groups; the same rows in another order are decided by decoding
    let ordered = World::with_stars(&stars(3000));
    let plan =
        PLAN.replace("[distance]", "[[cuts]]\nname = \"early\"\nkeep = \"id < 9000\"\neffect = \"drop\"\n[distance]");
    ordered.plan(&plan);
    ordered.release();
    let shuffled = World::new();
    let order: arrow::array::UInt32Array = (0..3000_u32).map(|i| (i * 1117) % 3000).collect();
    let columns = stars(3000).columns().iter().map(|c| arrow::compute::take(c, &order, None).unwrap()).collect();
    write(&shuffled.path("stars.parquet"), &RecordBatch::try_new(stars(1).schema(), columns).unwrap(), 500);
    shuffled.plan(&plan);
    shuffled.release();
    let counts = |world: &World| std::fs::read_to_string(world.path("release/tables/cut_counts.csv")).unwrap();
    let of_early = |text: String| text.lines().find(|l| l.starts_with("early")).unwrap().to_owned();
    assert_eq!(of_early(counts(&ordered)).split(',').nth(4), of_early(counts(&shuffled)).split(',').nth(4));
    assert_eq!(rows_of(&ordered.path("release")).num_rows(), rows_of(&shuffled.path("release")).num_rows());
}

#[test]
fn a_json_log_ends_with_the_figures() {
    let world = World::new();
    let said = world.run(&["build", "plan.toml", "--log", "json"]);
    assert_eq!(said.code, 0);
    assert!(said.out.is_empty(), "results of a JSON log go to standard error: {}", said.out);
    let events: Vec<serde_json::Value> = said.err.lines().map(|line| serde_json::from_str(line).unwrap()).collect();
    assert!(events.iter().all(|event| event["time"].is_string() && event["level"].is_string()));
    let done = events.last().unwrap();
    assert_eq!(done["event"], "done");
    assert_eq!(done["rows_in"], 3000);
    assert_eq!(done["rows_written"], 3000);
}

#[test]
fn check_writes_nothing() {
    let world = World::new();
    let said = world.run(&["check", "plan.toml"]);
    assert_eq!(said.code, 0, "{}", said.err);
    assert!(said.out.contains("3,000 rows") && said.out.contains("6 row groups"), "{}", said.out);
    assert!(!world.path("release").exists());
}

#[test]
fn a_release_is_no_part_of_the_catalogue_beside_it() {
    let world = World::new();
    world.plan(&PLAN.replace("catalogue = \"stars.parquet\"", "catalogue = \".\""));
    world.release();
    let said = world.run(&["build", "plan.toml", "--output", "second"]);
    assert_eq!(said.code, 0, "{}", said.err);
    assert!(said.out.contains("3,000 rows from 1 file"), "{}", said.out);
}

#[test]
fn a_drafted_plan_runs() {
    let world = World::new();
    assert_eq!(world.run(&["mock", "--rows", "3000", "--quiet", "sky"]).code, 0);
    let draft = world.run(&["draft", "sky"]);
    assert_eq!(draft.code, 0, "{}", draft.err);
    assert!(draft.out.contains("keep = \"parallax_over_error > 5\""));
    assert!(draft.err.is_empty(), "{}", draft.err);
    world.plan(&draft.out);
    world.release();
}
