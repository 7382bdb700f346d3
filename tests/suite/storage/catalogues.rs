//! Which files, in which order, with which columns, in which parts.

use std::path::Path;
use std::sync::Arc;

use arrow::array::*;
use arrow::compute::cast;
use arrow::datatypes::*;
use parquet::file::properties::WriterProperties;
use proptest::prelude::*;
use tenparsec::catalogue::Catalogue;
use tenparsec::columnar::source::{ucd, unit};

use super::files::*;

fn put(dir: &Path, name: &str, batch: &RecordBatch) {
    let path = dir.join(name);
    std::fs::create_dir_all(path.parent().unwrap()).unwrap();
    write(&path, batch, 100, WriterProperties::builder().build());
}

fn shown(catalogue: &Catalogue) -> Vec<&str> {
    catalogue.files.iter().map(|file| file.shown.as_str()).collect()
}

fn patterns(list: &[&str]) -> Vec<String> {
    list.iter().map(|text| (*text).to_owned()).collect()
}

#[test]
fn files_folders_and_globs_in_a_fixed_order() {
    let dir = tempfile::tempdir().unwrap();
    let base = dir.path();
    for name in [
        "b/2.parquet",
        "b/10.parquet",
        "b/deep/1.parquet",
        "b/.hidden/1.parquet",
        "b/.x.parquet",
        "a.parquet",
        "z [1].parquet",
    ] {
        put(base, name, &plain(10, 0));
    }
    std::fs::write(base.join("b/notes.txt"), "not data").unwrap();
    let open = |list: &[&str]| Catalogue::open(&patterns(list), base).unwrap();
    assert_eq!(shown(&open(&["b"])), ["b/10.parquet", "b/2.parquet", "b/deep/1.parquet"]);
    assert_eq!(shown(&open(&["a.parquet", "b/*.parquet"])), ["a.parquet", "b/10.parquet", "b/2.parquet"]);
    assert_eq!(shown(&open(&["z [1].parquet", "./b/deep"])), ["z [1].parquet", "b/deep/1.parquet"]);
    assert_eq!(shown(&open(&["**/1.parquet"])), ["b/deep/1.parquet"]);
    let twice = open(&["b/2.parquet", "b"]);
    assert_eq!(shown(&twice), ["b/2.parquet", "b/10.parquet", "b/deep/1.parquet"]);
    assert_eq!(twice.notes.len(), 1);
    assert!(twice.notes[0].contains("b/2.parquet") && twice.notes[0].contains("read once"), "{:?}", twice.notes);
    let without = Catalogue::open_except(&patterns(&["."]), base, &[base.join("b")]).unwrap();
    assert_eq!(shown(&without), ["a.parquet", "z [1].parquet"]);
    let absolute = base.join("a.parquet").to_string_lossy().into_owned();
    assert_eq!(shown(&Catalogue::open(&[absolute], base).unwrap()), ["a.parquet"]);
    assert_ne!(open(&["b"]).fingerprint(), open(&["b/deep"]).fingerprint());
    assert_eq!(open(&["b"]).fingerprint(), open(&["b"]).fingerprint());
}

#[cfg(unix)]
#[test]
fn a_circle_of_links_ends() {
    let dir = tempfile::tempdir().unwrap();
    put(dir.path(), "a/1.parquet", &plain(10, 0));
    std::os::unix::fs::symlink(dir.path().join("a"), dir.path().join("a/again")).unwrap();
    assert_eq!(shown(&Catalogue::open(&patterns(&["a"]), dir.path()).unwrap()), ["a/1.parquet"]);
}

#[test]
fn entries_that_match_nothing_are_named_together() {
    let dir = tempfile::tempdir().unwrap();
    std::fs::create_dir(dir.path().join("empty")).unwrap();
    let list = patterns(&["no.parquet", "empty", "x*.parquet", "a[.parquet", ""]);
    let error = Catalogue::open(&list, dir.path()).unwrap_err();
    let text = error.to_string();
    assert_eq!(error.each().count(), 5, "{text}");
    for wanted in [
        "`no.parquet`",
        "`empty` holds no",
        "matches `x*.parquet`",
        "`a[.parquet` is not a valid glob",
        "entry is empty",
    ] {
        assert!(text.contains(wanted), "{wanted}: {text}");
    }
    assert!(Catalogue::open(&[], dir.path()).unwrap_err().to_string().contains("no files"));
}

#[test]
fn rows_are_needed_but_not_in_every_file() {
    let dir = tempfile::tempdir().unwrap();
    put(dir.path(), "0.parquet", &plain(0, 0));
    let error = Catalogue::open(&patterns(&["."]), dir.path()).unwrap_err();
    assert!(error.to_string().contains("no rows"), "{error}");
    assert_eq!(error.exit_code(), 1);
    put(dir.path(), "1.parquet", &plain(250, 0));
    let catalogue = Catalogue::open(&patterns(&["."]), dir.path()).unwrap();
    assert_eq!((catalogue.rows, catalogue.files.len()), (250, 2));
    assert_eq!(catalogue.notes, ["1 of 2 files have no rows."]);
    assert_eq!(catalogue.parts(1000).len(), 1);
}

