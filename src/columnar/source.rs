//! Opens a Parquet file without trusting it.
//!
//! Every claim of the footer that later code relies on is checked here, once: magic bytes at both ends, footer length,
//! encryption, row counts that agree with each other, column chunks inside the file. A file that passes can still hold
//! damaged pages; those are found when they are decoded (see `catalogue::read`), never by a panic.
//!
//! Columns are read with the types that Parquet itself states. The Arrow schema that some writers embed is used for
//! field metadata (unit, UCD, description) and carried into outputs, but not for types: so a text column is `Utf8`
//! whether its writer held it as dictionary, large or view strings, and two files agree when their Parquet types do.
//!
//! Footers stay in memory as long as the [`SourceFile`] lives; page indexes are read for one row group at a time.

use std::collections::{HashMap, HashSet};
use std::fs::File;
use std::path::{Path, PathBuf};
use std::sync::Arc;

use arrow::datatypes::{Field, Fields, Schema, SchemaRef};
use parquet::arrow::arrow_reader::{ArrowReaderMetadata, ArrowReaderOptions};
use parquet::file::metadata::{
    PageIndexPolicy, ParquetMetaData, ParquetMetaDataOptions, ParquetMetaDataReader, RowGroupMetaData,
};
use parquet::file::page_index::column_index::ColumnIndexMetaData;
use parquet::file::page_index::offset_index::OffsetIndexMetaData;

use super::compact::Compact;
use super::guard::{guard, io_reason, parquet_error};
pub use super::pages::check_pages;
pub use super::pread::{Pread, PreadFrom};
use crate::error::{Error, Result};

const MAGIC: &[u8; 4] = b"PAR1";
const MAGIC_ENCRYPTED: &[u8; 4] = b"PARE";
/// Magic, footer length, magic.
const SMALLEST: u64 = 12;
/// Number of `encryption_algorithm` in `FileMetaData` (parquet.thrift).
const ENCRYPTION_FIELD: i16 = 8;

/// An opened and checked Parquet file.
#[derive(Debug, Clone)]
pub struct SourceFile {
    /// Where it is.
    pub path: PathBuf,
    /// How reports and manifests name it: relative to the plan where possible, so that it does not depend on the machine.
    pub shown: String,
    /// Length in bytes.
    pub bytes: u64,
    /// Rows in all row groups.
    pub rows: u64,
    /// Hex BLAKE3 over the file length (u64, little endian) and the footer bytes. It names the file's layout and its
    /// statistics, not each data byte: cheap for terabytes, and different after any ordinary rewrite of the file.
    pub fingerprint: String,
    reader: Pread,
    arrow: ArrowReaderMetadata,
    schema: SchemaRef,
    embedded: SchemaRef,
}

/// Page indexes of one row group, by leaf column; `None` where the file has none or it does not fit the chunk.
#[derive(Debug, Default)]
pub struct PageIndexes {
    /// Minima and maxima by page.
    pub columns: Vec<Option<ColumnIndexMetaData>>,
    /// Places of the pages.
    pub offsets: Vec<Option<OffsetIndexMetaData>>,
}

impl SourceFile {
    /// Opens `path` and checks its footer; `shown` is its name in reports.
    ///
    /// Errors (each one sentence, with the file): missing or unreadable, empty, no Parquet, cut off, damaged footer,
    /// encrypted, column chunks outside the file, row counts that disagree, two columns with one name.
    pub fn open(path: &Path, shown: impl Into<String>) -> Result<Self> {
        let shown = shown.into();
        Self::open_inner(path, &shown).map_err(|error| error.in_file(&shown))
    }

