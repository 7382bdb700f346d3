//! Files of all codecs, encodings and page versions through splicing and through encoding again.

use std::path::Path;
use std::sync::Arc;

use arrow::array::*;
use arrow::compute::{concat_batches, filter_record_batch};
use arrow::datatypes::*;
use parquet::basic::{BrotliLevel, Compression, Encoding, GzipLevel, ZstdLevel};
use parquet::file::metadata::SortingColumn;
use parquet::file::properties::{WriterProperties, WriterPropertiesBuilder, WriterVersion};
use parquet::schema::types::ColumnPath;
use proptest::prelude::*;
use tenparsec::catalogue::{Catalogue, Piece, read};
use tenparsec::columnar::source::SourceFile;
use tenparsec::release::{Layout, PartRecord, PartWriter, PassThrough};

use super::files::*;

fn computed_fields() -> Vec<FieldRef> {
    vec![
        Arc::new(Field::new("modulus_p50", DataType::Float32, true)),
        Arc::new(Field::new("verdict", DataType::UInt32, false)),
        Arc::new(Field::new("accepted", DataType::Boolean, false)),
    ]
}

fn computed(first: usize, rows: usize) -> Vec<ArrayRef> {
    let numbers = first..first + rows;
    vec![
        Arc::new(numbers.clone().map(|i| (i % 9 != 0).then_some((i as f32).sqrt())).collect::<Float32Array>()),
        Arc::new(UInt32Array::from_iter_values(numbers.clone().map(|i| (i % 4) as u32))),
        Arc::new(BooleanArray::from(numbers.map(|i| i % 4 == 0).collect::<Vec<_>>())),
    ]
}

fn names(batch: &RecordBatch) -> Vec<String> {
    batch.schema().fields().iter().map(|field| field.name().clone()).collect()
}

fn whole_group(source: &SourceFile, row_group: usize) -> Piece {
    let before = (0..row_group).map(|group| source.row_group_rows(group)).sum();
    let rows = source.row_group_rows(row_group);
    Piece { file: 0, row_group, first_row: 0, rows, whole: true, first_row_in_file: before }
}

fn read_pieces(source: &Arc<SourceFile>, pieces: &[Piece], columns: &[String], batch_rows: usize) -> RecordBatch {
    let batches: Vec<RecordBatch> =
        pieces.iter().flat_map(|piece| read(source, piece, columns, batch_rows).unwrap()).map(Result::unwrap).collect();
    concat_batches(&batches[0].schema(), &batches).unwrap()
}

/// Copies all row groups beside computed columns, and checks values and chunk bytes.
fn splice_all(source: &Arc<SourceFile>, dir: &Path, name: &str) -> PartRecord {
    let pairs = [("tenparsec.plan".to_owned(), "x = 1".to_owned())];
    let layout = Arc::new(Layout::new(source, &computed_fields(), &pairs, PassThrough::Copied).unwrap());
    let mut part = PartWriter::create(dir, name, &layout, 0).unwrap();
    let mut first = 0;
    for group in 0..source.row_groups() {
        let rows = source.row_group_rows(group) as usize;
        let mut encoder = layout.encoder().unwrap();
        encoder.write(&computed(first, rows)).unwrap();
        part.append_spliced(source, group, encoder.finish().unwrap()).unwrap();
        first += rows;
    }
    part.finish().unwrap()
}

fn assert_chunks_copied(source: &SourceFile, part: &SourceFile) {
    assert_eq!(source.row_groups(), part.row_groups());
    for group in 0..source.row_groups() {
        let (old, new) = (source.metadata().row_group(group), part.metadata().row_group(group));
        for leaf in 0..old.num_columns() {
            let bytes = |file: &SourceFile, chunk: &parquet::file::metadata::ColumnChunkMetaData| {
                let (start, len) = chunk.byte_range();
                file.reader().bytes(start, len as usize).unwrap()
            };
            let name = old.column(leaf).column_path().string();
            assert!(bytes(source, old.column(leaf)) == bytes(part, new.column(leaf)), "chunk {group} of {name}");
            assert_eq!(old.column(leaf).compression(), new.column(leaf).compression());
            assert_eq!(
                old.column(leaf).statistics().and_then(|s| s.null_count_opt()),
                new.column(leaf).statistics().and_then(|s| s.null_count_opt()),
                "null count of {name}"
            );
        }
    }
}

