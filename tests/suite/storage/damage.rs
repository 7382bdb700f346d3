//! Bad files: each gives one sentence with its place, none a panic, and none is mistaken for a good one where the format allows to tell.

use std::path::{Path, PathBuf};
use std::sync::Arc;

use arrow::datatypes::{DataType, Field};
use parquet::basic::{Compression, ZstdLevel};
use parquet::file::metadata::{ParquetMetaData, ParquetMetaDataReader, ParquetMetaDataWriter};
use parquet::file::properties::WriterProperties;
use tenparsec::catalogue::{Piece, read};
use tenparsec::columnar::guard::guard;
use tenparsec::columnar::source::SourceFile;
use tenparsec::error::{Error, Result};
use tenparsec::release::{Layout, PartWriter, PassThrough};

use super::files::*;

fn zstd() -> WriterProperties {
    WriterProperties::builder().set_compression(Compression::ZSTD(ZstdLevel::try_new(1).unwrap())).build()
}

fn opened(dir: &Path, bytes: &[u8]) -> Result<SourceFile> {
    let path = dir.join("bad.parquet");
    std::fs::write(&path, bytes).unwrap();
    SourceFile::open(&path, "bad.parquet")
}

fn refusal(dir: &Path, bytes: &[u8]) -> String {
    let error = opened(dir, bytes).expect_err("the file must be refused");
    let text = error.to_string();
    assert_eq!(error.exit_code(), 1);
    assert!(text.starts_with("bad.parquet") && text.ends_with('.') && !text.contains('\n'), "{text}");
    text
}

/// Bytes of a good file, its metadata, and where its footer starts.
fn good(dir: &Path, properties: WriterProperties) -> (Vec<u8>, ParquetMetaData, usize) {
    let path = write(&dir.join("good.parquet"), &plain(2000, 0), 1000, properties);
    let bytes = std::fs::read(&path).unwrap();
    let len = u32::from_le_bytes(bytes[bytes.len() - 8..bytes.len() - 4].try_into().unwrap()) as usize;
    let start = bytes.len() - 8 - len;
    let metadata = ParquetMetaDataReader::decode_metadata(&bytes[start..start + len]).unwrap();
    (bytes, metadata, start)
}

/// The data before the footer with another footer.
fn with_footer(data: &[u8], metadata: &ParquetMetaData) -> Vec<u8> {
    let mut out = data.to_vec();
    ParquetMetaDataWriter::new(&mut out, metadata).finish().unwrap();
    out
}

fn read_everything(source: &Arc<SourceFile>) -> Result<usize> {
    let columns: Vec<String> = source.schema().fields().iter().map(|field| field.name().clone()).collect();
    let mut rows = 0;
    for row_group in 0..source.row_groups() {
        let rows_in_group = source.row_group_rows(row_group);
        let piece = Piece { file: 0, row_group, first_row: 0, rows: rows_in_group, whole: true, first_row_in_file: 0 };
        if rows_in_group > 1_000_000 {
            return Err(Error::failed("More rows are claimed than this test reads."));
        }
        for batch in read(source, &piece, &columns, 512)? {
            rows += batch?.num_rows();
        }
    }
    Ok(rows)
}

fn copy_everything(source: &Arc<SourceFile>, dir: &Path) -> Result<()> {
    let layout = Arc::new(Layout::new(
        source,
        &[Arc::new(Field::new("new", DataType::Float32, true))],
        &[],
        PassThrough::Copied,
    )?);
    let mut part = PartWriter::create(dir, "part.parquet", &layout, 0)?;
    for group in 0..source.row_groups() {
        let rows = source.row_group_rows(group) as usize;
        if rows > 1_000_000 {
            return Err(Error::failed("More rows are claimed than this test writes."));
        }
        let mut encoder = layout.encoder()?;
        encoder.write(&[Arc::new(arrow::array::Float32Array::from(vec![1.0; rows]))])?;
        part.append_spliced(source, group, encoder.finish()?)?;
    }
    part.finish().map(drop)
}