#[test]
fn differing_columns_are_all_told_with_both_files_and_types() {
    let dir = tempfile::tempdir().unwrap();
    let first = plain(10, 0);
    put(dir.path(), "1.parquet", &first);
    let fields = vec![
        Field::new("source", DataType::Int32, false),
        Field::new("parallax", DataType::Float64, true).with_metadata(
            [("unit".to_owned(), "arcsec".to_owned())].into_iter().collect::<std::collections::HashMap<_, _>>(),
        ),
        Field::new("extra", DataType::Boolean, true),
        Field::new("field", DataType::Utf8, true),
    ];
    let columns: Vec<ArrayRef> = vec![
        cast(first.column(0), &DataType::Int32).unwrap(),
        first.column(1).clone(),
        Arc::new(BooleanArray::from(vec![true; 10])),
        first.column(3).clone(),
    ];
    put(dir.path(), "2.parquet", &RecordBatch::try_new(Arc::new(Schema::new(fields)), columns).unwrap());
    let error = Catalogue::open(&patterns(&["."]), dir.path()).unwrap_err();
    let text = error.to_string();
    assert_eq!(error.each().count(), 4, "{text}");
    assert!(
        text.contains("column `source`: The column is a 64-bit integer in 1.parquet but a 32-bit integer in 2.parquet"),
        "{text}"
    );
    assert!(
        text.contains("column `parallax`: The column's unit is `mas` in 1.parquet but `arcsec` in 2.parquet"),
        "{text}"
    );
    assert!(text.contains("column `g_mag`: The column is in 1.parquet but not in 2.parquet"), "{text}");
    assert!(text.contains("column `extra`: The column is in 2.parquet but not in 1.parquet"), "{text}");
    std::fs::remove_file(dir.path().join("2.parquet")).unwrap();
    put(dir.path(), "3.parquet", &first.project(&[1, 0, 2, 3]).unwrap());
    let text = Catalogue::open(&patterns(&["."]), dir.path()).unwrap_err().to_string();
    assert!(text.contains("column 1 is `source` in 1.parquet but `parallax` in 3.parquet"), "{text}");
}

#[test]
fn text_may_be_held_in_any_way_and_nullability_is_loosened() {
    let dir = tempfile::tempdir().unwrap();
    let first = plain(10, 0);
    put(dir.path(), "1.parquet", &first);
    let schema = first.schema();
    let mut fields: Vec<Field> = schema.fields().iter().map(|field| field.as_ref().clone()).collect();
    fields[0] = Field::new("source", DataType::Int64, true);
    let dictionary = DataType::Dictionary(Box::new(DataType::Int32), Box::new(DataType::Utf8));
    fields[3] = Field::new("field", dictionary.clone(), true);
    let mut columns = first.columns().to_vec();
    columns[3] = cast(&columns[3], &dictionary).unwrap();
    put(dir.path(), "2.parquet", &RecordBatch::try_new(Arc::new(Schema::new(fields)), columns).unwrap());
    let catalogue = Catalogue::open(&patterns(&["."]), dir.path()).unwrap();
    assert!(catalogue.schema.field(0).is_nullable());
    assert_eq!(catalogue.schema.field(3).data_type(), &DataType::Utf8);
    assert_eq!(unit(catalogue.schema.field(1)), Some("mas"));
    assert_eq!(ucd(catalogue.schema.field(2)), Some("phot.mag"));
    assert_eq!(unit(catalogue.schema.field(3)), None);
}

#[test]
fn a_file_that_changes_while_it_is_read_is_refused() {
    let dir = tempfile::tempdir().unwrap();
    put(dir.path(), "1.parquet", &plain(10, 0));
    let catalogue = Catalogue::open(&patterns(&["."]), dir.path()).unwrap();
    put(dir.path(), "1.parquet", &plain(10, 5));
    let error = catalogue.source(0).unwrap_err().to_string();
    assert!(error.contains("1.parquet") && error.contains("changed"), "{error}");
}

proptest! {
    #![proptest_config(ProptestConfig { cases: 48, failure_persistence: None, ..ProptestConfig::default() })]

    /// Pieces cover every row once, in order; parts respect the limit unless one piece exceeds it.
    #[test]
    fn parts_cover_the_catalogue(
        files in prop::collection::vec(prop::collection::vec(1usize..40, 1..6), 1..4),
        target in 1u64..120, huge in 5u64..40, piece in 1u64..20,
    ) {
        let dir = tempfile::tempdir().unwrap();
        for (number, groups) in files.iter().enumerate() {
            let path = dir.path().join(format!("{number}.parquet"));
            let schema = plain(1, 0).schema();
            let mut writer = parquet::arrow::ArrowWriter::try_new(std::fs::File::create(path).unwrap(), schema, None).unwrap();
            for rows in groups {
                writer.write(&plain(*rows, 0)).unwrap();
                writer.flush().unwrap();
            }
            writer.close().unwrap();
        }
        let catalogue = Catalogue::open(&patterns(&["."]), dir.path()).unwrap();
        let parts = catalogue.parts_with_limits(target, huge, piece);
        let mut expected = (0usize, 0u64);
        for (index, part) in parts.iter().enumerate() {
            prop_assert_eq!(part.index, index);
            prop_assert_eq!(&part.name, &format!("part-{index:05}.parquet"));
            prop_assert_eq!(part.rows, part.pieces.iter().map(|piece| piece.rows).sum::<u64>());
            prop_assert!(part.rows <= target || part.pieces.len() == 1);
            for one in &part.pieces {
                if expected.1 == catalogue.files[expected.0].rows {
                    expected = (expected.0 + 1, 0);
                }
                prop_assert_eq!((one.file, one.first_row_in_file), expected);
                prop_assert_eq!(one.file, part.file);
                let group = catalogue.files[one.file].groups[one.row_group];
                prop_assert_eq!(one.whole, one.rows == group);
                let most = if group > huge { piece } else { group };
                prop_assert!(one.rows <= most);
                expected.1 += one.rows;
            }
        }
        prop_assert_eq!(expected, (files.len() - 1, catalogue.files[files.len() - 1].rows));
    }
}