/// Decodes everything in batches of `batch_rows`, drops rows by `keep`, encodes everything again.
fn encode_all(
    source: &Arc<SourceFile>,
    dir: &Path,
    name: &str,
    batch_rows: usize,
    keep: impl Fn(usize) -> bool,
) -> PartRecord {
    let layout = Arc::new(Layout::new(source, &computed_fields(), &[], PassThrough::Encoded).unwrap());
    let mut part = PartWriter::create(dir, name, &layout, 0).unwrap();
    let columns: Vec<String> = source.schema().fields().iter().map(|field| field.name().clone()).collect();
    let mut first = 0;
    for group in 0..source.row_groups() {
        let piece = whole_group(source, group);
        let mut encoder = layout.encoder_of_all().unwrap();
        for batch in read(source, &piece, &columns, batch_rows).unwrap() {
            let batch = batch.unwrap();
            let rows = batch.num_rows();
            let mask = BooleanArray::from((first..first + rows).map(&keep).collect::<Vec<_>>());
            let mut all = batch.columns().to_vec();
            all.extend(computed(first, rows));
            let fields: Vec<Field> = all.iter().map(|a| Field::new("c", a.data_type().clone(), true)).collect();
            let joined = RecordBatch::try_new(Arc::new(Schema::new(fields)), all).unwrap();
            encoder.write(filter_record_batch(&joined, &mask).unwrap().columns()).unwrap();
            first += rows;
        }
        part.append_encoded(encoder.finish().unwrap(), piece.rows).unwrap();
    }
    part.finish().unwrap()
}

fn codecs() -> Vec<(&'static str, WriterPropertiesBuilder)> {
    let plain = || WriterProperties::builder();
    let coded = |codec| plain().set_compression(codec);
    let encoded = |pairs: &[(&str, Encoding)]| {
        let start = plain().set_dictionary_enabled(false).set_writer_version(WriterVersion::PARQUET_2_0);
        pairs.iter().fold(start, |builder, (name, encoding)| {
            builder.set_column_encoding(ColumnPath::from(vec![(*name).to_owned()]), *encoding)
        })
    };
    vec![
        ("plain", plain().set_dictionary_enabled(false)),
        ("snappy", coded(Compression::SNAPPY)),
        (
            "zstd, version 2",
            coded(Compression::ZSTD(ZstdLevel::try_new(3).unwrap())).set_writer_version(WriterVersion::PARQUET_2_0),
        ),
        ("gzip", coded(Compression::GZIP(GzipLevel::try_new(6).unwrap()))),
        ("lz4", coded(Compression::LZ4_RAW)),
        ("old lz4", coded(Compression::LZ4)),
        ("brotli", coded(Compression::BROTLI(BrotliLevel::try_new(3).unwrap()))),
        ("small pages", coded(Compression::SNAPPY).set_data_page_row_count_limit(64).set_write_batch_size(32)),
        ("small dictionary", plain().set_dictionary_page_size_limit(200).set_bloom_filter_enabled(true)),
        (
            "delta and split",
            encoded(&[
                ("i64", Encoding::DELTA_BINARY_PACKED),
                ("i32", Encoding::DELTA_BINARY_PACKED),
                ("text", Encoding::DELTA_BYTE_ARRAY),
                ("bytes", Encoding::DELTA_LENGTH_BYTE_ARRAY),
                ("f32", Encoding::BYTE_STREAM_SPLIT),
                ("f64", Encoding::BYTE_STREAM_SPLIT),
                ("flag", Encoding::RLE),
            ]),
        ),
    ]
}