    fn open_inner(path: &Path, shown: &str) -> Result<Self> {
        let file = File::open(path)
            .map_err(|error| Error::failed(format!("The file cannot be read: {}.", io_reason(&error))))?;
        if file.metadata().is_ok_and(|m| m.is_dir()) {
            return Err(Error::failed("This is a folder, not a Parquet file."));
        }
        let reader = Pread::new(file)
            .map_err(|error| Error::failed(format!("The file cannot be read: {}.", io_reason(&error))))?;
        let footer = read_footer(&reader)?;
        let bytes = parquet::file::reader::Length::len(&reader);
        let mut hasher = blake3::Hasher::new();
        hasher.update(&bytes.to_le_bytes()).update(&footer);
        let fingerprint = hasher.finalize().to_hex().to_string();

        let data_end = bytes - 8 - footer.len() as u64;
        let metadata = guard(|| {
            let options = ParquetMetaDataOptions::new().with_encoding_stats_as_mask(false);
            let metadata =
                ParquetMetaDataReader::decode_metadata_with_options(&footer, Some(&options)).map_err(|error| {
                    Error::failed(format!("The footer is damaged ({error}); copy or write the file again."))
                })?;
            without_zero_dictionary_offsets(metadata)
        })?;
        let rows = check_claims(&metadata, data_end)?;
        let metadata = Arc::new(metadata);
        let (arrow, schema, embedded) = guard(|| schemas(&metadata))?;
        check_names(&schema)?;
        Ok(Self {
            path: path.to_path_buf(),
            shown: shown.to_owned(),
            bytes,
            rows,
            fingerprint,
            reader,
            arrow,
            schema,
            embedded,
        })
    }

    /// Footer as the parquet crate holds it: row groups, chunk statistics, schema.
    pub fn metadata(&self) -> &Arc<ParquetMetaData> {
        self.arrow.metadata()
    }

    /// Footer and types in the form that Arrow readers take.
    pub fn arrow_metadata(&self) -> &ArrowReaderMetadata {
        &self.arrow
    }

    /// Root columns with the types they are read as, and the field metadata of the embedded Arrow schema.
    pub fn schema(&self) -> &SchemaRef {
        &self.schema
    }

    /// Arrow schema as the writer embedded it; the same as [`Self::schema`] where there is none.
    pub fn embedded_schema(&self) -> &SchemaRef {
        &self.embedded
    }

    /// The bytes of the file.
    pub fn reader(&self) -> &Pread {
        &self.reader
    }

    /// Number of row groups.
    pub fn row_groups(&self) -> usize {
        self.metadata().num_row_groups()
    }

    /// Rows of a row group (checked to be non-negative when the file was opened).
    pub fn row_group_rows(&self, row_group: usize) -> u64 {
        self.metadata().row_group(row_group).num_rows() as u64
    }

    /// Position of the root column called `name`.
    pub fn root(&self, name: &str) -> Option<usize> {
        self.schema.index_of(name).ok()
    }

    /// Page indexes of one row group.
    ///
    /// An index is an accelerator, and a release is right without it: one that cannot be decoded, or whose pages lie
    /// outside their chunk, is left out rather than copied or fatal.
    pub fn page_indexes(&self, row_group: usize) -> PageIndexes {
        let group = self.metadata().row_group(row_group);
        let leaves = group.num_columns();
        let mut found = PageIndexes { columns: vec![None; leaves], offsets: vec![None; leaves] };
        if !group.columns().iter().any(|c| c.column_index_range().is_some() || c.offset_index_range().is_some()) {
            return found;
        }
        let one_group = ParquetMetaData::new(self.metadata().file_metadata().clone(), vec![group.clone()]);
        let decoded = guard(|| {
            ParquetMetaDataReader::new_with_metadata(one_group)
                .with_page_index_policy(PageIndexPolicy::Optional)
                .read_page_index_and_finish(&self.reader)
                .map_err(parquet_error)
        });
        let Ok((_, Some(index))) = decoded else { return found };
        for leaf in 0..leaves {
            use parquet::file::metadata::page_index::PageIndexProvider;
            let (start, len) = group.column(leaf).byte_range();
            let Some(offsets) = index.offset_index(0, leaf) else { continue };
            let fits = offsets.page_locations.iter().all(|page| {
                let inside = u64::try_from(page.offset).ok().and_then(|o| o.checked_sub(start));
                let size = u64::try_from(page.compressed_page_size).ok();
                inside.zip(size).is_some_and(|(o, s)| o.checked_add(s).is_some_and(|end| end <= len))
            });
            if fits {
                found.offsets[leaf] = Some(offsets.clone());
                found.columns[leaf] = index.column_index(0, leaf).cloned();
            }
        }
        found
    }
}

