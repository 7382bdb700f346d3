//! Columns, types and encodings of the parts made from one input file.
//!
//! The output's Parquet schema is the input's own type nodes followed by the computed columns, so that the input's
//! column chunks fit undecoded. Parts of files that differ in nullability or in nested names may differ likewise; every
//! reader of a set of Parquet files accepts that.
//!
//! Passed-through columns that are encoded again (rows were dropped, or the row group is huge) keep their codec, and
//! dictionary, delta or byte-stream-split encoding as the input used it.

use std::collections::{HashMap, HashSet};
use std::io::Sink;
use std::sync::Arc;

use arrow::array::new_empty_array;
use arrow::datatypes::{DataType, Field, FieldRef, Fields, Schema, SchemaRef};
use parquet::arrow::arrow_writer::{ArrowRowGroupWriterFactory, compute_leaves};
use parquet::arrow::{ARROW_SCHEMA_META_KEY, ArrowSchemaConverter, encode_arrow_schema};
use parquet::basic::{Compression, ConvertedType, Encoding, PageType, Type as Physical, ZstdLevel};
use parquet::file::metadata::{ColumnChunkMetaData, KeyValue, SortingColumn};
use parquet::file::properties::{EnabledStatistics, WriterProperties, WriterPropertiesBuilder, WriterPropertiesPtr};
use parquet::file::writer::SerializedFileWriter;
use parquet::schema::types::{ColumnDescriptor, ColumnPath, SchemaDescriptor, Type, TypePtr};

use super::encode::PieceEncoder;
use crate::columnar::guard::{guard, parquet_error};
use crate::columnar::source::SourceFile;
use crate::error::{Error, Result};
use crate::frame::{Declared, Type as Stored};

/// Longest page in rows; see the measurement at [`computed_properties`].
const PAGE_ROWS: usize = 65_536;

/// What happens to the input's columns.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum PassThrough {
    /// Every piece is a whole row group and keeps all rows: chunks are copied undecoded. Any type will do.
    Copied,
    /// Some pieces are decoded and encoded again; columns for which that would lose something are refused.
    Encoded,
}

/// How parts made from one input file look; shared by all threads.
#[derive(Debug)]
pub struct Layout {
    pub(super) root: TypePtr,
    pub(super) properties: WriterPropertiesPtr,
    /// Leaf columns taken from the input.
    pub(super) input_leaves: usize,
    pub(super) input: String,
    pub(super) input_fingerprint: String,
    schema: SchemaRef,
    computed: Arc<Shape>,
    all: Option<Arc<Shape>>,
}

/// Columns of an encoder with the factory of their writers.
#[derive(Debug)]
pub(super) struct Shape {
    pub fields: Fields,
    pub factory: ArrowRowGroupWriterFactory,
    /// Leaves that are flat floats: position of the leaf, position of the column.
    pub floats: Vec<(usize, usize)>,
    pub whole_rows: bool,
}

/// `created_by` of every part: name and version only, so that bytes depend on nothing else.
pub fn created_by() -> String {
    concat!("tenparsec version ", env!("CARGO_PKG_VERSION")).to_owned()
}

/// The Arrow field of a computed column: type and nullability, `unit`, `ucd`, `description`, `method` and `extra`
/// (lineage, names of cuts) as field metadata. `double` stores floats in 64 bits.
pub fn computed_field(declared: &Declared, double: bool, extra: &[(&str, &str)]) -> Field {
    let (kind, nullable) = match declared.kind {
        Stored::Float if double => (DataType::Float64, true),
        Stored::Float => (DataType::Float32, true),
        Stored::UInt32 => (DataType::UInt32, false),
        Stored::Boolean => (DataType::Boolean, false),
    };
    let own = [
        ("unit", declared.unit.as_str()),
        ("ucd", &declared.ucd),
        ("description", &declared.description),
        ("method", &declared.method),
    ];
    let pairs = own.into_iter().filter(|(_, value)| !value.is_empty()).chain(extra.iter().copied());
    let metadata: HashMap<String, String> = pairs.map(|(key, value)| (key.to_owned(), value.to_owned())).collect();
    Field::new(&declared.name, kind, nullable).with_metadata(metadata)
}

impl Layout {
    /// Layout of the parts of `source`: its columns, then `computed`; `key_values` go into the footer, replacing
    /// entries of the input with the same key.
    ///
    /// Errors: a computed column with the name of an input column; with [`PassThrough::Encoded`], input columns that
    /// cannot be encoded again without loss (all of them at once).
    pub fn new(
        source: &SourceFile,
        computed: &[FieldRef],
        key_values: &[(String, String)],
        pass_through: PassThrough,
    ) -> Result<Self> {
        let clash = computed.iter().find(|field| source.root(field.name()).is_some());
        if let Some(field) = clash {
            return Err(Error::failed(
                "The catalogue already has a column of this name, which tenparsec computes; rename or leave it out.",
            )
            .in_file(&source.shown)
            .in_column(field.name()));
        }
        guard(|| Self::build(source, computed, key_values, pass_through)).map_err(|error| error.in_file(&source.shown))
    }