#[test]
fn every_codec_and_encoding_is_read_copied_and_encoded_again() {
    let dir = tempfile::tempdir().unwrap();
    let batch = many_types(1500);
    for (what, properties) in codecs() {
        let path = write(&dir.path().join("input.parquet"), &batch, 600, properties.build());
        let (source, reference) = (open(&path), read_all(&path));
        assert_eq!((source.rows, source.row_groups()), (1500, 3), "{what}");
        let pieces: Vec<Piece> = (0..3).map(|group| whole_group(&source, group)).collect();
        let direct = read_pieces(&source, &pieces, &names(&reference), 97);
        assert_columns(&direct, &reference, &format!("{what}, read"));

        let record = splice_all(&source, dir.path(), "copied.parquet");
        let part_path = dir.path().join("copied.parquet");
        let (part, part_data) = (open(&part_path), read_all(&part_path));
        assert_chunks_copied(&source, &part);
        assert_columns(&part_data, &reference, &format!("{what}, copied"));
        assert_eq!(part_data.column_by_name("modulus_p50").unwrap(), &computed(0, 1500)[0], "{what}");
        assert_eq!(part_data.column_by_name("verdict").unwrap(), &computed(0, 1500)[1], "{what}");
        assert_eq!(part_data.column_by_name("accepted").unwrap(), &computed(0, 1500)[2], "{what}");
        let bytes = std::fs::read(&part_path).unwrap();
        assert_eq!((record.bytes, record.rows, record.rows_in), (bytes.len() as u64, 1500, 1500));
        assert_eq!(record.blake3, blake3::hash(&bytes).to_hex().to_string());

        encode_all(&source, dir.path(), "encoded.parquet", 128, |i| i % 3 != 1);
        let kept = BooleanArray::from((0..1500).map(|i| i % 3 != 1).collect::<Vec<_>>());
        let wanted = filter_record_batch(&reference, &kept).unwrap();
        let encoded = read_all(&dir.path().join("encoded.parquet"));
        assert_eq!(encoded.num_rows(), 1000);
        assert_columns(&encoded, &wanted, &format!("{what}, encoded"));
    }
}

#[test]
fn the_writers_own_arrow_types_come_back_from_a_part() {
    let dir = tempfile::tempdir().unwrap();
    let batch = many_types(400);
    let path = write(&dir.path().join("input.parquet"), &batch, 400, WriterProperties::builder().build());
    splice_all(&open(&path), dir.path(), "part.parquet");
    let file = std::fs::File::open(dir.path().join("part.parquet")).unwrap();
    let reader = parquet::arrow::arrow_reader::ParquetRecordBatchReaderBuilder::try_new(file).unwrap();
    for field in batch.schema().fields() {
        assert_eq!(reader.schema().field_with_name(field.name()).unwrap().data_type(), field.data_type());
    }
}

#[test]
fn bytes_do_not_depend_on_the_batch_size() {
    let dir = tempfile::tempdir().unwrap();
    let path = write(&dir.path().join("i.parquet"), &many_types(40_000), 40_000, WriterProperties::builder().build());
    let source = open(&path);
    let hash = |batch_rows| {
        encode_all(&source, dir.path(), "part.parquet", batch_rows, |i| i % 7 != 3 && !(900..30_000).contains(&i))
            .blake3
    };
    let first = hash(40_000);
    for batch_rows in [1000, 4096, 8191] {
        assert_eq!(hash(batch_rows), first, "batches of {batch_rows}");
    }
    let whole = |batch_rows| encode_all(&source, dir.path(), "part.parquet", batch_rows, |_| true).blake3;
    assert_eq!(whole(40_000), whole(777));
    assert_eq!(
        splice_all(&source, dir.path(), "a.parquet").blake3,
        splice_all(&source, dir.path(), "b.parquet").blake3
    );
}

proptest! {
    #![proptest_config(ProptestConfig { cases: 24, failure_persistence: None, ..ProptestConfig::default() })]

    /// The null mask of a slice may be absent, present without nulls, or shifted: the bytes are the same.
    #[test]
    fn bytes_do_not_depend_on_how_rows_arrive(cuts in prop::collection::vec(1usize..9000, 0..12), with_nulls in any::<bool>()) {
        let dir = tempfile::tempdir().unwrap();
        let path = write(&dir.path().join("i.parquet"), &plain(10, 0), 10, WriterProperties::builder().build());
        let layout = Layout::new(&open(&path), &computed_fields(), &[], PassThrough::Copied).unwrap();
        let rows = 50_000;
        let mut data = computed(0, rows);
        if !with_nulls {
            data[0] = Arc::new(Float32Array::from_iter_values((0..rows).map(|i| i as f32)));
        }
        let encode = |pieces: &[usize]| {
            let mut encoder = layout.encoder().unwrap();
            let mut start = 0;
            for len in pieces.iter().copied().chain([rows]) {
                let len = len.min(rows - start);
                // a mask that says nothing
                let slices: Vec<ArrayRef> = data.iter().map(|array| {
                    let slice = array.slice(start, len);
                    let nulls = slice.nulls().cloned().or_else(|| Some(arrow::buffer::NullBuffer::new_valid(len)));
                    make_array(slice.to_data().into_builder().nulls(nulls).build().unwrap())
                }).collect();
                encoder.write(&slices).unwrap();
                start += len;
            }
            let file = dir.path().join("x.parquet");
            let whole = write(&file, &plain(rows, 0), rows, WriterProperties::builder().build());
            let source = open(&whole);
            let layout = Arc::new(Layout::new(&source, &computed_fields(), &[], PassThrough::Copied).unwrap());
            let mut part = PartWriter::create(dir.path(), "part.parquet", &layout, 0).unwrap();
            part.append_spliced(&source, 0, encoder.finish().unwrap()).unwrap();
            part.finish().unwrap().blake3
        };
        prop_assert_eq!(encode(&cuts), encode(&[]));
    }
}

