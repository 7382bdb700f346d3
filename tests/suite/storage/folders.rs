//! The output folder, the ledger, the manifest.

use std::fs;
use std::path::Path;
use std::sync::Arc;

use arrow::array::{ArrayRef, Float32Array};
use arrow::datatypes::{DataType, Field};
use parquet::file::properties::WriterProperties;
use tenparsec::release::*;

use super::files::*;

fn refusal(path: &Path, overwrite: bool) -> String {
    let error = ReleaseFolder::open(path, overwrite).expect_err("the folder must be refused");
    assert_eq!(error.exit_code(), 1);
    error.to_string()
}

/// A part of 50 rows with a sensible record.
fn make_part(folder: &ReleaseFolder, index: u64) -> PartRecord {
    let inputs = tempfile::tempdir().unwrap();
    let path =
        write(&inputs.path().join("in.parquet"), &plain(50, index as i64), 50, WriterProperties::builder().build());
    let source = open(&path);
    let field = Arc::new(Field::new("new", DataType::Float32, true));
    let layout = Arc::new(Layout::new(&source, &[field], &[], PassThrough::Copied).unwrap());
    let mut part =
        PartWriter::create(&folder.parts().unwrap(), &format!("part-{index:05}.parquet"), &layout, 0).unwrap();
    let mut encoder = layout.encoder().unwrap();
    encoder.write(&[Arc::new(Float32Array::from(vec![0.5; 50])) as ArrayRef]).unwrap();
    part.append_spliced(&source, 0, encoder.finish().unwrap()).unwrap();
    part.finish().unwrap()
}

fn make_release(path: &Path) -> Manifest {
    let folder = ReleaseFolder::open(path, false).unwrap().folder;
    let mut manifest = Manifest::new("Lantern Ridge 2", "00ff");
    manifest.parts = vec![make_part(&folder, 0), make_part(&folder, 1)];
    let tables = folder.subfolder("tables").unwrap();
    write_whole(&tables.join("cuts.csv"), b"cut,rows\n").unwrap();
    write_whole(&path.join("plan.toml"), b"").unwrap();
    manifest.write(path).unwrap();
    manifest
}

fn files_below(path: &Path) -> Vec<String> {
    let mut found = Vec::new();
    let mut folders = vec![path.to_path_buf()];
    while let Some(folder) = folders.pop() {
        for item in fs::read_dir(folder).unwrap() {
            let item = item.unwrap().path();
            if item.is_dir() {
                folders.push(item);
            } else {
                found.push(item.strip_prefix(path).unwrap().to_string_lossy().into_owned());
            }
        }
    }
    found.sort();
    found
}

#[test]
fn a_new_or_empty_folder_is_taken() {
    let dir = tempfile::tempdir().unwrap();
    let deep = dir.path().join("a/b/release");
    for _ in 0..2 {
        let opened = ReleaseFolder::open(&deep, false).unwrap();
        assert_eq!(opened.state, State::Fresh);
        assert_eq!(files_below(dir.path()), [""; 0]);
        opened.folder.parts().unwrap(); // an empty folder of ours is still a fresh release
    }
}

