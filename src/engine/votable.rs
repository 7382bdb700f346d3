//! The VOTable header that the footer of each part carries: a VOTable without data whose FIELDs are the columns.
//!
//! Keys and meaning: IVOA Note "Parquet in the VO" 1.0 (2025), VOTable 1.4 (IVOA Recommendation, Ochsenbein et al. 2019).

use crate::columnar::source;
use arrow::datatypes::{DataType, Field, Schema};
use std::fmt::Write;

/// Key and value of the footer entry that names the convention.
pub const VERSION: (&str, &str) = ("IVOA.VOTable-Parquet.version", "1.0");
/// Key of the footer entry that holds the header.
pub const CONTENT: &str = "IVOA.VOTable-Parquet.content";

/// The header of a table with these columns.
pub fn header(title: &str, schema: &Schema) -> String {
    let mut xml = String::from("<?xml version=\"1.0\" encoding=\"UTF-8\"?>\n");
    xml.push_str(
        "<VOTABLE version=\"1.4\" xmlns=\"http://www.ivoa.net/xml/VOTable/v1.3\">\n<RESOURCE type=\"results\">\n",
    );
    let _ = writeln!(xml, "<TABLE name=\"{}\">", escape(title));
    for field in schema.fields() {
        let _ = writeln!(xml, "{}", field_element(field));
    }
    xml.push_str("</TABLE>\n</RESOURCE>\n</VOTABLE>\n");
    xml
}

fn field_element(field: &Field) -> String {
    let (datatype, array) = datatype(field.data_type());
    let mut xml = format!("<FIELD name=\"{}\" datatype=\"{datatype}\"", escape(field.name()));
    let mut attribute = |key: &str, value: &str| {
        if !value.is_empty() {
            let _ = write!(xml, " {key}=\"{}\"", escape(value));
        }
    };
    attribute("arraysize", &array);
    attribute("unit", source::unit(field).unwrap_or_default());
    attribute("ucd", source::ucd(field).unwrap_or_default());
    match source::description(field) {
        Some(text) if !text.is_empty() => {
            let _ = write!(xml, "><DESCRIPTION>{}</DESCRIPTION></FIELD>", escape(text));
        }
        _ => xml.push_str("/>"),
    }
    xml
}

/// VOTable datatype and arraysize. VOTable has no unsigned integers but bytes: the next wider type stands for them.
/// Types without a counterpart (dates, decimals, structures) are named as text, which is how VOTable carries them.
fn datatype(kind: &DataType) -> (&'static str, String) {
    let scalar = |name| (name, String::new());
    match kind {
        DataType::Boolean => scalar("boolean"),
        DataType::UInt8 => scalar("unsignedByte"),
        DataType::Int8 | DataType::Int16 => scalar("short"),
        DataType::UInt16 | DataType::Int32 => scalar("int"),
        DataType::UInt32 | DataType::Int64 | DataType::UInt64 => scalar("long"),
        DataType::Float16 | DataType::Float32 => scalar("float"),
        DataType::Float64 => scalar("double"),
        DataType::Binary | DataType::LargeBinary | DataType::BinaryView => ("unsignedByte", "*".into()),
        DataType::FixedSizeBinary(size) => ("unsignedByte", size.to_string()),
        DataType::List(inner) | DataType::LargeList(inner) => match datatype(inner.data_type()) {
            (name, array) if array.is_empty() => (name, "*".into()),
            _ => ("char", "*".into()),
        },
        DataType::FixedSizeList(inner, size) => match datatype(inner.data_type()) {
            (name, array) if array.is_empty() => (name, size.to_string()),
            _ => ("char", "*".into()),
        },
        _ => ("char", "*".into()),
    }
}

fn escape(text: &str) -> String {
    let mut out = String::with_capacity(text.len());
    for c in text.chars() {
        match c {
            '&' => out.push_str("&amp;"),
            '<' => out.push_str("&lt;"),
            '>' => out.push_str("&gt;"),
            '"' => out.push_str("&quot;"),
            // XML 1.0 has no other control characters, not even escaped
            c if c.is_control() && !matches!(c, '\n' | '\t') => out.push(' '),
            c => out.push(c),
        }
    }
    out
}
