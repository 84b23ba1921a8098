//! What can be wrong with a configuration, always told in one line: file, key, value, what is
//! allowed.
//!
//! A [`Place`] is a key in the file; it reads the value there or makes the error that names it.

use std::fmt;
use std::io;
use std::ops::{Range, RangeInclusive};

use toml::de::{DeTable, DeValue};

use super::file::RawValue;
use super::quantity::Quantity;

/// Why a configuration cannot be used. `Display` gives one line.
#[derive(Debug)]
pub enum ConfigError {
    /// The file could not be read.
    Read {
        /// The file, as it was named.
        file: String,
        /// What the operating system said.
        source: io::Error,
    },
    /// The file says something that cannot be.
    Invalid {
        /// The file, as it was named.
        file: String,
        /// The key, such as `bands[0].dwell`, or the line and column, or both.
        place: String,
        /// What was found there and what is allowed.
        message: String,
    },
}

impl fmt::Display for ConfigError {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        match self {
            ConfigError::Read { file, source } => write!(f, "{file}: cannot be read: {source}"),
            ConfigError::Invalid { file, place, message } => {
                write!(f, "{file}: {place}: {message}")
            }
        }
    }
}

impl std::error::Error for ConfigError {
    fn source(&self) -> Option<&(dyn std::error::Error + 'static)> {
        match self {
            ConfigError::Read { source, .. } => Some(source),
            ConfigError::Invalid { .. } => None,
        }
    }
}

impl ConfigError {
    /// The error for text that is no TOML, or TOML of another shape than the file's.
    pub(super) fn from_toml(file: &str, text: &str, error: &toml::de::Error) -> ConfigError {
        let span = error.span().unwrap_or(0..0);
        let before: Vec<char> = text
            .char_indices()
            .take_while(|(index, _)| *index < span.start)
            .map(|(_, c)| c)
            .collect();
        let line = before.iter().filter(|c| **c == '\n').count() + 1;
        let column = before.iter().rev().take_while(|c| **c != '\n').count() + 1;
        // A file that is TOML has a key at the place of the error; one that is not has none.
        let key = DeTable::parse(text).ok().and_then(|table| key_at(table.get_ref(), &span));
        let position = format!("line {line}, column {column}");
        let place = match key {
            Some(key) => format!("{key} ({position})"),
            None => position,
        };
        // The reader of a configuration knows tables, lists and keys.
        let message = error
            .message()
            .replace("unknown field", "unknown key")
            .replace("invalid type: map", "invalid type: table")
            .replace("expected a sequence", "expected a list")
            .replace(char::is_control, " ");
        ConfigError::Invalid { file: file.to_owned(), place, message }
    }
}

/// The innermost key whose name or value covers `span`, such as `bands[0].dwell`.
fn key_at(table: &DeTable<'_>, span: &Range<usize>) -> Option<String> {
    let covers = |outer: Range<usize>| outer.start <= span.start && span.end <= outer.end;
    // Tables first: the span of a table is its header only, so its inside is always searched.
    let inside = table.iter().find_map(|(name, value)| {
        key_inside(value.get_ref(), span)
            .map(|rest| format!("{}{rest}", name.get_ref().escape_debug()))
    });
    inside.or_else(|| {
        table
            .iter()
            .find(|(name, value)| covers(name.span()) || covers(value.span()))
            .map(|(name, _)| name.get_ref().escape_debug().to_string())
    })
}

/// The rest of a key below `value`, such as `[0].dwell` or `.dwell`.
fn key_inside(value: &DeValue<'_>, span: &Range<usize>) -> Option<String> {
    match value {
        DeValue::Table(table) => key_at(table, span).map(|key| format!(".{key}")),
        DeValue::Array(values) => values.iter().enumerate().find_map(|(index, value)| {
            key_inside(value.get_ref(), span).map(|rest| format!("[{index}]{rest}"))
        }),
        _ => None,
    }
}

/// A key in a file.
#[derive(Clone, Debug, PartialEq, Eq)]
pub(super) struct Place<'a> {
    file: &'a str,
    key: String,
}

