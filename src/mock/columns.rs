//! The columns of the mock catalogue: names, types, units (VOUnits), UCDs (UCD1+ 1.6) and meaning, and rows into arrays.

use std::collections::HashMap;
use std::sync::Arc;

use arrow::array::{ArrayRef, Float32Builder, Float64Builder, Int64Builder, StringBuilder, UInt16Builder};
use arrow::datatypes::{DataType, Field, Schema};

use super::stars::POPULATIONS;
use super::survey::{FIELDS, Row, field_name};

/// Schema of the catalogue, with or without the columns of truth.
pub fn schema(truth: bool) -> Schema {
    let field = |name: &str, kind: DataType, nullable: bool, unit: &str, ucd: &str, description: &str| {
        let texts = [("unit", unit), ("ucd", ucd), ("description", description)];
        let texts = texts.into_iter().filter(|text| !text.1.is_empty());
        let metadata: HashMap<String, String> = texts.map(|(k, v)| (k.to_string(), v.to_string())).collect();
        Field::new(name, kind, nullable).with_metadata(metadata)
    };
    use DataType::{Float32, Float64, Int64, UInt16, Utf8};
    let mut fields = vec![
        field("source", Int64, false, "", "meta.id;meta.main", "Identifier, unique in the survey"),
        field("field", Utf8, false, "", "meta.id;obs.field", "Field of the survey"),
        field("ra", Float64, false, "deg", "pos.eq.ra;meta.main", "Right ascension, ICRS"),
        field("dec", Float64, false, "deg", "pos.eq.dec;meta.main", "Declination, ICRS"),
        field("parallax", Float64, true, "mas", "pos.parallax.trig", "Parallax as measured, zero point not removed"),
        field(
            "parallax_error",
            Float32,
            true,
            "mas",
            "stat.error;pos.parallax.trig",
            "Standard error of the parallax as quoted by the survey",
        ),
    ];
    for (name, word) in [("g", "em.opt.V"), ("b", "em.opt.B"), ("r", "em.opt.R")] {
        let band = name.to_uppercase();
        fields.push(field(
            &format!("{name}_mag"),
            Float32,
            true,
            "mag",
            &format!("phot.mag;{word}"),
            &format!("Magnitude in the survey's {band} band"),
        ));
        fields.push(field(
            &format!("{name}_mag_error"),
            Float32,
            true,
            "mag",
            &format!("stat.error;phot.mag;{word}"),
            &format!("Standard error of the {band} magnitude"),
        ));
    }
    fields.extend([
        field("a_v", Float32, true, "mag", "phys.absorption;em.opt.V", "Estimate of the foreground extinction in V"),
        field(
            "fit_quality",
            Float32,
            true,
            "",
            "stat.fit.goodness",
            "Goodness of the astrometric fit, near 1 when good",
        ),
        field("visits", UInt16, false, "", "meta.number;obs", "Visits that the astrometric fit used"),
    ]);
    if truth {
        let modelled = |ucd: &str| format!("{ucd};meta.modelled");
        fields.extend([
            field("true_distance", Float64, false, "pc", &modelled("pos.distance"), "Distance that was put in"),
            field(
                "true_absmag_g",
                Float32,
                false,
                "mag",
                &modelled("phys.magAbs;em.opt.V"),
                "Absolute magnitude in G that was put in",
            ),
            field(
                "true_a_v",
                Float32,
                false,
                "mag",
                &modelled("phys.absorption;em.opt.V"),
                "Extinction in V that was put in",
            ),
            field(
                "true_zero_point",
                Float32,
                false,
                "mas",
                &modelled("arith.zp;pos.parallax.trig"),
                "Zero point that was added to the parallax",
            ),
            field("population", Utf8, false, "", &modelled("src.class"), "Part of the Galaxy and kind of star"),
        ]);
    }
    Schema::new(fields)
}

/// Lays `n` rows out as arrays in the order of [`schema`].
pub fn arrays(rows: impl Iterator<Item = Row>, n: usize, truth: bool) -> Vec<ArrayRef> {
    let names: Vec<String> = (0..FIELDS).map(field_name).collect();
    let float = || Float32Builder::with_capacity(n);
    let mut source = Int64Builder::with_capacity(n);
    let mut field = StringBuilder::with_capacity(n, 12 * n);
    let (mut ra, mut dec) = (Float64Builder::with_capacity(n), Float64Builder::with_capacity(n));
    let (mut parallax, mut parallax_error) = (Float64Builder::with_capacity(n), float());
    let mut photometry: [Float32Builder; 6] = std::array::from_fn(|_| float());
    let (mut a_v, mut fit_quality) = (float(), float());
    let mut visits = UInt16Builder::with_capacity(n);
    let room = if truth { n } else { 0 };
    let mut distance = Float64Builder::with_capacity(room);
    let mut true_floats: [Float32Builder; 3] = std::array::from_fn(|_| Float32Builder::with_capacity(room));
    let mut population = StringBuilder::with_capacity(room, 24 * room);
    let single = |value: Option<f64>| value.map(|v| v as f32);
    for row in rows {
        source.append_value(row.source);
        field.append_value(&names[row.field]);
        ra.append_value(row.ra);
        dec.append_value(row.dec);
        parallax.append_option(row.parallax);
        parallax_error.append_option(single(row.parallax_error));
        for band in 0..3 {
            photometry[2 * band].append_option(single(row.magnitudes[band]));
            photometry[2 * band + 1].append_option(single(row.magnitude_errors[band]));
        }
        a_v.append_option(single(row.a_v));
        fit_quality.append_option(single(row.fit_quality));
        visits.append_value(row.visits);
        if truth {
            distance.append_value(row.truth.distance);
            let values = [row.truth.absmag_g, row.truth.a_v, row.truth.zero_point];
            for (builder, value) in true_floats.iter_mut().zip(values) {
                builder.append_value(value as f32);
            }
            population.append_value(POPULATIONS[usize::from(row.truth.population)]);
        }
    }
    let mut arrays: Vec<ArrayRef> = vec![
        Arc::new(source.finish()),
        Arc::new(field.finish()),
        Arc::new(ra.finish()),
        Arc::new(dec.finish()),
        Arc::new(parallax.finish()),
        Arc::new(parallax_error.finish()),
    ];
    arrays.extend(photometry.iter_mut().map(|builder| Arc::new(builder.finish()) as ArrayRef));
    arrays.extend([Arc::new(a_v.finish()) as ArrayRef, Arc::new(fit_quality.finish()), Arc::new(visits.finish())]);
    if truth {
        arrays.push(Arc::new(distance.finish()));
        arrays.extend(true_floats.iter_mut().map(|builder| Arc::new(builder.finish()) as ArrayRef));
        arrays.push(Arc::new(population.finish()));
    }
    arrays
}