#[test]
fn what_is_not_a_release_is_refused_and_untouched_even_with_overwrite() {
    let dir = tempfile::tempdir().unwrap();
    let file = dir.path().join("file");
    fs::write(&file, "x").unwrap();
    assert!(refusal(&file, true).contains("is a file"));
    let foreign = dir.path().join("foreign");
    fs::create_dir(&foreign).unwrap();
    fs::write(foreign.join("thesis.txt"), "x").unwrap();
    for overwrite in [false, true] {
        assert!(refusal(&foreign, overwrite).contains("it holds `thesis.txt`"));
    }
    fs::write(foreign.join("manifest.json"), r#"{"format": "something else", "revision": 1}"#).unwrap();
    fs::write(foreign.join("ledger.jsonl"), "not ours\n").unwrap();
    assert!(refusal(&foreign, true).contains("its format is `something else`"));
    assert_eq!(files_below(&foreign), ["ledger.jsonl", "manifest.json", "thesis.txt"]);
    let missing_parent = file.join("release");
    assert!(!refusal(&missing_parent, false).is_empty());
}

#[test]
fn overwrite_removes_the_old_release_and_nothing_else() {
    let dir = tempfile::tempdir().unwrap();
    let path = dir.path().join("release");
    make_release(&path);
    assert!(refusal(&path, false).contains("complete release"));
    fs::write(path.join("notes.txt"), "mine").unwrap();
    fs::write(path.join("catalogue/part-00007.parquet.tmp"), "left over").unwrap();
    fs::write(path.join("catalogue/readme"), "mine").unwrap();
    fs::write(path.join("catalogue/stray.parquet"), "x").unwrap();
    let before = files_below(&path);
    assert!(refusal(&path, true).contains("stray.parquet"));
    assert_eq!(files_below(&path), before, "a refusal removes nothing");
    fs::remove_file(path.join("catalogue/stray.parquet")).unwrap();
    let opened = ReleaseFolder::open(&path, true).unwrap();
    assert_eq!(opened.state, State::Fresh);
    assert_eq!(files_below(&path), ["catalogue/readme", "notes.txt"]);
    let kept: Vec<_> = opened.kept.iter().map(|path| path.to_string_lossy().into_owned()).collect();
    assert_eq!(kept, ["catalogue/readme", "notes.txt"]);
}

#[test]
fn an_interrupted_removal_is_finished() {
    let dir = tempfile::tempdir().unwrap();
    let path = dir.path().join("release");
    make_release(&path);
    // what a crash after the first step of a removal leaves
    fs::rename(path.join("manifest.json"), path.join("superseded.json")).unwrap();
    fs::remove_file(path.join("catalogue/part-00000.parquet")).unwrap();
    let opened = ReleaseFolder::open(&path, false).unwrap();
    assert_eq!((opened.state, files_below(&path)), (State::Fresh, vec![]));
}

#[test]
fn a_manifest_that_points_outside_removes_nothing_there() {
    let dir = tempfile::tempdir().unwrap();
    let path = dir.path().join("release");
    let mut manifest = make_release(&path);
    fs::write(dir.path().join("precious"), "x").unwrap();
    manifest.parts[0].file = "../precious".into();
    manifest.tables = vec![FileRecord {
        file: dir.path().join("precious").to_string_lossy().into(),
        rows: 0,
        bytes: 1,
        blake3: String::new(),
    }];
    manifest.write(&path).unwrap();
    let text = refusal(&path, true);
    assert!(text.contains("part-00000.parquet"), "the part is no longer named, so it is foreign: {text}");
    fs::remove_file(path.join("catalogue/part-00000.parquet")).unwrap();
    ReleaseFolder::open(&path, true).unwrap();
    assert!(dir.path().join("precious").exists());
}

#[test]
fn a_ledger_continues_and_tolerates_a_torn_last_line() {
    let dir = tempfile::tempdir().unwrap();
    let path = dir.path().join("release");
    let header = LedgerHeader::new("plan", "catalogue", 4);
    let folder = ReleaseFolder::open(&path, false).unwrap().folder;
    let mut ledger = Ledger::create(&path, &header).unwrap();
    let details = serde_json::json!({ "rows": u64::MAX, "bits": 0.1f64.to_bits() });
    let entries: Vec<LedgerEntry> =
        (0..3).map(|index| LedgerEntry { index, part: make_part(&folder, index), details: details.clone() }).collect();
    for entry in &entries {
        ledger.append(entry).unwrap();
    }
    let second = Ledger::resume(&path, &header).unwrap_err().to_string();
    assert!(second.contains("Another build"), "{second}");
    drop(ledger);
    assert_eq!(ReleaseFolder::open(&path, false).unwrap().state, State::Unfinished);

    let file = path.join("ledger.jsonl");
    let whole = fs::read(&file).unwrap();
    let last = whole[..whole.len() - 1].iter().rposition(|byte| *byte == b'\n').unwrap() + 1;
    for cut in [last + 1, last + 40, whole.len() - 1] {
        fs::write(&file, &whole[..cut]).unwrap();
        let mut resumed = Ledger::resume(&path, &header).unwrap();
        assert_eq!(resumed.entries, entries[..2], "cut at {cut}");
        assert!(resumed.redo.is_empty());
        resumed.ledger.append(&entries[2]).unwrap();
        assert_eq!(fs::read(&file).unwrap(), whole);
    }

    // parts that are gone, cut short or unreadable are done again
    fs::remove_file(path.join("catalogue/part-00000.parquet")).unwrap();
    let part = path.join("catalogue/part-00001.parquet");
    let bytes = fs::read(&part).unwrap();
    fs::write(&part, &bytes[..bytes.len() - 9]).unwrap();
    let part = path.join("catalogue/part-00002.parquet");
    let mut bytes = fs::read(&part).unwrap();
    let end = bytes.len();
    bytes[end - 100..].fill(0);
    fs::write(&part, &bytes).unwrap();
    let resumed = Ledger::resume(&path, &header).unwrap();
    assert_eq!((resumed.entries.len(), resumed.redo.len()), (0, 3), "{:?}", resumed.redo);
    assert!(resumed.redo[0].contains("catalogue/part-00000.parquet is built again"), "{:?}", resumed.redo);
    // the part is built again and its second line holds
    let mut ledger = resumed.ledger;
    let again = LedgerEntry { index: 0, part: make_part(&folder, 0), details: serde_json::json!("again") };
    ledger.append(&again).unwrap();
    drop(ledger);
    let resumed = Ledger::resume(&path, &header).unwrap();
    assert_eq!(resumed.entries, [again]);
    resumed.ledger.remove().unwrap();
    assert!(!file.exists());
}

#[test]
fn a_ledger_of_something_else_is_not_continued() {
    let dir = tempfile::tempdir().unwrap();
    let header = LedgerHeader::new("plan", "catalogue", 4);
    drop(Ledger::create(dir.path(), &header).unwrap());
    let text = |header: &LedgerHeader| Ledger::resume(dir.path(), header).unwrap_err().to_string();
    assert!(text(&LedgerHeader::new("other", "catalogue", 4)).contains("from another plan"));
    assert!(text(&LedgerHeader::new("plan", "other", 4)).contains("another state of the catalogue"));
    assert!(text(&LedgerHeader::new("plan", "catalogue", 5)).contains("parts of another size"));
    let mut old = header.clone();
    old.tenparsec_version = "0.0.9".into();
    assert!(text(&old).contains("--overwrite"));
    assert!(Ledger::create(dir.path(), &header).is_err(), "a ledger is never replaced");
    let opened = ReleaseFolder::open(dir.path(), true).unwrap();
    assert_eq!((opened.state, files_below(dir.path())), (State::Fresh, vec![]));
}

#[test]
fn a_torn_header_means_that_nothing_was_done() {
    let dir = tempfile::tempdir().unwrap();
    let header = LedgerHeader::new("plan", "catalogue", 4);
    drop(Ledger::create(dir.path(), &header).unwrap());
    let file = dir.path().join("ledger.jsonl");
    let line = fs::read(&file).unwrap();
    for cut in [0, 5, 30, line.len() - 1] {
        fs::write(&file, &line[..cut]).unwrap();
        assert_eq!(ReleaseFolder::open(dir.path(), false).unwrap().state, State::Unfinished, "cut at {cut}");
        let resumed = Ledger::resume(dir.path(), &header).unwrap();
        assert!(resumed.entries.is_empty());
        assert_eq!(fs::read(&file).unwrap(), line);
    }
    fs::write(&file, [&line[..], b"{\"damaged\":1}\n"].concat()).unwrap();
    let text = Ledger::resume(dir.path(), &header).unwrap_err().to_string();
    assert!(text.contains("Line 2 is damaged"), "{text}");
}

#[test]
fn a_manifest_comes_back_as_it_was() {
    let dir = tempfile::tempdir().unwrap();
    let mut manifest = make_release(dir.path());
    manifest.cuts = serde_json::json!([{ "name": "precise", "fails": 12 }]);
    manifest.columns.push(ColumnRecord {
        name: "modulus_p50".into(),
        kind: "float".into(),
        unit: "mag".into(),
        ucd: "phot.mag.distMod".into(),
        description: String::new(),
        method: String::new(),
        origin: Origin::Computed,
        recipe: "ab12".into(),
    });
    manifest.write(dir.path()).unwrap();
    assert_eq!(Manifest::read(dir.path()).unwrap(), manifest);
    let text = fs::read_to_string(dir.path().join("manifest.json")).unwrap();
    assert_eq!(text, manifest.to_json().unwrap());
    assert!(text.starts_with("{\n  \"format\": \"tenparsec release\",\n  \"revision\": 1,\n"));
    let schema = serde_json::to_value(schemars::schema_for!(Manifest)).unwrap();
    let required = schema["required"].as_array().unwrap();
    for key in ["parts", "inputs", "cuts", "rows_dropped"] {
        assert!(required.iter().any(|name| name == key), "{key}");
    }
    fs::write(dir.path().join("manifest.json"), text.replace("\"revision\": 1", "\"revision\": 7")).unwrap();
    assert!(Manifest::read(dir.path()).unwrap_err().to_string().contains("use a newer tenparsec"));
    assert!(Manifest::read(&dir.path().join("none")).unwrap_err().to_string().contains("no such file"));
}

/// `write_whole` into a folder that is not there fails with the place and leaves nothing; permission tests need a user
/// who is not root, and are skipped for root.
#[test]
fn failures_to_write_name_the_file() {
    let dir = tempfile::tempdir().unwrap();
    let text = write_whole(&dir.path().join("no/such/file.json"), b"x").unwrap_err().to_string();
    assert!(text.contains("no/such/file.json") && text.contains("cannot be written"), "{text}");
    let target = dir.path().join("x.json");
    write_whole(&target, b"old").unwrap();
    write_whole(&target, b"new").unwrap();
    assert_eq!(fs::read(&target).unwrap(), b"new");
    assert_eq!(files_below(dir.path()), ["x.json"]);

    use std::os::unix::fs::PermissionsExt;
    let closed = dir.path().join("closed");
    fs::create_dir(&closed).unwrap();
    fs::set_permissions(&closed, fs::Permissions::from_mode(0o555)).unwrap();
    if fs::write(closed.join("probe"), "x").is_ok() {
        eprintln!("skipped: this user may write into read-only folders (root)");
        return;
    }
    let text = refusal(&closed, false);
    assert!(text.contains("closed") && text.contains("permission denied"), "{text}");
}

/// The proc file system takes no new files from anyone, root included.
#[test]
fn an_output_on_a_file_system_that_takes_no_files_fails_early() {
    if !Path::new("/proc/self").exists() {
        eprintln!("skipped: no /proc here");
        return;
    }
    let text = refusal(Path::new("/proc/tenparsec-release"), false);
    assert!(text.contains("/proc/tenparsec-release") && text.contains("cannot be made"), "{text}");
}
