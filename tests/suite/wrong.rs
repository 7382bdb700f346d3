//! Wrong input: each case gets one clear sentence with its place, the right exit code, and no release that looks whole.

use crate::world::{PLAN, Said, World, stars, with, write};
use arrow::array::{Array, ArrayRef, Float64Array, Int64Array, StringArray};
use std::sync::Arc;

/// The program refuses with `code`, says all of `words`, and leaves no release that looks whole.
fn refused(world: &World, said: &Said, code: i32, words: &[&str]) {
    assert_eq!(said.code, code, "{}\n{}", said.out, said.err);
    for word in words {
        assert!(said.err.contains(word), "`{word}` is not in: {}", said.err);
    }
    assert!(!world.looks_whole());
    assert!(!said.err.contains("panicked"), "{}", said.err);
}

fn wrong_plan(from: &str, to: &str, words: &[&str]) {
    let world = World::new();
    assert!(PLAN.contains(from), "the plan has no `{from}`");
    world.plan(&PLAN.replace(from, to));
    refused(&world, &world.build(), 2, words);
    assert!(!world.path("release").exists(), "a wrong plan must not write");
    refused(&world, &world.run(&["check", "plan.toml"]), 2, words);
}

#[test]
fn plan_faults_name_key_line_and_remedy() {
    wrong_plan("[zero_point]", "[zero_pont]", &["`zero_pont` (line", "unknown key", "Did you mean `zero_point`?"]);
    wrong_plan("scale = 1.1", "scael = 1.1", &["uncertainty.scael", "Did you mean `scale`?"]);
    wrong_plan("length_kpc = 1.35", "length_kpc = nan", &["distance.length_kpc", "finite"]);
    wrong_plan("length_kpc = 1.35", "length_kpc = -1.0", &["distance.length_kpc"]);
    wrong_plan("length_kpc = 1.35", "", &["distance.length_kpc", "missing"]);
    wrong_plan("length_kpc = 1.35", "length_kpc = \"long\"", &["distance.length_kpc", "a number is needed"]);
    wrong_plan("scale = 1.1", "scale = 0", &["uncertainty.scale", "above 0"]);
    wrong_plan("scale = 1.1", "scale = inf", &["uncertainty.scale", "finite"]);
    wrong_plan("floor_mas = 0.01", "floor_mas = -0.01", &["uncertainty.floor_mas", "at least 0"]);
    wrong_plan("\"exponentially-decreasing-density\"", "\"exponential-density\"", &["distance.prior", "Known:"]);
    wrong_plan("model = \"constant\"", "model = \"constnat\"", &["zero_point.model", "Did you mean `constant`?"]);
    wrong_plan("title = \"test\"", "title = test", &["plan.toml", "line 3", "valid TOML"]);
    wrong_plan("[bands.R]", "[bands.G]", &["plan.toml", "line", "valid TOML"]);
    wrong_plan("[bands.R]", "[bands.g]", &["bands.g", "only in case"]);
    wrong_plan("[bands.R]", "[bands.\"R-1\"]", &["bands.R-1", "letters, digits and _"]);
    wrong_plan("[\"G\", \"R\"]", "[\"G\", \"V\"]", &["colours.G_R", "`V` is no band"]);
    wrong_plan("[\"G\", \"R\"]", "[\"G\"]", &["colours.G_R", "at least 2"]);
    wrong_plan("extinction_ratio = 0.6", "", &["bands.R", "extinction_ratio"]);
    wrong_plan("step = 0.25", "step = 0.0", &["tables.colour_magnitude[0]", "step"]);
    wrong_plan("step = 0.25", "step = nan", &["tables.colour_magnitude[0]", "finite"]);
}

#[test]
fn all_faults_of_a_plan_come_at_once() {
    let world = World::new();
    let plan = PLAN.replace("scale = 1.1", "scael = 1.1").replace("length_kpc = 1.35", "length_kpc = nan");
    world.plan(&plan.replace("title = \"test\"", "titel = \"test\""));
    refused(&world, &world.build(), 2, &["uncertainty.scael", "distance.length_kpc", "release.titel", "release.title"]);
}

#[test]
fn columns_are_suggested_and_their_types_and_units_checked() {
    wrong_plan("parallax = \"parallax\"", "parallax = \"paralax\"", &["columns.parallax", "Did you mean `parallax`?"]);
    wrong_plan("id = \"id\"", "id = \"parallax\"", &["columns.id", "integers or of text"]);
    wrong_plan("magnitude = \"g\"", "magnitude = \"field\"", &["bands.G.magnitude", "numbers"]);
    wrong_plan("column = \"a_v\"", "column = \"av\"", &["extinction.column", "Did you mean `a_v`?"]);

    let world = World::new();
    let batch = stars(100);
    let old = batch.schema();
    let fields = old.fields().iter().map(|field| {
        let unit = if field.name() == "parallax" { "arcsec" } else { "" };
        field.as_ref().clone().with_metadata([("unit".to_owned(), unit.to_owned())])
    });
    let schema = Arc::new(arrow::datatypes::Schema::new(fields.collect::<Vec<_>>()));
    write(&world.path("stars.parquet"), &batch.clone().with_schema(schema).unwrap(), 100);
    refused(&world, &world.build(), 2, &["columns.parallax", "`arcsec`", "mas"]);
}

