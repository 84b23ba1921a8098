//! Query strings, read strictly: a key that is unknown, or given twice, is an error, not a guess.

use std::str::FromStr;

use axum::extract::Query;
use axum::http::Uri;

use super::figures;
use super::problem::Problem;
use crate::detection::plan::Plan;
use crate::detection::time::Utc;

/// The decoded pairs of one query string.
pub(super) struct Parameters(Vec<(String, String)>);

impl Parameters {
    /// Reads the query string of `uri`.
    ///
    /// # Errors
    /// If it holds a key that is not in `allowed`.
    pub(super) fn read(uri: &Uri, allowed: &[&str]) -> Result<Parameters, Problem> {
        let Query(pairs) = Query::<Vec<(String, String)>>::try_from_uri(uri)
            .map_err(|_rejection| Problem::bad_query())?;
        match pairs.iter().find(|(key, _)| !allowed.contains(&key.as_str())) {
            Some((key, _)) => Err(Problem::unknown_key(key, allowed)),
            None => Ok(Parameters(pairs)),
        }
    }

    /// Every value of `key`, in the order given.
    pub(super) fn all<'a>(&'a self, key: &'a str) -> impl Iterator<Item = &'a str> {
        self.0.iter().filter(move |(name, _)| name == key).map(|(_, value)| value.as_str())
    }

    /// The value of `key`, if there is one.
    ///
    /// # Errors
    /// If it was given more than once.
    pub(super) fn one<'a>(&'a self, key: &'a str) -> Result<Option<&'a str>, Problem> {
        let mut values = self.all(key);
        match (values.next(), values.next()) {
            (value, None) => Ok(value),
            (_, Some(_)) => Err(Problem::repeated_key(key)),
        }
    }

    /// The value of `key` as a number that `accept` takes; `allowed` puts that condition in words.
    ///
    /// # Errors
    /// If it was given more than once, is no number, or is not accepted.
    pub(super) fn number<T: FromStr>(
        &self,
        key: &str,
        accept: impl Fn(&T) -> bool,
        allowed: &str,
    ) -> Result<Option<T>, Problem> {
        let Some(text) = self.one(key)? else { return Ok(None) };
        match text.parse().ok().filter(accept) {
            Some(value) => Ok(Some(value)),
            None => Err(Problem::bad_value(key, text, allowed)),
        }
    }

    /// The value of `key` as a moment.
    ///
    /// # Errors
    /// If it was given more than once or is no RFC 3339 time.
    pub(super) fn moment(&self, key: &str) -> Result<Option<Utc>, Problem> {
        let Some(text) = self.one(key)? else { return Ok(None) };
        match figures::parse_moment(text) {
            Some(utc) => Ok(Some(utc)),
            None => Err(Problem::bad_value(
                key,
                text,
                "a time in RFC 3339 such as 2026-03-01T06:00:00Z, years 1970 to 2261, with the + \
                 of an offset written as %2B",
            )),
        }
    }
}

/// The index of the channel that a query key names.
///
/// # Errors
/// If the plan has no channel of that name.
pub(super) fn channel_index(plan: &Plan, key: &str, id: &str) -> Result<usize, Problem> {
    plan.channels.iter().position(|channel| channel.id == id).ok_or_else(|| {
        Problem::bad_value(key, id, "the id of a channel of the plan, as listed by /v1/channels")
    })
}
