//! stub
use crate::error::Result;
pub struct Options { pub out: std::path::PathBuf, pub rows: u64, pub files: usize, pub seed: u64, pub row_group_rows: usize, pub truth: bool, pub threads: usize }
pub struct Summary { pub bytes: u64 }
pub fn write(_:&Options,_: &(dyn Fn(u64)+Sync))->Result<Summary>{todo!()}