#[test]
fn sql_faults_name_the_cut_or_query() {
    let cut = "parallax_over_error > 5";
    wrong_plan(cut, "paralax_over_error > 5", &["cuts[0].keep", "parallax_over_error"]);
    wrong_plan(cut, "parallax_over_error >", &["cuts[0].keep"]);
    wrong_plan(cut, "parallax_over_error + 1", &["cuts[0].keep"]);
    wrong_plan(cut, "count(*) > 3", &["cuts[0].keep"]);
    wrong_plan("FROM release GROUP", "FROM elsewhere GROUP", &["tables.query[0].sql", "release"]);
    wrong_plan("AVG(modulus_p50)", "AVG(modulus_p51)", &["tables.query[0].sql", "modulus_p5"]);
    wrong_plan("AVG(modulus_p50)", "MEDIAN(modulus_p50)", &["tables.query[0].sql"]);
    wrong_plan("COUNT(*) AS stars", "parallax AS stars", &["tables.query[0].sql"]);
}

#[test]
fn catalogues_that_cannot_be_read() {
    let world = World::new();
    world.plan(&PLAN.replace("stars.parquet", "nowhere/*.parquet"));
    refused(&world, &world.build(), 1, &["nowhere/*.parquet"]);

    std::fs::write(world.path("stars.parquet"), b"").unwrap();
    world.plan(PLAN);
    refused(&world, &world.build(), 1, &["stars.parquet", "empty"]);

    std::fs::write(world.path("stars.parquet"), b"these are no stars, but a text of some length").unwrap();
    refused(&world, &world.build(), 1, &["stars.parquet", "Parquet"]);

    write(&world.path("stars.parquet"), &stars(0), 10);
    refused(&world, &world.build(), 1, &["no rows"]);

    let whole = {
        write(&world.path("stars.parquet"), &stars(3000), 500);
        std::fs::read(world.path("stars.parquet")).unwrap()
    };
    std::fs::write(world.path("stars.parquet"), &whole[..whole.len() / 2]).unwrap();
    refused(&world, &world.build(), 1, &["stars.parquet"]);

    let mut garbled = whole.clone();
    let footer = garbled.len() - 200;
    garbled[footer..footer + 60].iter_mut().for_each(|byte| *byte ^= 0xa5);
    std::fs::write(world.path("stars.parquet"), &garbled).unwrap();
    refused(&world, &world.build(), 1, &["stars.parquet"]);
}

#[test]
fn files_that_disagree() {
    let world = World::new();
    std::fs::create_dir(world.path("sky")).unwrap();
    let batch = stars(10);
    write(&world.path("sky/a.parquet"), &batch, 10);
    let text = Arc::new((0..10).map(|i| Some(format!("{i}"))).collect::<StringArray>());
    write(&world.path("sky/b.parquet"), &with(&batch, "g", text), 10);
    world.plan(&PLAN.replace("stars.parquet", "sky"));
    refused(&world, &world.build(), 1, &["a.parquet", "b.parquet", "`g`", "text", "64-bit float"]);
}

#[test]
fn a_null_id_is_named_with_its_row() {
    let batch = stars(1200);
    let ids = (0..1200_i64).map(|i| (i != 777).then_some(i)).collect::<Int64Array>();
    let world = World::with_stars(&with(&batch, "id", Arc::new(ids)));
    refused(&world, &world.build(), 1, &["stars.parquet", "row group 1", "`id`", "row 777", "null"]);
}

#[test]
fn duplicate_ids_are_allowed() {
    let batch = stars(1200);
    let ids = Int64Array::from(vec![5; 1200]);
    let world = World::with_stars(&with(&batch, "id", Arc::new(ids)));
    world.release();
}

