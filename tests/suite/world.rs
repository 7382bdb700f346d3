//! A small world for tests that run the program: catalogues made in a temporary folder, plans, and the program itself.

use arrow::array::{ArrayRef, Float32Array, Float64Array, Int64Array, RecordBatch, StringArray};
use arrow::datatypes::{Field, Schema};
use parquet::arrow::ArrowWriter;
use parquet::file::properties::WriterProperties;
use std::path::{Path, PathBuf};
use std::process::{Command, Output};
use std::sync::Arc;

/// Folder of a test with a plan `plan.toml` and a catalogue `stars.parquet`.
pub struct World {
    pub folder: tempfile::TempDir,
}

/// What the program said.
#[derive(Debug)]
pub struct Said {
    pub code: i32,
    pub out: String,
    pub err: String,
}

pub const PLAN: &str = r#"
[release]
title = "test"
catalogue = "stars.parquet"
[columns]
id = "id"
parallax = "parallax"
parallax_error = "parallax_error"
[bands.G]
magnitude = "g"
magnitude_error = "g_error"
extinction_ratio = 0.84
[bands.R]
magnitude = "r"
extinction_ratio = 0.6
[colours]
G_R = ["G", "R"]
[zero_point]
model = "constant"
offset_mas = -0.02
[uncertainty]
scale = 1.1
floor_mas = 0.01
[extinction]
model = "column"
column = "a_v"
[[cuts]]
name = "precise"
keep = "parallax_over_error > 5"
[distance]
prior = "exponentially-decreasing-density"
length_kpc = 1.35
[[tables.colour_magnitude]]
colour = "G_R"
band = "G"
colour_bins = { from = -1.0, to = 4.0, step = 0.25 }
magnitude_bins = { from = -5.0, to = 17.0, step = 1.0 }
[[tables.query]]
name = "by_field"
sql = "SELECT field, COUNT(*) AS stars, AVG(modulus_p50) AS modulus FROM release GROUP BY field ORDER BY field"
"#;

/// A catalogue of `rows` plain stars, every value finite, with deterministic scatter.
pub fn stars(rows: usize) -> RecordBatch {
    let wave = |i: usize, k: f64| ((i as f64 + 1.0) * k).sin();
    let f64s = |f: &dyn Fn(usize) -> f64| Arc::new((0..rows).map(f).collect::<Float64Array>()) as ArrayRef;
    let columns: Vec<(&str, ArrayRef)> = vec![
        ("id", Arc::new((0..rows as i64).map(|i| 1000 + 7 * i).collect::<Int64Array>())),
        ("field", Arc::new((0..rows).map(|i| Some(["north", "south", "west"][i % 3])).collect::<StringArray>())),
        ("ra", f64s(&|i| 180.0 + 179.0 * wave(i, 0.37))),
        ("dec", f64s(&|i| 89.0 * wave(i, 0.71))),
        ("parallax", f64s(&|i| 1.0 + 1.5 * wave(i, 1.3))),
        ("parallax_error", f64s(&|i| 0.12 + 0.1 * wave(i, 2.1))),
        ("g", f64s(&|i| 14.0 + 3.0 * wave(i, 0.9))),
        ("g_error", f64s(&|i| 0.01 + 0.009 * wave(i, 3.3))),
        ("r", f64s(&|i| 13.2 + 3.1 * wave(i, 0.9))),
        ("a_v", f64s(&|i| 0.3 + 0.2 * wave(i, 1.7))),
        ("fit", Arc::new((0..rows).map(|i| (1.0 + 0.5 * wave(i, 5.1)) as f32).collect::<Float32Array>())),
    ];
    let fields: Vec<Field> =
        columns.iter().map(|(name, array)| Field::new(*name, array.data_type().clone(), true)).collect();
    RecordBatch::try_new(Arc::new(Schema::new(fields)), columns.into_iter().map(|c| c.1).collect()).unwrap()
}