    fn build(
        source: &SourceFile,
        computed: &[FieldRef],
        key_values: &[(String, String)],
        pass_through: PassThrough,
    ) -> Result<Self> {
        let footer = source.metadata().file_metadata();
        let input = footer.schema_descr();
        let computed = Fields::from(computed.to_vec());
        let new_nodes = ArrowSchemaConverter::new().convert(&Schema::new(computed.clone())).map_err(parquet_error)?;

        let nodes = input.root_schema().get_fields().iter().chain(new_nodes.root_schema().get_fields());
        let root = group(input.root_schema().name(), nodes.cloned().collect())?;
        // the embedded schema is a hint for Arrow readers: what the input's writer said, and the computed columns
        let hinted = source.embedded_schema();
        let schema = Arc::new(Schema::new_with_metadata(
            hinted.fields().iter().chain(&computed).cloned().collect::<Fields>(),
            hinted.metadata().clone(),
        ));
        let footer_pairs = footer_pairs(footer.key_value_metadata(), &schema, key_values);

        let mut builder = WriterProperties::builder()
            .set_created_by(created_by())
            .set_key_value_metadata(Some(footer_pairs))
            .set_sorting_columns(sorting(source))
            .set_data_page_row_count_limit(PAGE_ROWS)
            .set_statistics_enabled(EnabledStatistics::Page)
            .set_compression(zstd()?);
        for (leaf, column) in input.columns().iter().enumerate() {
            let chunk =
                source.metadata().row_groups().iter().find(|group| group.num_rows() > 0).map(|g| g.column(leaf));
            builder = input_properties(builder, column, chunk)?;
        }
        for column in new_nodes.columns() {
            builder = computed_properties(builder, column)?;
        }
        let properties = Arc::new(builder.build());

        let all = match pass_through {
            PassThrough::Copied => None,
            PassThrough::Encoded => {
                let own = source.arrow_metadata().schema().fields();
                refuse_lossy(input, own)?;
                let fields: Fields = own.iter().chain(&computed).cloned().collect();
                let shape = Shape::new(root.clone(), fields, &properties, true)?;
                shape.try_out()?;
                Some(Arc::new(shape))
            }
        };
        let new_root = group(input.root_schema().name(), new_nodes.root_schema().get_fields().to_vec())?;
        Ok(Self {
            input_leaves: input.num_columns(),
            input: source.shown.clone(),
            input_fingerprint: source.fingerprint.clone(),
            computed: Arc::new(Shape::new(new_root, computed, &properties, false)?),
            root,
            properties,
            schema,
            all,
        })
    }

    /// Columns of the parts: the input's as its writer described them, then the computed ones.
    pub fn schema(&self) -> &SchemaRef {
        &self.schema
    }

    /// Encoder of the computed columns of one piece, to be written beside copied chunks.
    pub fn encoder(&self) -> Result<PieceEncoder> {
        PieceEncoder::new(&self.computed)
    }

    /// Encoder of all columns of one piece: the input's root columns in order, with the types of
    /// [`SourceFile::schema`], then the computed ones. Needs [`PassThrough::Encoded`].
    pub fn encoder_of_all(&self) -> Result<PieceEncoder> {
        let shape = self.all.as_ref().ok_or_else(|| {
            Error::failed("The layout was made for copied columns only; this is a defect of tenparsec.")
                .in_file(&self.input)
        })?;
        PieceEncoder::new(shape)
    }
}

impl Shape {
    fn new(root: TypePtr, fields: Fields, properties: &WriterPropertiesPtr, whole_rows: bool) -> Result<Self> {
        // the factory takes schema and properties from a file writer; this one goes nowhere
        let nowhere =
            SerializedFileWriter::<Sink>::new(std::io::sink(), root, properties.clone()).map_err(parquet_error)?;
        let leaves = nowhere.schema_descr();
        let floats = (0..leaves.num_columns())
            .map(|leaf| (leaf, leaves.get_column_root_idx(leaf)))
            .filter(|(_, root)| fields.get(*root).is_some_and(|field| is_float(field.data_type())))
            .collect();
        let factory = ArrowRowGroupWriterFactory::new(&nowhere, Arc::new(Schema::new(fields.clone())));
        Ok(Self { fields, factory, floats, whole_rows })
    }