/// Unit (VOUnits text) of a column, from its Arrow field metadata; empty metadata count as absent.
pub fn unit(field: &Field) -> Option<&str> {
    field.metadata().get("unit").map(|text| text.trim()).filter(|text| !text.is_empty())
}

/// UCD1+ words of a column, from its Arrow field metadata.
pub fn ucd(field: &Field) -> Option<&str> {
    field.metadata().get("ucd").map(|text| text.trim()).filter(|text| !text.is_empty())
}

/// Description of a column, from its Arrow field metadata.
pub fn description(field: &Field) -> Option<&str> {
    field.metadata().get("description").map(|text| text.trim()).filter(|text| !text.is_empty())
}

/// Checks both ends of the file and returns the footer's bytes.
fn read_footer(reader: &Pread) -> Result<Vec<u8>> {
    let len = parquet::file::reader::Length::len(reader);
    let io = |error: std::io::Error| Error::failed(format!("The file cannot be read: {}.", io_reason(&error)));
    if len == 0 {
        return Err(Error::failed("The file is empty (0 bytes); copy or write it again."));
    }
    if len < SMALLEST {
        return Err(Error::failed(format!("Not a Parquet file: {len} bytes are too few for one.")));
    }
    let head = reader.bytes(0, 4).map_err(io)?;
    let tail = reader.bytes(len - 8, 8).map_err(io)?;
    let (length, end) = tail.split_at(4);
    if head == MAGIC_ENCRYPTED || end == MAGIC_ENCRYPTED {
        return Err(encrypted());
    }
    match (head == MAGIC, end == MAGIC) {
        (true, true) => {}
        (true, false) => {
            return Err(Error::failed(
                "The file starts as Parquet but does not end as one: it was cut off while being written or copied.",
            ));
        }
        (false, true) => {
            return Err(Error::failed("The file ends as Parquet but does not start as one (no PAR1): it is damaged."));
        }
        (false, false) => return Err(Error::failed("Not a Parquet file: it neither starts nor ends with PAR1.")),
    }
    let footer_len = u64::from(u32::from_le_bytes([length[0], length[1], length[2], length[3]]));
    if footer_len + SMALLEST > len {
        return Err(Error::failed(format!(
            "The footer claims {footer_len} bytes, but the file has {len}: it is damaged or was cut off."
        )));
    }
    let footer = reader.bytes(len - 8 - footer_len, footer_len as usize).map_err(io)?;
    let (fields, _) = Compact::new(&footer).structure().ok_or_else(|| {
        Error::failed("The footer is damaged: its bytes form no Parquet metadata; copy or write the file again.")
    })?;
    if fields.iter().any(|field| field.id == ENCRYPTION_FIELD) {
        return Err(encrypted());
    }
    Ok(footer)
}

fn encrypted() -> Error {
    Error::failed("The file is encrypted, which is not supported; decrypt it first.")
}

/// Some writers state 0 where they mean "no dictionary page", which would make a chunk start at the file's first byte.
fn without_zero_dictionary_offsets(metadata: ParquetMetaData) -> Result<ParquetMetaData> {
    let wrong = |group: &RowGroupMetaData| {
        group.columns().iter().any(|c| c.dictionary_page_offset().is_some_and(|d| d <= 0 || d >= c.data_page_offset()))
    };
    if !metadata.row_groups().iter().any(wrong) {
        return Ok(metadata);
    }
    let mut builder = metadata.into_builder();
    let groups = builder
        .take_row_groups()
        .into_iter()
        .map(|mut group| {
            for chunk in group.columns_mut() {
                if chunk.dictionary_page_offset().is_some_and(|d| d <= 0 || d >= chunk.data_page_offset()) {
                    *chunk =
                        chunk.clone().into_builder().set_dictionary_page_offset(None).build().map_err(parquet_error)?;
                }
            }
            Ok(group)
        })
        .collect::<Result<Vec<_>>>()?;
    Ok(builder.set_row_groups(groups).build())
}