#[test]
fn pieces_of_a_huge_row_group_are_its_rows() {
    let dir = tempfile::tempdir().unwrap();
    let small_pages = WriterProperties::builder().set_data_page_row_count_limit(100).set_write_batch_size(50).build();
    write(&dir.path().join("huge.parquet"), &many_types(5000), 5000, small_pages);
    let catalogue = Catalogue::open(&["huge.parquet".into()], dir.path()).unwrap();
    let parts = catalogue.parts_with_limits(2000, 3000, 700);
    assert_eq!(parts.iter().map(|part| part.rows).collect::<Vec<_>>(), [1400, 1400, 1400, 800]);
    assert!(parts.iter().all(|part| !part.whole()));
    let source = catalogue.source(0).unwrap();
    let reference = read_all(&source.path);
    let pieces: Vec<Piece> = parts.iter().flat_map(|part| part.pieces.clone()).collect();
    let found = read_pieces(&source, &pieces, &names(&reference), 256);
    assert_columns(&found, &reference, "pieces");
    assert_eq!(pieces[3].first_row_in_file, 2100);
}

#[test]
fn columns_come_in_the_order_asked_and_unknown_ones_are_named() {
    let dir = tempfile::tempdir().unwrap();
    let path = write(&dir.path().join("a.parquet"), &plain(50, 0), 50, WriterProperties::builder().build());
    let source = open(&path);
    let piece = whole_group(&source, 0);
    let columns = ["g_mag", "source", "parallax"].map(String::from);
    let batch = read(&source, &piece, &columns, 20).unwrap().next().unwrap().unwrap();
    assert_eq!(names(&batch), columns);
    assert_eq!(batch.num_rows(), 20);
    let error = read(&source, &piece, &["paralax".into()], 20).err().unwrap().to_string();
    assert!(error.contains("a.parquet") && error.contains("Did you mean `parallax`?"), "{error}");
}

#[test]
fn footers_say_what_they_should() {
    let dir = tempfile::tempdir().unwrap();
    let sorted = vec![SortingColumn { column_idx: 0, descending: false, nulls_first: false }];
    let properties =
        WriterProperties::builder().set_sorting_columns(Some(sorted.clone())).set_key_value_metadata(Some(vec![
            parquet::file::metadata::KeyValue::new("survey".into(), "Lantern Ridge".to_string()),
            parquet::file::metadata::KeyValue::new("tenparsec.plan".into(), "old".to_string()),
        ]));
    let path = write(&dir.path().join("a.parquet"), &plain(3000, 0), 1000, properties.build());
    let source = open(&path);
    splice_all(&source, dir.path(), "part.parquet");
    let part = open(&dir.path().join("part.parquet"));
    let footer = part.metadata().file_metadata();
    let pairs = footer.key_value_metadata().unwrap();
    let value = |key: &str| {
        pairs.iter().filter(|pair| pair.key == key).map(|pair| pair.value.clone().unwrap()).collect::<Vec<_>>()
    };
    assert_eq!(value("survey"), ["Lantern Ridge"]);
    assert_eq!(value("tenparsec.plan"), ["x = 1"]);
    assert_eq!(value("ARROW:schema").len(), 1);
    assert_eq!(footer.created_by(), Some(concat!("tenparsec version ", env!("CARGO_PKG_VERSION"))));
    let group = part.metadata().row_group(1);
    assert_eq!(group.sorting_columns(), Some(&sorted));
    // text keeps its bounds; copied floats keep counts only, since the footer states another order than their writer did
    assert!(group.column(3).statistics().unwrap().min_bytes_opt().is_some());
    assert!(group.column(1).statistics().unwrap().min_bytes_opt().is_none());
    assert_eq!(group.column(1).statistics().unwrap().null_count_opt(), Some(200));
    let modulus = group.column(4).statistics().unwrap();
    assert_eq!((modulus.null_count_opt(), modulus.min_bytes_opt()), (Some(111), None));
    assert!(group.column(5).statistics().unwrap().min_bytes_opt().is_some());
    assert_eq!(part.schema().field(1).metadata().get("unit").map(String::as_str), Some("mas"));
}