/// `batch` with column `name` replaced.
pub fn with(batch: &RecordBatch, name: &str, array: ArrayRef) -> RecordBatch {
    let old = batch.schema();
    let fields = old.fields().iter().map(|field| {
        if field.name() == name { Arc::new(Field::new(name, array.data_type().clone(), true)) } else { field.clone() }
    });
    let schema = Schema::new(fields.collect::<Vec<_>>());
    let at = batch.schema().index_of(name).unwrap();
    let mut columns = batch.columns().to_vec();
    columns[at] = array;
    RecordBatch::try_new(Arc::new(schema), columns).unwrap()
}

pub fn write(path: &Path, batch: &RecordBatch, group_rows: usize) {
    let properties = WriterProperties::builder().set_max_row_group_row_count(Some(group_rows)).build();
    let file = std::fs::File::create(path).unwrap();
    let mut writer = ArrowWriter::try_new(file, batch.schema(), Some(properties)).unwrap();
    writer.write(batch).unwrap();
    writer.close().unwrap();
}

impl World {
    /// A world with 3,000 stars in row groups of 500 and the plan [`PLAN`].
    pub fn new() -> Self {
        Self::with_stars(&stars(3000))
    }

    pub fn with_stars(batch: &RecordBatch) -> Self {
        let world = Self { folder: tempfile::tempdir().unwrap() };
        write(&world.path("stars.parquet"), batch, 500);
        world.plan(PLAN);
        world
    }

    pub fn path(&self, inner: &str) -> PathBuf {
        self.folder.path().join(inner)
    }

    pub fn plan(&self, text: &str) {
        std::fs::write(self.path("plan.toml"), text).unwrap();
    }

    /// Runs the program in the folder.
    pub fn run(&self, arguments: &[&str]) -> Said {
        said(Command::new(env!("CARGO_BIN_EXE_tenparsec")).args(arguments).current_dir(self.folder.path()).output())
    }

    pub fn build(&self) -> Said {
        self.run(&["build", "plan.toml"])
    }

    /// Builds and expects success.
    pub fn release(&self) -> PathBuf {
        let said = self.build();
        assert_eq!(said.code, 0, "{}", said.err);
        self.path("release")
    }

    pub fn looks_whole(&self) -> bool {
        self.path("release/manifest.json").exists()
    }
}

pub fn said(output: std::io::Result<Output>) -> Said {
    let output = output.unwrap();
    Said {
        code: output.status.code().unwrap_or(-1),
        out: String::from_utf8(output.stdout).unwrap(),
        err: String::from_utf8(output.stderr).unwrap(),
    }
}

/// All rows of the parts of a release.
pub fn rows_of(release: &Path) -> RecordBatch {
    let mut parts: Vec<PathBuf> =
        std::fs::read_dir(release.join("catalogue")).unwrap().map(|entry| entry.unwrap().path()).collect();
    parts.sort();
    let mut batches = Vec::new();
    for part in parts {
        assert_eq!(part.extension().unwrap(), "parquet", "{}", part.display());
        let file = std::fs::File::open(part).unwrap();
        let reader = parquet::arrow::arrow_reader::ParquetRecordBatchReaderBuilder::try_new(file).unwrap();
        batches.extend(reader.build().unwrap().map(Result::unwrap));
    }
    let schema = batches[0].schema();
    arrow::compute::concat_batches(&schema, &batches).unwrap()
}

/// Bytes of every file of a release but `run.json`, by name.
pub fn bytes_of(release: &Path) -> Vec<(String, Vec<u8>)> {
    fn walk(root: &Path, folder: &Path, found: &mut Vec<(String, Vec<u8>)>) {
        for entry in std::fs::read_dir(folder).unwrap() {
            let path = entry.unwrap().path();
            if path.is_dir() {
                walk(root, &path, found);
            } else {
                let name = path.strip_prefix(root).unwrap().display().to_string();
                found.push((name, std::fs::read(&path).unwrap()));
            }
        }
    }
    let mut found = Vec::new();
    walk(release, release, &mut found);
    found.retain(|(name, _)| name != "run.json");
    found.sort();
    found
}
