//! A plan drafted from columns: with metadata, by names alone, with odd names, and from a mock.

use parquet::arrow::arrow_reader::ParquetRecordBatchReaderBuilder;
use std::fs::File;
use tenparsec::mock::{self, Options};
use tenparsec::plan::draft::{ColumnSeen, Draft, propose};
use toml::Table;

fn column(name: &str, kind: &str, unit: &str, ucd: &str) -> ColumnSeen {
    let text = |text: &str| (!text.is_empty()).then(|| text.to_owned());
    ColumnSeen {
        name: name.into(),
        kind: kind.into(),
        numeric: kind != "string",
        float: kind == "float",
        unit: text(unit),
        ucd: text(ucd),
        description: None,
    }
}

fn parsed(draft: &Draft) -> Table {
    draft.toml.parse().unwrap_or_else(|e| panic!("{e}\n{}", draft.toml))
}

fn keeps(plan: &Table) -> Vec<&str> {
    plan["cuts"].as_array().expect("cuts").iter().map(|cut| cut["keep"].as_str().expect("text")).collect()
}

#[test]
fn a_mock_gets_a_complete_plan() {
    let folder = tempfile::tempdir().expect("a folder");
    for truth in [true, false] {
        let options = Options { truth, ..Options::new(folder.path().join(truth.to_string()), 10) };
        let summary = mock::write(&options, &|_| ()).expect("the mock is written");
        let file = File::open(&summary.files[0]).expect("the file opens");
        let schema = ParquetRecordBatchReaderBuilder::try_new(file).expect("the footer is read").schema().clone();
        let columns: Vec<ColumnSeen> = schema
            .fields()
            .iter()
            .map(|field| ColumnSeen {
                name: field.name().clone(),
                kind: field.data_type().to_string(),
                numeric: field.data_type().is_numeric(),
                float: field.data_type().is_floating(),
                unit: field.metadata().get("unit").cloned(),
                ucd: field.metadata().get("ucd").cloned(),
                description: field.metadata().get("description").cloned(),
            })
            .collect();
        let draft = propose(&columns, "catalogue/*.parquet");
        assert_eq!(draft.could_not_guess, Vec::<String>::new());
        let plan = parsed(&draft);
        let expected: Table = mock::plan_text("catalogue/*.parquet").parse().expect("the mock's plan is TOML");
        for section in ["columns", "bands", "extinction", "cuts", "distance"] {
            assert_eq!(plan[section], expected[section], "{section}");
        }
        assert_eq!(plan["release"]["catalogue"], expected["release"]["catalogue"]);
        assert_eq!(plan["colours"].to_string().replace(['\n', ' '], ""), r#"{B_G=["B","G"],G_R=["G","R"]}"#);
        assert_eq!(plan["tables"]["colour_magnitude"][0]["band"].as_str(), Some("G"));
        assert_eq!(plan["tables"]["query"][0]["name"].as_str(), Some("by_field"));
    }
}

#[test]
fn names_alone_are_enough() {
    let columns = [
        column("sourceId", "integer", "", ""),
        column("RA_deg", "float", "", ""),
        column("DEC_deg", "float", "", ""),
        column("ra_error", "float", "", ""),
        column("Plx", "float", "", ""),
        column("e_Plx", "float", "", ""),
        column("parallax_over_error", "float", "", ""),
        column("gmag", "float", "", ""),
        column("e_gmag", "float", "", ""),
        column("mag_i2", "float", "", ""),
        column("mag_i2_err", "float", "", ""),
        column("abs_mag", "float", "", ""),
        column("n_mag", "integer", "", ""),
    ];
    let draft = propose(&columns, "sky.parquet");
    let plan = parsed(&draft);
    let roles = plan["columns"].as_table().expect("columns");
    for (role, name) in
        [("id", "sourceId"), ("ra", "RA_deg"), ("dec", "DEC_deg"), ("parallax", "Plx"), ("parallax_error", "e_Plx")]
    {
        assert_eq!(roles[role].as_str(), Some(name), "{role}");
    }
    let bands = plan["bands"].as_table().expect("bands");
    assert_eq!(bands.len(), 2, "{}", draft.toml);
    assert_eq!(bands["G"]["magnitude_error"].as_str(), Some("e_gmag"));
    assert_eq!(bands["I2"]["magnitude_error"].as_str(), Some("mag_i2_err"));
    assert_eq!(plan["colours"]["G_I2"].as_array().map(Vec::len), Some(2));
    assert_eq!(plan["extinction"]["model"].as_str(), Some("none"));
    assert_eq!(keeps(&plan), ["parallax_over_error > 5"]);
    assert!(draft.could_not_guess.iter().any(|text| text.contains("extinction.column")));
}

#[test]
fn what_is_missing_is_said_in_both_places() {
    let columns = [column("temperature", "float", "K", "phys.temperature"), column("plx", "float", "arcsec", "")];
    let draft = propose(&columns, "a b\\\"c\"/*.parquet");
    let plan = parsed(&draft);
    assert_eq!(plan["release"]["catalogue"][0].as_str(), Some("a b\\\"c\"/*.parquet"));
    assert!(plan["columns"].as_table().expect("columns").is_empty());
    for missing in ["columns.id", "columns.parallax,", "columns.parallax_error", "bands", "is in arcsec"] {
        assert!(draft.could_not_guess.iter().any(|text| text.contains(missing)), "{missing}: {draft:?}");
    }
    for missing in ["columns.id", "columns.parallax,", "columns.parallax_error", "bands"] {
        assert!(draft.toml.lines().any(|line| line.starts_with('#') && line.contains(missing)), "{missing}");
    }
    assert_eq!(keeps(&plan), ["parallax_over_error > 5"]);
}

#[test]
fn odd_names_are_quoted() {
    let columns = [
        column("id \"x\"", "string", "", "meta.id;meta.main"),
        column("par-allax", "float", "mas", "pos.parallax"),
        column("par-allax σ", "float", "mas", "stat.error;pos.parallax"),
        column("Fit \"Q\"", "float", "", "stat.fit.goodness"),
        column("flux V", "float", "s**-1", "phot.flux;em.opt.V"),
        column("order", "string", "", "meta.id;obs.field"),
    ];
    let draft = propose(&columns, "x");
    let plan = parsed(&draft);
    assert_eq!(plan["columns"]["id"].as_str(), Some("id \"x\""));
    assert_eq!(plan["columns"]["parallax"].as_str(), Some("par-allax"));
    assert_eq!(plan["columns"]["parallax_error"].as_str(), Some("par-allax σ"));
    assert_eq!(keeps(&plan), ["parallax_over_error > 5", "\"Fit \"\"Q\"\"\" < 1.4"]);
    assert!(plan["tables"]["query"][0]["sql"].as_str().expect("text").contains("GROUP BY \"order\""));
    assert!(!plan.contains_key("bands"), "a band by flux waits for its zero point");
    assert!(draft.toml.contains("# flux = \"flux V\""));
    assert!(draft.could_not_guess.iter().any(|text| text.contains("bands.V.zero_point")));
}