#[test]
fn a_part_whose_rows_are_all_dropped_is_an_empty_file() {
    let dir = tempfile::tempdir().unwrap();
    let path = write(&dir.path().join("a.parquet"), &plain(300, 0), 100, WriterProperties::builder().build());
    let record = encode_all(&open(&path), dir.path(), "part.parquet", 50, |_| false);
    assert_eq!((record.rows, record.rows_in), (0, 300));
    let part = open(&dir.path().join("part.parquet"));
    assert_eq!((part.rows, part.row_groups()), (0, 0));
}

#[test]
fn what_cannot_be_encoded_again_is_refused_with_its_column() {
    use parquet::data_type::{Int96, Int96Type};
    let dir = tempfile::tempdir().unwrap();
    let path = dir.path().join("old.parquet");
    let schema = parquet::schema::parser::parse_message_type("message m { required int96 epoch; }").unwrap();
    let properties = Arc::new(WriterProperties::builder().build());
    let file = std::fs::File::create(&path).unwrap();
    let mut writer = parquet::file::writer::SerializedFileWriter::new(file, Arc::new(schema), properties).unwrap();
    let mut group = writer.next_row_group().unwrap();
    let mut column = group.next_column().unwrap().unwrap();
    column.typed::<Int96Type>().write_batch(&[Int96::from(vec![1, 2, 2_450_000]); 10], None, None).unwrap();
    column.close().unwrap();
    group.close().unwrap();
    writer.close().unwrap();
    let source = open(&path);
    let error = Layout::new(&source, &computed_fields(), &[], PassThrough::Encoded).unwrap_err().to_string();
    assert!(error.contains("old.parquet") && error.contains("column `epoch`") && error.contains("INT96"), "{error}");
    splice_all(&source, dir.path(), "part.parquet");
    assert_chunks_copied(&source, &open(&dir.path().join("part.parquet")));
}

#[test]
fn a_computed_name_that_the_catalogue_has_is_refused() {
    let dir = tempfile::tempdir().unwrap();
    let path = write(&dir.path().join("a.parquet"), &plain(5, 0), 5, WriterProperties::builder().build());
    let field = Arc::new(Field::new("parallax", DataType::Float32, true));
    let error = Layout::new(&open(&path), &[field], &[], PassThrough::Copied).unwrap_err().to_string();
    assert!(error.contains("column `parallax`") && error.contains("already has"), "{error}");
}

#[test]
fn a_dropped_part_leaves_nothing_behind() {
    let dir = tempfile::tempdir().unwrap();
    let path = write(&dir.path().join("a.parquet"), &plain(100, 0), 100, WriterProperties::builder().build());
    let source = open(&path);
    let layout = Arc::new(Layout::new(&source, &computed_fields(), &[], PassThrough::Copied).unwrap());
    let out = dir.path().join("out");
    std::fs::create_dir(&out).unwrap();
    let mut part = PartWriter::create(&out, "part-00000.parquet", &layout, 0).unwrap();
    assert_eq!(std::fs::read_dir(&out).unwrap().count(), 1);
    let mut encoder = layout.encoder().unwrap();
    encoder.write(&computed(0, 99)).unwrap();
    let error = part.append_spliced(&source, 0, encoder.finish().unwrap()).unwrap_err().to_string();
    assert!(error.contains("99"), "{error}");
    drop(part);
    assert_eq!(std::fs::read_dir(&out).unwrap().count(), 0);
}
