//! Checks a TOML document against the JSON Schema of the plan and collects every fault with its key path and line.
//!
//! Only the schema keywords that the plan's types produce are read: `$ref`, `properties`, `required`,
//! `additionalProperties`, `type`, `const`, `enum`, `oneOf` (told apart by a constant property), `anyOf` (told apart by
//! the TOML type), `items`, lengths and numeric bounds. Unknown keys are refused, and no number may be NaN or
//! infinite, so every bound holds.

use crate::error::{Error, suggestion};
use serde_json::Value;
use toml::de::{DeTable, DeValue};

/// Faults of `text` as a document under `schema`; empty when deserialisation will succeed.
pub fn faults(text: &str, document: &DeTable<'_>, schema: &Value) -> Vec<Error> {
    let mut walk = Walk { text, root: schema, faults: Vec::new() };
    walk.table(schema, document, "", 0);
    walk.faults
}

/// Line of a byte offset, from 1.
pub fn line_of(text: &str, at: usize) -> usize {
    text.bytes().take(at).filter(|b| *b == b'\n').count() + 1
}

struct Walk<'a> {
    text: &'a str,
    root: &'a Value,
    faults: Vec<Error>,
}

impl<'a> Walk<'a> {
    fn fault(&mut self, path: &str, at: usize, message: String) {
        let line = line_of(self.text, at);
        let key = if path.is_empty() { format!("line {line}") } else { format!("`{path}` (line {line})") };
        self.faults.push(Error::plan(message).at_key(key));
    }