#[test]
fn files_that_are_no_parquet_say_why() {
    let dir = tempfile::tempdir().unwrap();
    let (bytes, _, start) = good(dir.path(), zstd());
    let dir = dir.path();
    assert!(refusal(dir, b"").contains("empty (0 bytes)"));
    assert!(refusal(dir, b"PAR1").contains("4 bytes are too few"));
    assert!(refusal(dir, "source,parallax\n1,2.0\n3,4.0\n".as_bytes()).contains("Not a Parquet file"));
    assert!(refusal(dir, &bytes[..bytes.len() / 2]).contains("cut off"));
    assert!(refusal(dir, &bytes[..bytes.len() - 1]).contains("cut off"));
    assert!(refusal(dir, &[b"PARX", &bytes[4..]].concat()).contains("does not start as one"));
    let mut encrypted = bytes.clone();
    let end = encrypted.len();
    encrypted[end - 1] = b'E';
    assert!(refusal(dir, &encrypted).contains("encrypted"));
    let mut long = bytes.clone();
    long[end - 8..end - 4].copy_from_slice(&u32::MAX.to_le_bytes());
    assert!(refusal(dir, &long).contains("footer claims 4294967295 bytes"));
    let mut garbage = bytes.clone();
    garbage[start..end - 8].fill(0xA5);
    assert!(refusal(dir, &garbage).contains("footer is damaged"));
    let missing = SourceFile::open(&dir.join("nowhere.parquet"), "nowhere.parquet").unwrap_err().to_string();
    assert!(missing.contains("nowhere.parquet") && missing.contains("no such file"), "{missing}");
    assert!(SourceFile::open(dir, "folder").unwrap_err().to_string().contains("a folder"));
}

/// Field 8 of FileMetaData (encryption_algorithm, parquet.thrift) in a footer that is itself plain: pages would be ciphertext.
#[test]
fn encrypted_columns_behind_a_plain_footer_are_refused() {
    let dir = tempfile::tempdir().unwrap();
    let (bytes, _, start) = good(dir.path(), zstd());
    let end = bytes.len() - 8;
    // last field written is 7 (column_orders): struct field 8, empty, then both stop bytes
    let mut footer = bytes[start..end - 1].to_vec();
    footer.extend([0x1c, 0x00, 0x00]);
    let len = footer.len() as u32;
    let all = [&bytes[..start], &footer, &len.to_le_bytes(), b"PAR1"].concat();
    assert!(refusal(dir.path(), &all).contains("encrypted"));
}

#[test]
fn footers_that_claim_the_impossible_are_refused_at_open() {
    let dir = tempfile::tempdir().unwrap();
    let (bytes, metadata, start) = good(dir.path(), zstd());
    type Change =
        fn(parquet::file::metadata::ColumnChunkMetaDataBuilder) -> parquet::file::metadata::ColumnChunkMetaDataBuilder;
    let changed = |change: Change| {
        let mut builder = metadata.clone().into_builder();
        let mut groups = builder.take_row_groups();
        let chunk = &mut groups[1].columns_mut()[2];
        *chunk = change(chunk.clone().into_builder()).build().unwrap();
        with_footer(&bytes[..start], &builder.set_row_groups(groups).build())
    };
    let cases: [(Change, &str); 5] = [
        (|c| c.set_total_compressed_size(1 << 40), "do not lie inside the file"),
        (|c| c.set_total_compressed_size(-5), "do not lie inside the file"),
        (|c| c.set_data_page_offset(i64::MAX).set_dictionary_page_offset(None), "do not lie inside the file"),
        (|c| c.set_num_values(999), "claims 999 values for 1000 rows"),
        (|c| c.set_file_path("elsewhere.parquet".into()), "another file"),
    ];
    for (change, wanted) in cases {
        let text = refusal(dir.path(), &changed(change));
        assert!(text.contains(wanted) && text.contains("row group 1, column `g_mag`"), "{text}");
    }
    // the unchanged footer, written the same way, is fine
    let same = opened(dir.path(), &with_footer(&bytes[..start], &metadata)).unwrap();
    assert_eq!(read_everything(&Arc::new(same)).unwrap(), 2000);
}

