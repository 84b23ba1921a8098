//! Typed access to the JSON of a metadata file: every fault names the file, the key and what is
//! allowed. A value of the wrong type is never taken for a missing one.

use std::path::Path;

use serde_json::{Map, Value};

use crate::capture::CaptureError;

/// One object of the metadata, and where it stands.
pub(super) struct Fields<'a> {
    path: &'a Path,
    place: String,
    map: &'a Map<String, Value>,
}

impl<'a> Fields<'a> {
    /// The object `value`, which stands at `place` (empty for the whole file).
    pub(super) fn new(
        path: &'a Path,
        place: String,
        value: &'a Value,
    ) -> Result<Fields<'a>, CaptureError> {
        match value {
            Value::Object(map) => Ok(Fields { path, place, map }),
            _ if place.is_empty() => Err(CaptureError::Unusable {
                path: path.to_owned(),
                problem: format!("is {}; it must be a JSON object", shown(value)),
            }),
            _ => Err(CaptureError::Value {
                path: path.to_owned(),
                key: place,
                problem: format!("is {}; it must be an object", shown(value)),
            }),
        }
    }

    /// The object under `key`.
    pub(super) fn object(&self, key: &str) -> Result<Fields<'a>, CaptureError> {
        let value = self.map.get(key).ok_or_else(|| self.missing(key, "an object"))?;
        Fields::new(self.path, self.key(key), value)
    }

    /// The objects of the array under `key`.
    pub(super) fn objects(&self, key: &str) -> Result<Option<Vec<Fields<'a>>>, CaptureError> {
        let Some(value) = self.map.get(key) else { return Ok(None) };
        let values = value.as_array().ok_or_else(|| self.wrong(key, value, "an array"))?;
        let place = self.key(key);
        let objects = values
            .iter()
            .enumerate()
            .map(|(index, value)| Fields::new(self.path, format!("{place}[{index}]"), value));
        objects.collect::<Result<Vec<_>, _>>().map(Some)
    }

    /// The text under `key`.
    pub(super) fn text(&self, key: &str) -> Result<Option<&'a str>, CaptureError> {
        let Some(value) = self.map.get(key) else { return Ok(None) };
        value.as_str().map(Some).ok_or_else(|| self.wrong(key, value, "a string"))
    }

    /// The number under `key`, always finite.
    pub(super) fn number(&self, key: &str) -> Result<Option<f64>, CaptureError> {
        let Some(value) = self.map.get(key) else { return Ok(None) };
        value.as_f64().map(Some).ok_or_else(|| self.wrong(key, value, "a number"))
    }

    /// The whole number under `key`, of either sign; `3.0` and `3e0` are whole numbers too.
    pub(super) fn whole(&self, key: &str) -> Result<Option<i64>, CaptureError> {
        let Some(value) = self.map.get(key) else { return Ok(None) };
        // Above 2^53 a double no longer tells neighbours apart, so such a value may not be meant.
        let exact = |number: &f64| number.fract() == 0.0 && number.abs() <= (1_i64 << 53) as f64;
        let whole = value.as_i64().or_else(|| value.as_f64().filter(exact).map(|n| n as i64));
        whole.map(Some).ok_or_else(|| self.wrong(key, value, "a whole number"))
    }

    /// The count or index under `key`: a whole number from 0.
    pub(super) fn count(&self, key: &str) -> Result<Option<u64>, CaptureError> {
        let Some(whole) = self.whole(key)? else { return Ok(None) };
        match u64::try_from(whole) {
            Ok(count) => Ok(Some(count)),
            Err(_) => Err(self.fault(key, format!("is {whole}; it must be a whole number from 0"))),
        }
    }

    /// The fault that `key` is missing; `needed` says what it must be.
    pub(super) fn missing(&self, key: &str, needed: &str) -> CaptureError {
        self.fault(key, format!("is missing; it must be {needed}"))
    }

    /// Any other fault of the value under `key`.
    pub(super) fn fault(&self, key: &str, problem: String) -> CaptureError {
        CaptureError::Value { path: self.path.to_owned(), key: self.key(key), problem }
    }

    fn wrong(&self, key: &str, value: &Value, needed: &str) -> CaptureError {
        self.fault(key, format!("is {}; it must be {needed}", shown(value)))
    }

    fn key(&self, key: &str) -> String {
        if self.place.is_empty() { key.to_owned() } else { format!("{}.{key}", self.place) }
    }
}

/// A value for a message: itself when it is short, else its type, so that a message stays a line.
fn shown(value: &Value) -> String {
    match value {
        Value::Array(_) => "an array".to_owned(),
        Value::Object(_) => "an object".to_owned(),
        Value::String(text) => format!("{text:.40?}"),
        Value::Null | Value::Bool(_) | Value::Number(_) => value.to_string(),
    }
}