    /// Encodes no rows: a type that the writer has no path for fails (or panics, hence the guard) here, with its
    /// column, and not in the middle of the night.
    fn try_out(&self) -> Result<()> {
        let mut writers = self.factory.create_column_writers(0).map_err(parquet_error)?.into_iter();
        for field in &self.fields {
            guard(|| {
                let empty = new_empty_array(field.data_type());
                for leaf in compute_leaves(field, &empty).map_err(parquet_error)? {
                    if let Some(mut writer) = writers.next() {
                        writer.write(&leaf).map_err(parquet_error)?;
                        writer.close().map_err(parquet_error)?;
                    }
                }
                Ok(())
            })
            .map_err(|error| cannot(field.name(), &error.message))?;
        }
        Ok(())
    }
}

fn is_float(kind: &DataType) -> bool {
    matches!(kind, DataType::Float16 | DataType::Float32 | DataType::Float64)
}

fn group(name: &str, nodes: Vec<TypePtr>) -> Result<TypePtr> {
    Type::group_type_builder(name).with_fields(nodes).build().map(Arc::new).map_err(parquet_error)
}

fn zstd() -> Result<Compression> {
    ZstdLevel::try_new(1).map(Compression::ZSTD).map_err(parquet_error)
}

/// The input's footer entries, without those that are replaced; then the Arrow schema; then ours.
fn footer_pairs(input: Option<&Vec<KeyValue>>, schema: &Schema, ours: &[(String, String)]) -> Vec<KeyValue> {
    let replaced: HashSet<&str> = ours.iter().map(|(key, _)| key.as_str()).chain([ARROW_SCHEMA_META_KEY]).collect();
    let carried = input.into_iter().flatten().filter(|pair| !replaced.contains(pair.key.as_str())).cloned();
    let mut pairs: Vec<KeyValue> = carried.collect();
    pairs.push(KeyValue::new(ARROW_SCHEMA_META_KEY.to_owned(), encode_arrow_schema(schema)));
    pairs.extend(ours.iter().map(|(key, value)| KeyValue::new(key.clone(), value.clone())));
    pairs
}

/// The order that all row groups of the input declare; a subset of sorted rows is sorted, so it holds when rows are dropped.
fn sorting(source: &SourceFile) -> Option<Vec<SortingColumn>> {
    let mut groups = source.metadata().row_groups().iter();
    let first = groups.next()?.sorting_columns()?;
    groups.all(|group| group.sorting_columns() == Some(first)).then(|| first.clone())
}

/// Codec and encoding of a passed-through column that is encoded again: as its first chunk has them.
fn input_properties(
    builder: WriterPropertiesBuilder,
    column: &ColumnDescriptor,
    chunk: Option<&ColumnChunkMetaData>,
) -> Result<WriterPropertiesBuilder> {
    let path = column.path().clone();
    let Some(chunk) = chunk else { return Ok(builder) };
    let codec = match chunk.compression() {
        // no writer for the first; the second is superseded by the third, which the format's specification recommends
        Compression::LZO => zstd()?,
        Compression::LZ4 => Compression::LZ4_RAW,
        codec => codec,
    };
    let dictionary = mostly_dictionary(chunk);
    let mut builder =
        builder.set_column_compression(path.clone(), codec).set_column_dictionary_enabled(path.clone(), dictionary);
    let plain_kept = chunk.encodings().find(|encoding| {
        use Encoding as E;
        matches!(
            encoding,
            E::BYTE_STREAM_SPLIT | E::DELTA_BINARY_PACKED | E::DELTA_LENGTH_BYTE_ARRAY | E::DELTA_BYTE_ARRAY
        )
    });
    if let Some(encoding) = plain_kept {
        builder = builder.set_column_encoding(path.clone(), encoding);
    }
    Ok(without_float_bounds(builder, column, path))
}

/// A chunk whose dictionary grew too large goes on without one; then trying again only costs time.
fn mostly_dictionary(chunk: &ColumnChunkMetaData) -> bool {
    if chunk.dictionary_page_offset().is_none() {
        return false;
    }
    let Some(pages) = chunk.page_encoding_stats() else { return true };
    let (mut with, mut without) = (0i64, 0i64);
    for page in pages.iter().filter(|page| matches!(page.page_type, PageType::DATA_PAGE | PageType::DATA_PAGE_V2)) {
        let count = if matches!(page.encoding, Encoding::RLE_DICTIONARY | Encoding::PLAIN_DICTIONARY) {
            &mut with
        } else {
            &mut without
        };
        *count += i64::from(page.count);
    }
    with > without
}

/// Minima and maxima of float columns cost 10 to 17 % of encoding and most readers ignore them in files that state the
/// IEEE total order, as the parquet crate does. Null counts are added when a chunk is finished, at no cost.
fn without_float_bounds(
    builder: WriterPropertiesBuilder,
    column: &ColumnDescriptor,
    path: ColumnPath,
) -> WriterPropertiesBuilder {
    let float = matches!(column.physical_type(), Physical::FLOAT | Physical::DOUBLE);
    if float { builder.set_column_statistics_enabled(path, EnabledStatistics::None) } else { builder }
}