impl<'a> Place<'a> {
    /// A key, given in full.
    pub(super) fn new(file: &'a str, key: impl Into<String>) -> Place<'a> {
        Place { file, key: key.into() }
    }

    /// The key below this one.
    pub(super) fn at(&self, name: &str) -> Place<'a> {
        Place { file: self.file, key: format!("{}.{name}", self.key) }
    }

    /// The item of this list.
    pub(super) fn index(&self, index: usize) -> Place<'a> {
        Place { file: self.file, key: format!("{}[{index}]", self.key) }
    }

    /// The key in full.
    pub(super) fn key(&self) -> &str {
        &self.key
    }

    /// The error that names this key.
    pub(super) fn error(&self, message: impl fmt::Display) -> ConfigError {
        ConfigError::Invalid {
            file: self.file.to_owned(),
            place: self.key.clone(),
            message: message.to_string(),
        }
    }

    /// The value, or the error that it is missing.
    pub(super) fn required<T>(&self, value: Option<T>, wanted: &str) -> Result<T, ConfigError> {
        value.ok_or_else(|| self.error(format_args!("missing: give {wanted}")))
    }

    /// A quantity in a range, both ends allowed; `None` where the key is absent.
    pub(super) fn quantity(
        &self,
        quantity: Quantity,
        value: &Option<RawValue>,
        range: RangeInclusive<f64>,
    ) -> Result<Option<f64>, ConfigError> {
        let Some(value) = value else { return Ok(None) };
        let parsed = quantity.parse_in(&value.text, range);
        let parsed = parsed.map_err(|mut error| {
            error.given = value.to_string();
            self.error(error)
        })?;
        Ok(Some(parsed))
    }

    /// A quantity in a range that must be given.
    pub(super) fn required_quantity(
        &self,
        quantity: Quantity,
        value: &Option<RawValue>,
        range: RangeInclusive<f64>,
    ) -> Result<f64, ConfigError> {
        let wanted =
            format!("{} to {}", quantity.format(*range.start()), { quantity.format(*range.end()) });
        let value = self.quantity(quantity, value, range)?;
        self.required(value, &wanted)
    }

    /// A whole number in a range, both ends allowed; `None` where the key is absent.
    pub(super) fn whole_number(
        &self,
        value: &Option<RawValue>,
        range: RangeInclusive<usize>,
    ) -> Result<Option<usize>, ConfigError> {
        let Some(value) = value else { return Ok(None) };
        let (low, high) = (range.start(), range.end());
        let shown = value.to_string();
        let Ok(number) = shown.parse::<i64>() else {
            return Err(self.error(format_args!("{shown} is not a whole number ({low} to {high})")));
        };
        let in_range = usize::try_from(number).ok().filter(|number| range.contains(number));
        let out_of_range = || self.error(format_args!("{shown} is out of range ({low} to {high})"));
        in_range.ok_or_else(out_of_range).map(Some)
    }

    /// One of a few words; `None` where the key is absent.
    pub(super) fn word<T: Copy>(
        &self,
        value: &Option<String>,
        words: &[(&str, T)],
    ) -> Result<Option<T>, ConfigError> {
        let Some(given) = value else { return Ok(None) };
        let found = words.iter().find(|(word, _)| word == given).map(|(_, meaning)| *meaning);
        let names: Vec<String> = words.iter().map(|(word, _)| format!("{word:?}")).collect();
        let unknown = || self.error(format_args!("{given:?} is not one of {}", names.join(", ")));
        found.ok_or_else(unknown).map(Some)
    }

    /// A name that can stand in an address and in a file name, of at most `limit` characters. It
    /// begins with a letter or a digit, so that it is never a hidden file, a folder or an option.
    pub(super) fn name(&self, value: &Option<String>, limit: usize) -> Result<String, ConfigError> {
        let wanted = format!("1 to {limit} letters, digits, - _ and ., a letter or digit first");
        let name = self.required(value.as_ref(), &wanted)?;
        let allowed = |c: char| c.is_ascii_alphanumeric() || matches!(c, '-' | '_' | '.');
        let begins_well = name.starts_with(|c: char| c.is_ascii_alphanumeric());
        if !begins_well || name.len() > limit || !name.chars().all(allowed) {
            return Err(self.error(format_args!("{name:?} is not a name ({wanted})")));
        }
        Ok(name.clone())
    }
}