/// Row counts that agree and chunks that lie before the footer; returns the number of rows.
fn check_claims(metadata: &ParquetMetaData, data_end: u64) -> Result<u64> {
    let mut total = 0u64;
    for (number, group) in metadata.row_groups().iter().enumerate() {
        let fail = |text: String| Err(Error::failed(format!("The footer is damaged: {text}.")).in_row_group(number));
        let Ok(rows) = u64::try_from(group.num_rows()) else {
            return fail(format!("it claims {} rows", group.num_rows()));
        };
        total = match total.checked_add(rows) {
            Some(sum) => sum,
            None => return fail("its row counts overflow".into()),
        };
        for chunk in group.columns() {
            let name = chunk.column_path().string();
            let fail = |text: String| fail(text).map_err(|error| error.in_column(name.clone()));
            if chunk.file_path().is_some_and(|path| !path.is_empty()) {
                return Err(Error::failed("The column is stored in another file, which is not supported.")
                    .in_row_group(number)
                    .in_column(name));
            }
            let flat = chunk.column_descr().max_rep_level() == 0;
            let values = u64::try_from(chunk.num_values()).unwrap_or(u64::MAX);
            if values == u64::MAX || (flat && values != rows) || values < rows {
                return fail(format!("the column claims {} values for {rows} rows", chunk.num_values()));
            }
            if rows == 0 {
                continue; // never read, and writers disagree on what offsets an empty chunk has
            }
            let data = chunk.data_page_offset();
            let start = u64::try_from(chunk.dictionary_page_offset().unwrap_or(data)).ok();
            let len = u64::try_from(chunk.compressed_size()).ok();
            let end = start.zip(len).and_then(|(start, len)| start.checked_add(len));
            let data = u64::try_from(data).ok();
            let inside = start.zip(end).zip(data).is_some_and(|((start, end), data)| {
                start >= MAGIC.len() as u64 && end <= data_end && start <= data && data < end
            });
            if !inside {
                return fail(format!(
                    "the column's data ({} bytes from offset {}) do not lie inside the file",
                    chunk.compressed_size(),
                    chunk.dictionary_page_offset().unwrap_or(chunk.data_page_offset())
                ));
            }
            if chunk.uncompressed_size() < 0 {
                return fail("the column claims a negative size".into());
            }
        }
    }
    let claimed = metadata.file_metadata().num_rows();
    if u64::try_from(claimed).ok() != Some(total) {
        return Err(Error::failed(format!(
            "The footer is damaged: it claims {claimed} rows, but its row groups have {total}."
        )));
    }
    Ok(total)
}

/// Reader metadata with Parquet's own types; the schema to show (those types, embedded field metadata); the embedded one.
fn schemas(metadata: &Arc<ParquetMetaData>) -> Result<(ArrowReaderMetadata, SchemaRef, SchemaRef)> {
    let own = ArrowReaderOptions::new().with_skip_arrow_metadata(true);
    let arrow = ArrowReaderMetadata::try_new(metadata.clone(), own).map_err(parquet_error)?;
    // an embedded schema that contradicts the file is a defect of its writer that harms nothing here
    let embedded =
        guard(|| ArrowReaderMetadata::try_new(metadata.clone(), ArrowReaderOptions::new()).map_err(parquet_error))
            .map_or_else(|_| arrow.schema().clone(), |hinted| hinted.schema().clone());
    let notes: HashMap<&str, _> = embedded.fields().iter().map(|f| (f.name().as_str(), f.metadata())).collect();
    let fields: Fields = arrow
        .schema()
        .fields()
        .iter()
        .map(|field| match notes.get(field.name().as_str()) {
            Some(metadata) => Arc::new(field.as_ref().clone().with_metadata((*metadata).clone())),
            None => field.clone(),
        })
        .collect();
    let schema = Arc::new(Schema::new_with_metadata(fields, embedded.metadata().clone()));
    Ok((arrow, schema, embedded))
}

/// Columns are addressed by name, so names must be there and differ.
fn check_names(schema: &Schema) -> Result<()> {
    if schema.fields().is_empty() {
        return Err(Error::failed("The file has no columns."));
    }
    let mut seen = HashSet::new();
    for field in schema.fields() {
        if !seen.insert(field.name()) {
            return Err(Error::failed("Two columns have this name; rename one of them.").in_column(field.name()));
        }
    }
    Ok(())
}
