//! stub
pub struct ColumnSeen { pub name: String, pub kind: String, pub numeric: bool, pub float: bool, pub unit: Option<String>, pub ucd: Option<String>, pub description: Option<String> }
pub struct Draft { pub toml: String, pub could_not_guess: Vec<String> }
pub fn propose(_:&[ColumnSeen],_:&str)->Draft{todo!()}