    fn resolve(&self, mut schema: &'a Value) -> &'a Value {
        while let Some(pointer) = schema.get("$ref").and_then(Value::as_str) {
            schema = self.root.pointer(pointer.trim_start_matches('#')).unwrap_or(&Value::Null);
        }
        schema
    }

    fn value(&mut self, schema: &'a Value, value: &DeValue<'_>, path: &str, at: usize) {
        let schema = self.resolve(schema);
        if let Some(options) = schema.get("anyOf").and_then(Value::as_array) {
            return self.any_of(options, value, path, at);
        }
        if let Some(options) = schema.get("oneOf").and_then(Value::as_array) {
            return self.one_of(options, value, path, at);
        }
        if let Some(words) = schema.get("enum").and_then(Value::as_array) {
            return self.word(&words.iter().filter_map(Value::as_str).collect::<Vec<_>>(), value, path, at);
        }
        let Some(expected) = kinds(schema).first().copied() else { return };
        if !kinds(schema).iter().any(|kind| fits(kind, value)) {
            let text = format!("{} is needed here, not {}", name_of(expected), describe(value));
            return self.fault(path, at, text);
        }
        match value {
            DeValue::Table(table) => self.table(schema, table, path, at),
            DeValue::Array(items) => {
                self.length(schema, items.len(), "entries", path, at, ["minItems", "maxItems"]);
                if let Some(each) = schema.get("items") {
                    for (i, item) in items.iter().enumerate() {
                        self.value(each, item.get_ref(), &format!("{path}[{i}]"), item.span().start);
                    }
                }
            }
            DeValue::String(text) => {
                self.length(schema, text.chars().count(), "characters", path, at, ["minLength", "maxLength"]);
            }
            DeValue::Integer(_) | DeValue::Float(_) => self.number(schema, value, path, at),
            _ => {}
        }
    }

    fn table(&mut self, schema: &'a Value, table: &DeTable<'_>, path: &str, at: usize) {
        let inner = |name: &str| if path.is_empty() { name.to_owned() } else { format!("{path}.{name}") };
        let properties = schema.get("properties").and_then(Value::as_object);
        let known = || properties.into_iter().flat_map(|p| p.keys().map(String::as_str));
        let others = schema.get("additionalProperties").filter(|v| v.is_object());
        for (key, value) in table.iter() {
            let name = key.get_ref().as_ref();
            match properties.and_then(|p| p.get(name)).or(others) {
                Some(expected) => self.value(expected, value.get_ref(), &inner(name), value.span().start),
                None => {
                    let list = known().map(|k| format!("`{k}`")).collect::<Vec<_>>().join(", ");
                    let text = format!("unknown key.{} Known here: {list}", suggestion(name, known()));
                    self.fault(&inner(name), key.span().start, text);
                }
            }
        }
        for name in schema.get("required").and_then(Value::as_array).into_iter().flatten().filter_map(Value::as_str) {
            if !table.contains_key(name) {
                let property = properties.and_then(|p| p.get(name)).unwrap_or(&Value::Null);
                let what = property.get("description").or_else(|| self.resolve(property).get("description"));
                let what = what.and_then(Value::as_str).unwrap_or_default().lines().next().unwrap_or_default();
                let text = format!("is missing and has no default. It says: {what}");
                self.fault(&inner(name), at, text);
            }
        }
    }

    /// Variants of a tagged enum: objects with a constant property, or constant words.
    fn one_of(&mut self, options: &'a [Value], value: &DeValue<'_>, path: &str, at: usize) {
        let options: Vec<&'a Value> = options.iter().map(|o| self.resolve(o)).collect();
        let words: Vec<&str> = options
            .iter()
            .flat_map(|o| {
                let constant = o.get("const").and_then(Value::as_str);
                let listed = o.get("enum").and_then(Value::as_array).into_iter().flatten().filter_map(Value::as_str);
                constant.into_iter().chain(listed)
            })
            .collect();
        if !words.is_empty() {
            return self.word(&words, value, path, at);
        }
        let variants: Vec<(&str, &str, &'a Value)> = options.iter().filter_map(|o| variant(o)).collect();
        let Some((tag, _, _)) = variants.first().copied() else { return };
        let choices = variants.iter().map(|(_, name, _)| format!("\"{name}\"")).collect::<Vec<_>>().join(" or ");
        let DeValue::Table(table) = value else {
            let text = format!("a table with `{tag}` = {choices} is needed here, not {}", describe(value));
            return self.fault(path, at, text);
        };
        let Some(chosen) = table.get(tag) else {
            return self.fault(path, at, format!("`{tag}` is missing; it says which kind: {choices}"));
        };
        let (inner, at_tag) = (format!("{path}.{tag}"), chosen.span().start);
        let DeValue::String(name) = chosen.get_ref() else {
            return self.fault(&inner, at_tag, format!("text is needed here, not {}", describe(chosen.get_ref())));
        };
        match variants.iter().find(|v| v.1 == name.as_ref()) {
            Some((_, _, option)) => self.table(option, table, path, at),
            None => {
                let hint = suggestion(name, variants.iter().map(|v| v.1));
                self.fault(&inner, at_tag, format!("\"{name}\" is unknown here.{hint} Known: {choices}"));
            }
        }
    }

    /// Options told apart by the TOML type of the value.
    fn any_of(&mut self, options: &'a [Value], value: &DeValue<'_>, path: &str, at: usize) {
        match options.iter().find(|option| self.expected(option).iter().any(|kind| fits(kind, value))) {
            Some(option) => self.value(option, value, path, at),
            None => {
                let mut names: Vec<&str> = options.iter().flat_map(|o| self.expected(o)).map(name_of).collect();
                names.retain(|name| *name != "null");
                names.dedup();
                self.fault(path, at, format!("{} is needed here, not {}", names.join(" or "), describe(value)));
            }
        }
    }

    /// TOML types that a schema takes, through its alternatives.
    fn expected(&self, schema: &'a Value) -> Vec<&'a str> {
        let schema = self.resolve(schema);
        let alternatives = ["anyOf", "oneOf"].iter().filter_map(|key| schema.get(key)?.as_array()).flatten();
        alternatives.flat_map(|option| self.expected(option)).chain(kinds(schema)).collect()
    }

    fn word(&mut self, words: &[&str], value: &DeValue<'_>, path: &str, at: usize) {
        let list = words.iter().map(|w| format!("\"{w}\"")).collect::<Vec<_>>().join(" or ");
        match value {
            DeValue::String(text) if words.contains(&text.as_ref()) => {}
            DeValue::String(text) => {
                let hint = suggestion(text, words.iter().copied());
                self.fault(path, at, format!("\"{text}\" is unknown here.{hint} Known: {list}"));
            }
            other => self.fault(path, at, format!("{list} is needed here, not {}", describe(other))),
        }
    }

    fn length(&mut self, schema: &Value, length: usize, what: &str, path: &str, at: usize, keys: [&str; 2]) {
        let bound = |key: &str| schema.get(key).and_then(Value::as_u64);
        if let Some(low) = bound(keys[0]).filter(|low| (length as u64) < *low) {
            self.fault(path, at, format!("needs at least {low} {what}, has {length}"));
        }
        if let Some(high) = bound(keys[1]).filter(|high| (length as u64) > *high) {
            self.fault(path, at, format!("takes at most {high} {what}, has {length}"));
        }
    }

    fn number(&mut self, schema: &Value, value: &DeValue<'_>, path: &str, at: usize) {
        let Some(number) = as_number(value).filter(|n| n.is_finite()) else {
            return self.fault(path, at, format!("a finite number is needed here, not {}", describe(value)));
        };
        let bound = |key: &str| schema.get(key).and_then(Value::as_f64);
        if let Some(low) = bound("minimum").filter(|low| number < *low) {
            self.fault(path, at, format!("must be at least {low}, not {number}"));
        }
        if let Some(high) = bound("maximum").filter(|high| number > *high) {
            self.fault(path, at, format!("must be at most {high}, not {number}"));
        }
        if let Some(low) = bound("exclusiveMinimum").filter(|low| number <= *low) {
            self.fault(path, at, format!("must be above {low}, not {number}"));
        }
    }
}

/// Tag, its value and the schema of one variant of a tagged enum.
fn variant(option: &Value) -> Option<(&str, &str, &Value)> {
    let properties = option.get("properties")?.as_object()?;
    properties.iter().find_map(|(tag, p)| Some((tag.as_str(), p.get("const")?.as_str()?, option)))
}

fn kinds(schema: &Value) -> Vec<&str> {
    match schema.get("type") {
        Some(Value::String(kind)) => vec![kind],
        Some(Value::Array(list)) => list.iter().filter_map(Value::as_str).collect(),
        _ => Vec::new(),
    }
}

fn as_number(value: &DeValue<'_>) -> Option<f64> {
    match value {
        DeValue::Integer(integer) => i64::from_str_radix(integer.as_str(), integer.radix()).ok().map(|i| i as f64),
        DeValue::Float(float) => float.as_str().parse().ok(),
        _ => None,
    }
}

fn fits(kind: &str, value: &DeValue<'_>) -> bool {
    match value {
        DeValue::String(_) => kind == "string",
        DeValue::Integer(_) => kind == "integer" || kind == "number",
        DeValue::Float(_) => kind == "number",
        DeValue::Boolean(_) => kind == "boolean",
        DeValue::Array(_) => kind == "array",
        DeValue::Table(_) => kind == "object",
        DeValue::Datetime(_) => false,
    }
}

fn name_of(kind: &str) -> &str {
    match kind {
        "string" => "text",
        "integer" => "a whole number",
        "number" => "a number",
        "boolean" => "true or false",
        "array" => "a list",
        "object" => "a table",
        other => other,
    }
}

fn describe(value: &DeValue<'_>) -> String {
    match value {
        DeValue::String(text) => format!("the text \"{text}\""),
        DeValue::Integer(number) => format!("the whole number {number}"),
        DeValue::Float(number) => format!("the number {number}"),
        DeValue::Boolean(truth) => truth.to_string(),
        DeValue::Datetime(date) => format!("the date {date}"),
        DeValue::Array(_) => "a list".to_owned(),
        DeValue::Table(_) => "a table".to_owned(),
    }
}
