//! The output folder: parts, manifest, ledger.
//!
//! `layout` decides the columns and encodings of the parts of one input file, `encode` turns arrays into column
//! chunks on worker threads, `part` writes a part file (copying the input's chunks where it can, `splice`), `folder`
//! guards the folder, `ledger` remembers finished parts while a build runs, `manifest` describes the finished release.
//! Whatever appears under its final name is complete and synced (`whole`).

mod encode;
mod folder;
mod layout;
mod ledger;
mod manifest;
mod part;
mod splice;
mod whole;

pub use encode::{ENCODE_ROWS, EncodedPiece, PieceEncoder};
pub use folder::{Opened, ReleaseFolder, State};
pub use layout::{Layout, PassThrough, computed_field, created_by};
pub use ledger::{Ledger, LedgerEntry, LedgerHeader, Resumed};
pub use manifest::{ColumnRecord, FileRecord, InputRecord, Manifest, Origin, PartRecord};
pub use part::PartWriter;
pub use whole::write_whole;