/// Some writers state a dictionary offset of 0 where there is no dictionary.
#[test]
fn a_dictionary_offset_of_zero_means_none() {
    let dir = tempfile::tempdir().unwrap();
    let plain_pages = WriterProperties::builder().set_dictionary_enabled(false).build();
    let (bytes, metadata, start) = good(dir.path(), plain_pages);
    let mut builder = metadata.into_builder();
    let mut groups = builder.take_row_groups();
    for group in &mut groups {
        for chunk in group.columns_mut() {
            *chunk = chunk.clone().into_builder().set_dictionary_page_offset(Some(0)).build().unwrap();
        }
    }
    let bytes = with_footer(&bytes[..start], &builder.set_row_groups(groups).build());
    let source = Arc::new(opened(dir.path(), &bytes).unwrap());
    assert_eq!(read_everything(&source).unwrap(), 2000);
    copy_everything(&source, dir.path()).unwrap();
    assert_eq!(read_all(&dir.path().join("part.parquet")).num_rows(), 2000);
}

#[test]
fn a_damaged_page_is_placed_by_file_row_group_and_column() {
    let dir = tempfile::tempdir().unwrap();
    let (mut bytes, metadata, _) = good(dir.path(), zstd());
    let (start, len) = metadata.row_group(1).column(3).byte_range();
    bytes[start as usize..(start + len) as usize].fill(0xFF);
    let source = Arc::new(opened(dir.path(), &bytes).unwrap());
    let text = read_everything(&source).unwrap_err().to_string();
    assert!(text.starts_with("bad.parquet, row group 1, column `field`"), "{text}");
    let text = copy_everything(&source, dir.path()).unwrap_err().to_string();
    assert!(text.starts_with("bad.parquet, row group 1, column `field`"), "{text}");
    assert!(!dir.path().join("part.parquet").exists());
    // damage behind an intact page header: found by the decoder, the culprit by decoding columns one at a time
    let (mut bytes, metadata, _) = good(dir.path(), zstd());
    let (start, len) = metadata.row_group(0).column(1).byte_range();
    let end = (start + len) as usize;
    bytes[end - 400..end].fill(0x11);
    let source = Arc::new(opened(dir.path(), &bytes).unwrap());
    let text = read_everything(&source).unwrap_err().to_string();
    assert!(text.starts_with("bad.parquet, row group 0, column `parallax`"), "{text}");
}

/// Gives the only page of an uncompressed one-column file a checksum, by hand: the parquet crate writes none.
fn with_checksum(dir: &Path, flip: bool) -> PathBuf {
    let batch = plain(100, 0).project(&[0]).unwrap();
    let properties = WriterProperties::builder()
        .set_dictionary_enabled(false)
        .set_statistics_enabled(parquet::file::properties::EnabledStatistics::None)
        .build();
    let path = write(&dir.join("checked.parquet"), &batch, 100, properties);
    let bytes = std::fs::read(&path).unwrap();
    let len = u32::from_le_bytes(bytes[bytes.len() - 8..bytes.len() - 4].try_into().unwrap()) as usize;
    let metadata = ParquetMetaDataReader::decode_metadata(&bytes[bytes.len() - 8 - len..bytes.len() - 8]).unwrap();
    let (start, len) = metadata.row_group(0).column(0).byte_range();
    let chunk = &bytes[start as usize..(start + len) as usize];
    // PageHeader: field 1 type, 2 and 3 sizes (800 = varint c0 0c), then field 5 as a structure with delta 2
    assert_eq!(chunk[..9], [0x15, 0x00, 0x15, 0xc0, 0x0c, 0x15, 0xc0, 0x0c, 0x2c]);
    let body = &chunk[chunk.len() - 800..];
    let crc = crc32fast::hash(body) as i32;
    let mut zigzag = ((crc << 1) ^ (crc >> 31)) as u32;
    let mut field = vec![0x15]; // field 4, i32
    while zigzag >= 0x80 {
        field.push(zigzag as u8 | 0x80);
        zigzag >>= 7;
    }
    field.push(zigzag as u8);
    let grown = field.len() as i64;
    field.push(0x1c); // field 5 is now one further on
    let mut new_chunk = [&chunk[..8], &field, &chunk[9..]].concat();
    if flip {
        let at = new_chunk.len() - 13;
        new_chunk[at] ^= 1;
    }
    let mut builder = metadata.into_builder();
    let mut groups = builder.take_row_groups();
    let old = groups[0].columns_mut()[0].clone();
    let size = old.compressed_size() + grown;
    groups[0].columns_mut()[0] =
        old.into_builder().set_total_compressed_size(size).set_total_uncompressed_size(size).build().unwrap();
    let data = [&bytes[..start as usize], &new_chunk].concat();
    std::fs::write(&path, with_footer(&data, &builder.set_row_groups(groups).build())).unwrap();
    path
}

