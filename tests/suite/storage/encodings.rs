//! The measurement behind the encodings of computed columns. Run it with
//! `cargo test --release --test suite encodings -- --ignored --nocapture`; the figures stand in `release/layout.rs`.

use std::sync::Arc;
use std::time::Instant;

use arrow::array::*;
use arrow::datatypes::*;
use parquet::arrow::ArrowWriter;
use parquet::basic::{Compression, Encoding, ZstdLevel};
use parquet::file::properties::{EnabledStatistics, WriterProperties};

/// Uniform in (0, 1) from a counter (SplitMix64, Steele, Lea & Flood 2014).
fn uniform(i: u64) -> f64 {
    let mut z = i.wrapping_mul(0x9E37_79B9_7F4A_7C15).wrapping_add(0x1234_5678_9ABC_DEF1);
    z = (z ^ (z >> 30)).wrapping_mul(0xBF58_476D_1CE4_E5B9);
    z = (z ^ (z >> 27)).wrapping_mul(0x94D0_49BB_1331_11EB);
    ((z ^ (z >> 31)) >> 11) as f64 / (1u64 << 53) as f64
}

/// Columns as a posterior makes them: moduli between 5 and 16 mag whose quantiles lie close, absolute magnitudes, colours, a
/// share near 0, one row in 40 null; a verdict with few values and a boolean.
fn posterior_like(rows: usize) -> (Vec<ArrayRef>, ArrayRef, ArrayRef) {
    let column = |value: &dyn Fn(u64) -> f64| -> ArrayRef {
        Arc::new(
            (0..rows as u64)
                .map(|i| (uniform(i ^ (7 << 40)) > 0.025).then(|| value(i) as f32))
                .collect::<Float32Array>(),
        )
    };
    let modulus = |i: u64| 16.0 - 11.0 * uniform(i).powi(3);
    let width = |i: u64| 0.02 + 0.4 * uniform(i + (1 << 40)).powi(2);
    let magnitude = |i: u64| 21.0 - 6.0 * uniform(i + (2 << 40)).powi(2);
    let floats: Vec<ArrayRef> = vec![
        column(&|i| modulus(i) - width(i)),
        column(&modulus),
        column(&|i| modulus(i) + 1.05 * width(i)),
        column(&width),
        column(&|i| 10f64.powf(modulus(i) / 5.0 + 1.0)),
        column(&|i| magnitude(i) - modulus(i)),
        column(&|i| 0.6 + 1.5 * uniform(i + (3 << 40))),
        column(&|i| uniform(i + (4 << 40)).powi(6)),
        column(&|i| -0.017 - 0.02 * uniform(i % 977)),
        column(&|i| 0.8 * uniform(i / 64)),
    ];
    let verdict = UInt32Array::from_iter_values(
        (0..rows as u64)
            .map(|i| u32::from(uniform(i + (5 << 40)) < 0.3) | (u32::from(uniform(i + (6 << 40)) < 0.02) << 1)),
    );
    let accepted = BooleanArray::from(verdict.values().iter().map(|v| *v == 0).collect::<Vec<_>>());
    (floats, Arc::new(verdict), Arc::new(accepted))
}

/// Seconds this thread spent on a core, so that other work on the machine does not count; wall clock where the kernel does not tell.
fn core_seconds(started: Instant) -> f64 {
    let told = std::fs::read_to_string("/proc/thread-self/schedstat").ok();
    let nanoseconds = told.and_then(|text| text.split_whitespace().next()?.parse::<f64>().ok());
    nanoseconds.map_or(started.elapsed().as_secs_f64(), |ns| ns * 1e-9)
}

fn measure(what: &str, columns: &[ArrayRef], properties: WriterProperties) {
    let fields: Vec<Field> = columns
        .iter()
        .enumerate()
        .map(|(i, c)| Field::new(format!("c{i}"), c.data_type().clone(), c.is_nullable()))
        .collect();
    let batch = RecordBatch::try_new(Arc::new(Schema::new(fields)), columns.to_vec()).unwrap();
    let mut best = f64::INFINITY;
    let mut bytes = 0;
    for _ in 0..3 {
        let clock = Instant::now();
        let start = core_seconds(clock);
        let mut writer = ArrowWriter::try_new(Vec::new(), batch.schema(), Some(properties.clone())).unwrap();
        for at in (0..batch.num_rows()).step_by(16_384) {
            writer.write(&batch.slice(at, 16_384.min(batch.num_rows() - at))).unwrap();
        }
        bytes = writer.into_inner().unwrap().len();
        best = best.min(core_seconds(clock) - start);
    }
    let values = batch.num_rows() as f64 * columns.len() as f64;
    let size = bytes as f64 / values;
    // the kernel counts in ticks of a few milliseconds
    if best < 0.02 {
        println!("{what:48} too fast for this clock         {size:6.3} bytes/value");
    } else {
        println!("{what:48} {:7.1} M values/core s  {size:6.3} bytes/value", values / best * 1e-6);
    }
}

#[test]
#[ignore = "a measurement, not a check"]
fn encodings_of_computed_columns() {
    let (floats, verdict, accepted) = posterior_like(1_000_000);
    let level = |n| Compression::ZSTD(ZstdLevel::try_new(n).unwrap());
    let codecs = [
        ("none", Compression::UNCOMPRESSED),
        ("snappy", Compression::SNAPPY),
        ("lz4_raw", Compression::LZ4_RAW),
        ("zstd 1", level(1)),
        ("zstd 3", level(3)),
    ];
    for (page_rows, statistics) in
        [(20_000, EnabledStatistics::None), (65_536, EnabledStatistics::None), (65_536, EnabledStatistics::Page)]
    {
        for (name, codec) in codecs {
            for encoding in [Encoding::PLAIN, Encoding::BYTE_STREAM_SPLIT] {
                let properties = WriterProperties::builder()
                    .set_dictionary_enabled(false)
                    .set_encoding(encoding)
                    .set_compression(codec)
                    .set_statistics_enabled(statistics)
                    .set_data_page_row_count_limit(page_rows)
                    .build();
                measure(&format!("f32 {encoding} {name}, {page_rows} rows, {statistics:?}"), &floats, properties);
            }
        }
    }
    for (name, codec) in codecs {
        for dictionary in [true, false] {
            let properties = || {
                WriterProperties::builder()
                    .set_dictionary_enabled(dictionary)
                    .set_compression(codec)
                    .set_data_page_row_count_limit(65_536)
            };
            measure(
                &format!("verdict {name}, dictionary {dictionary}"),
                std::slice::from_ref(&verdict),
                properties().build(),
            );
            measure(&format!("accepted {name}"), std::slice::from_ref(&accepted), properties().build());
        }
        let rle = WriterProperties::builder()
            .set_encoding(Encoding::RLE)
            .set_dictionary_enabled(false)
            .set_compression(codec)
            .build();
        measure(&format!("accepted RLE {name}"), std::slice::from_ref(&accepted), rle);
    }
}