#[test]
fn impossible_values_are_missing_counted_and_said() {
    let batch = stars(1000);
    let strange = |name: &str, change: &dyn Fn(usize, f64) -> f64| {
        let old = batch.column_by_name(name).unwrap();
        let old = old.as_any().downcast_ref::<Float64Array>().unwrap();
        Arc::new((0..1000).map(|i| Some(change(i, old.value(i)))).collect::<Float64Array>()) as ArrayRef
    };
    let parallax = strange("parallax", &|i, x| {
        if i < 3 {
            f64::NAN
        } else if i < 5 {
            f64::INFINITY
        } else {
            x
        }
    });
    let error = strange("parallax_error", &|i, x| {
        if i == 10 {
            -x
        } else if i == 11 {
            0.0
        } else {
            x
        }
    });
    let dec = strange("dec", &|i, x| if i == 20 { 123.0 } else { x });
    let mut changed = with(&batch, "parallax", parallax);
    changed = with(&changed, "parallax_error", error);
    changed = with(&changed, "dec", dec);
    let world = World::with_stars(&changed);
    world.plan(&PLAN.replace("[bands.G]", "ra = \"ra\"\ndec = \"dec\"\n[bands.G]"));
    let said = world.build();
    assert_eq!(said.code, 0, "{}", said.err);
    for words in [
        "5 values of `parallax` NaN or infinite",
        "2 values of `parallax_error` zero or negative",
        "`dec` leaves the range",
    ] {
        assert!(said.out.contains(words), "{words}: {}", said.out);
    }
    let rows = crate::world::rows_of(&world.path("release"));
    let median = rows.column_by_name("modulus_p50").unwrap();
    for row in [0, 1, 2, 3, 4, 10, 11] {
        assert!(median.is_null(row), "row {row}");
    }
    assert_eq!(median.null_count(), 7);
}

#[test]
fn outputs_that_are_not_ours_are_left_alone() {
    let world = World::new();
    std::fs::write(world.path("release"), b"a file").unwrap();
    refused(&world, &world.build(), 1, &["release", "file"]);
    std::fs::remove_file(world.path("release")).unwrap();

    std::fs::create_dir(world.path("release")).unwrap();
    std::fs::write(world.path("release/thesis.tex"), b"years of work").unwrap();
    for overwrite in [false, true] {
        let mut arguments = vec!["build", "plan.toml"];
        if overwrite {
            arguments.push("--overwrite");
        }
        refused(&world, &world.run(&arguments), 1, &["release", "thesis.tex"]);
        assert_eq!(std::fs::read(world.path("release/thesis.tex")).unwrap(), b"years of work");
    }
    std::fs::remove_file(world.path("release/thesis.tex")).unwrap();

    world.release();
    let again = world.build();
    assert_eq!(again.code, 1);
    assert!(again.err.contains("--overwrite"), "{}", again.err);
    assert_eq!(world.run(&["build", "plan.toml", "--overwrite"]).code, 0);
}

#[test]
fn a_full_disk_is_said_and_leaves_no_whole_release() {
    // a small file system of its own would need privileges; a limit on the size of files fails writes the same way
    let world = World::new();
    write(&world.path("stars.parquet"), &stars(60_000), 20_000);
    let script = format!("ulimit -f 64; trap '' XFSZ; exec {} build plan.toml", env!("CARGO_BIN_EXE_tenparsec"));
    let output = std::process::Command::new("bash").args(["-c", &script]).current_dir(world.folder.path()).output();
    let said = crate::world::said(output);
    refused(&world, &said, 1, &["part-00000.parquet", "written"]);
    assert!(!world.path("release/catalogue/part-00000.parquet").exists());
    // with room again the same command finishes
    world.release();
}

#[test]
fn damaged_pages_never_pass_as_a_defect_or_a_panic() {
    let world = World::new();
    let whole = std::fs::read(world.path("stars.parquet")).unwrap();
    let mut refusals = 0;
    for k in 0..40 {
        let mut bytes = whole.clone();
        let at = 4 + k * (whole.len() - 4000) / 40;
        bytes[at..at + 16].iter_mut().for_each(|byte| *byte ^= 0x5a);
        std::fs::write(world.path("stars.parquet"), &bytes).unwrap();
        let said = world.run(&["build", "plan.toml", "--overwrite"]);
        assert!(!said.err.contains("panicked") && !said.err.contains("defect"), "{}", said.err);
        if said.code != 0 {
            refusals += 1;
            refused(&world, &said, 1, &["stars.parquet", "row group"]);
        }
        let _ = std::fs::remove_dir_all(world.path("release"));
    }
    // most damage decodes to other numbers: integrity is for hashes to prove, here only noise and defects are excluded
    assert!(refusals > 0, "no damage was noticed");
}

#[test]
fn wrong_command_lines() {
    let world = World::new();
    for (arguments, word) in [
        (&["bulid", "plan.toml"][..], "build"),
        (&["build"][..], "PLAN"),
        (&["build", "plan.toml", "--threads", "0"][..], "--threads"),
        (&["build", "plan.toml", "--memory", "lots"][..], "lots"),
        (&["build", "plan.toml", "--memory", "1MiB"][..], "--memory"),
        (&["build", "no-plan.toml"][..], "no-plan.toml"),
        (&[][..], "Usage"),
    ] {
        let said = world.run(arguments);
        assert_eq!(said.code, 2, "{arguments:?}: {}", said.err);
        assert!(said.err.contains(word), "{arguments:?}: {}", said.err);
    }
    assert_eq!(world.run(&["--help"]).code, 0);
    assert_eq!(world.run(&["--version"]).code, 0);
}