#[test]
fn page_checksums_are_verified_where_they_are() {
    let dir = tempfile::tempdir().unwrap();
    let source = open(&with_checksum(dir.path(), false));
    assert_eq!(read_everything(&source).unwrap(), 100);
    copy_everything(&source, dir.path()).unwrap();
    let source = open(&with_checksum(dir.path(), true));
    let text = read_everything(&source).unwrap_err().to_string();
    assert!(text.contains("row group 0, column `source`") && text.to_lowercase().contains("crc"), "{text}");
    let text = copy_everything(&source, dir.path()).unwrap_err().to_string();
    assert!(text.contains("column `source`") && text.contains("does not match its checksum"), "{text}");
}

#[test]
fn a_panic_becomes_a_sentence_and_other_panics_stay() {
    let error = guard::<()>(|| panic!("index out of bounds")).unwrap_err().to_string();
    assert!(error.contains("damaged") && error.contains("index out of bounds"), "{error}");
    assert!(std::panic::catch_unwind(|| panic!("seen")).is_err());
    assert_eq!(guard(|| Ok(3)).unwrap(), 3);
}

/// A generator of our own (a 64-bit linear congruence, constants of Knuth, TAOCP 2, 3.3.4) so that a failure can be repeated.
struct Dice(u64);

impl Dice {
    fn roll(&mut self, below: usize) -> usize {
        self.0 = self.0.wrapping_mul(6364136223846793005).wrapping_add(1442695040888963407);
        (self.0 >> 33) as usize % below
    }
}

/// Mutates one to three bytes in `range` again and again; opening, reading and copying must return.
fn mutate(bytes: &[u8], range: std::ops::Range<usize>, times: usize, seed: u64) -> (usize, usize) {
    let dir = tempfile::tempdir().unwrap();
    let mut dice = Dice(seed);
    let (mut refused, mut passed) = (0, 0);
    for _ in 0..times {
        let mut mutant = bytes.to_vec();
        for _ in 0..=dice.roll(3) {
            let at = range.start + dice.roll(range.len());
            mutant[at] = match dice.roll(3) {
                0 => mutant[at] ^ (1 << dice.roll(8)),
                1 => dice.roll(256) as u8,
                _ => 0xff,
            };
        }
        let outcome = opened(dir.path(), &mutant).map(Arc::new).and_then(|source| {
            let read = read_everything(&source);
            let copied = copy_everything(&source, dir.path());
            read.and(copied)
        });
        match outcome {
            Ok(()) => passed += 1,
            Err(error) => {
                refused += 1;
                assert!(!error.message.is_empty());
            }
        }
    }
    (refused, passed)
}

#[test]
fn mutated_footers_and_pages_never_panic() {
    let dir = tempfile::tempdir().unwrap();
    let path = write(&dir.path().join("types.parquet"), &many_types(300), 150, zstd());
    let bytes = std::fs::read(&path).unwrap();
    let len = u32::from_le_bytes(bytes[bytes.len() - 8..bytes.len() - 4].try_into().unwrap()) as usize;
    let start = bytes.len() - 8 - len;
    let (refused, passed) = mutate(&bytes, start..bytes.len(), 2000, 1);
    assert!(refused > 500, "{refused} footers refused, {passed} passed");
    let (refused, passed) = mutate(&bytes, 4..start, 2000, 2);
    assert!(refused > 500, "{refused} files with damaged pages refused, {passed} passed");
}
