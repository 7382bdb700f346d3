//! The rules of the house: imports run one way, pure folders stay pure, `unsafe` lives in one file, schemas are current.

use std::collections::BTreeMap;
use std::fs;
use std::path::{Path, PathBuf};

/// Folders by height. A folder may use what stands strictly lower, itself, and `error`.
const HEIGHTS: &[(&str, u32)] = &[
    ("numerics", 0),
    ("frame", 0),
    ("sky", 0),
    ("posterior", 1),
    ("calibration", 2),
    ("plan", 3),
    ("columnar", 4),
    ("catalogue", 5),
    ("verdicts", 5),
    ("release", 5),
    ("tables", 5),
    ("mock", 5),
    ("engine", 6),
    ("cli", 7),
];

const PURE: &[&str] = &["numerics", "frame", "sky", "posterior", "calibration"];

fn sources() -> Vec<(PathBuf, String)> {
    fn walk(folder: &Path, found: &mut Vec<(PathBuf, String)>) {
        for entry in fs::read_dir(folder).unwrap() {
            let path = entry.unwrap().path();
            if path.is_dir() {
                walk(&path, found);
            } else if path.extension().is_some_and(|e| e == "rs") {
                let text = fs::read_to_string(&path).unwrap();
                found.push((path, text));
            }
        }
    }
    let mut found = Vec::new();
    walk(&Path::new(env!("CARGO_MANIFEST_DIR")).join("src"), &mut found);
    found.sort();
    assert!(found.len() > 40, "the sources were not found");
    found
}

/// First folder below `src` of a file, or the file's own stem.
fn folder_of(path: &Path) -> String {
    let inner = path.strip_prefix(Path::new(env!("CARGO_MANIFEST_DIR")).join("src")).unwrap();
    inner.iter().next().unwrap().to_string_lossy().trim_end_matches(".rs").to_owned()
}

/// Modules named after `crate::` in a line of code, including those in a braced list.
fn modules_used(line: &str) -> Vec<String> {
    let mut found = Vec::new();
    for rest in line.split("crate::").skip(1) {
        let list = match rest.strip_prefix('{') {
            Some(list) => list.split(',').map(str::to_owned).collect::<Vec<_>>(),
            None => vec![rest.to_owned()],
        };
        for item in list {
            let name: String = item.trim().chars().take_while(|c| c.is_alphanumeric() || *c == '_').collect();
            found.push(name);
        }
    }
    found
}

fn code_of(line: &str) -> &str {
    line.split("//").next().unwrap_or_default()
}

#[test]
fn imports_run_one_way() {
    let heights: BTreeMap<&str, u32> = HEIGHTS.iter().copied().collect();
    let mut upward = Vec::new();
    for (path, text) in sources() {
        let from = folder_of(&path);
        let Some(own) = heights.get(from.as_str()) else {
            assert!(["lib", "main", "error"].contains(&from.as_str()), "{from} has no height; give it one here");
            continue;
        };
        for (number, line) in text.lines().enumerate() {
            for to in modules_used(code_of(line)) {
                if to == from || to == "error" || to == "Error" || to == "Result" {
                    continue;
                }
                let height =
                    heights.get(to.as_str()).unwrap_or_else(|| panic!("{}: unknown module {to}", path.display()));
                if height >= own {
                    upward.push(format!("{}:{}: {from} uses {to}", path.display(), number + 1));
                }
            }
        }
    }
    assert!(upward.is_empty(), "{}", upward.join("\n"));
}

#[test]
fn pure_folders_know_no_files_and_no_arrow() {
    let outside = [
        "std::fs",
        "std::io",
        "std::net",
        "std::process",
        "std::env",
        "std::time",
        "arrow::",
        "parquet::",
        "polars",
        "println!",
        "eprintln!",
    ];
    for (path, text) in sources() {
        if PURE.contains(&folder_of(&path).as_str()) {
            for (number, line) in text.lines().enumerate() {
                for word in outside {
                    assert!(!code_of(line).contains(word), "{}:{}: {word}", path.display(), number + 1);
                }
            }
        }
    }
}

#[test]
fn unsafe_lives_in_the_bridge_alone() {
    for (path, text) in sources() {
        if path.ends_with("columnar/bridge.rs") {
            continue;
        }
        for (number, line) in text.lines().enumerate() {
            let words = code_of(line).split(|c: char| !c.is_alphanumeric() && c != '_');
            assert!(!words.into_iter().any(|word| word == "unsafe"), "{}:{}", path.display(), number + 1);
        }
    }
}

#[test]
fn every_file_says_what_it_is_for() {
    for (path, text) in sources() {
        assert!(text.starts_with("//!"), "{} has no header", path.display());
    }
}

#[test]
fn schemas_are_current() {
    let folder = Path::new(env!("CARGO_MANIFEST_DIR")).join("schemas");
    for (name, text) in tenparsec::engine::schemas::all() {
        let path = folder.join(name);
        if std::env::var_os("TENPARSEC_WRITE_SCHEMAS").is_some() {
            fs::write(&path, &text).unwrap();
        }
        let stored = fs::read_to_string(&path).unwrap_or_default();
        assert!(
            stored == text,
            "schemas/{name} is not what the types say; run the tests once with TENPARSEC_WRITE_SCHEMAS=1 and look at the change"
        );
    }
}

#[test]
fn the_import_reader_sees_what_it_should() {
    assert_eq!(modules_used("use crate::{plan, engine::build};"), ["plan", "engine"]);
    assert_eq!(modules_used("let x = crate::tables::f(crate::release::y);"), ["tables", "release"]);
}