/// Encodings of computed columns, as measured by `tests/suite/storage/encodings.rs` (10 posterior-like f32 columns of 1 M
/// rows with 2.5 % nulls, no statistics, pages of 65,536 rows; speed relative to the choice on a busy 2-core machine, so
/// good to some 10 %; bytes per value are exact):
///
/// | f32 | PLAIN | BYTE_STREAM_SPLIT |
/// | --- | --- | --- |
/// | uncompressed | 1.3 x, 3.98 B | 1.1 x, 3.98 B |
/// | snappy | 1.7 x, 3.29 B | 0.9 x, 2.83 B |
/// | lz4_raw | 1.5 x, 3.23 B | 0.9 x, 2.90 B |
/// | zstd 1 | **1 x, 2.82 B** | 0.7 x, 2.64 B |
/// | zstd 3 | 0.7 x, 2.81 B | 0.6 x, 2.61 B |
///
/// PLAIN with zstd 1: as small as snappy with byte-stream split and faster. Splitting would save 6 % more for 40 % more
/// time, snappy would save 40 % of the time for files a sixth larger; encoding is the largest cost beside the posterior
/// and the files stay for years. Pages of 65,536 rows are 1 to 3 % smaller than those of 20,000 and as fast.
///
/// Verdicts have few values: dictionary with zstd 1 takes 0.14 B (snappy 0.25 B; without dictionary 0.34 B with zstd 1,
/// 0.92 B with lz4). Booleans are packed bits: 0.115 B with zstd 1, 0.131 B as RLE.
fn computed_properties(builder: WriterPropertiesBuilder, column: &ColumnDescriptor) -> Result<WriterPropertiesBuilder> {
    let path = column.path().clone();
    let few_values = column.physical_type() == Physical::INT32;
    let builder =
        builder.set_column_compression(path.clone(), zstd()?).set_column_dictionary_enabled(path.clone(), few_values);
    Ok(without_float_bounds(builder, column, path))
}

/// Columns for which decoding to Arrow and encoding again would not give the same values in the same physical type.
fn refuse_lossy(input: &SchemaDescriptor, own: &Fields) -> Result<()> {
    let again = ArrowSchemaConverter::new().convert(&Schema::new(own.clone())).map_err(parquet_error)?;
    let mut errors = Vec::new();
    for (leaf, old) in input.columns().iter().enumerate() {
        let name = old.path().string();
        if again.num_columns() != input.num_columns() {
            return Err(Error::failed(
                "The file's nested columns cannot be encoded again; use cuts that flag instead of drop.",
            ));
        }
        let new = again.column(leaf);
        let decimal = matches!(old.converted_type(), ConvertedType::DECIMAL)
            || matches!(old.logical_type_ref(), Some(parquet::basic::LogicalType::Decimal { .. }));
        let integer = matches!(old.physical_type(), Physical::INT32 | Physical::INT64);
        let same = old.physical_type() == new.physical_type() && old.type_length() == new.type_length();
        if old.max_def_level() != new.max_def_level() || old.max_rep_level() != new.max_rep_level() {
            errors.push(cannot(&name, "its nesting has an old form"));
        } else if old.converted_type() == ConvertedType::INTERVAL {
            errors.push(cannot(&name, "intervals would lose their months"));
        } else if old.physical_type() == Physical::INT96 {
            errors.push(cannot(&name, "INT96 timestamps have no writer"));
        } else if !(same || decimal && (integer || usual_width(old))) {
            errors.push(cannot(
                &name,
                &format!("{} values would be stored as {}", old.physical_type(), new.physical_type()),
            ));
        }
    }
    Error::all(errors).map_or(Ok(()), Err)
}

/// Is this a fixed-length decimal of the width that its precision needs, as the writer makes them?
fn usual_width(column: &ColumnDescriptor) -> bool {
    let least = (1..=16).find(|bytes| {
        let digits = u32::try_from(column.type_precision()).unwrap_or(u32::MAX);
        10u128.checked_pow(digits).is_some_and(|above| above - 1 < 1u128 << (8 * bytes - 1))
    });
    column.physical_type() == Physical::FIXED_LEN_BYTE_ARRAY && least == Some(column.type_length())
}

fn cannot(column: &str, why: &str) -> Error {
    Error::failed(format!(
        "The column can be copied but not encoded again ({}), which dropped rows or a huge row group need; use cuts that flag instead of drop, or write the column with another type.",
        why.trim_end_matches('.')
    ))
    .in_column(column)
}
