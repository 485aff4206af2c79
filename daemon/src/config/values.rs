//! Numbers, quantities, places and instants of a [`Section`].

use std::time::Duration;

use borewake_model::ground::Point;
use borewake_model::units::{Dimension, UnitSystem};
use toml::Spanned;
use toml::de::DeValue;

use super::section::{At, Section, type_name};
use crate::record::Stamp;

/// What a number must be beside being one.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) enum Sign {
    Any,
    NotNegative,
    Positive,
}

impl Sign {
    /// What is wrong with a number, if anything.
    fn wrong(self, value: f64) -> Option<&'static str> {
        match self {
            Self::Positive if value <= 0.0 => Some("must be more than zero"),
            Self::NotNegative if value < 0.0 => Some("must not be negative"),
            _ => None,
        }
    }
}

impl Section<'_> {
    /// A quantity in SI.
    pub(super) fn quantity(
        &mut self,
        key: &'static str,
        dimension: Dimension,
        sign: Sign,
    ) -> Option<At<f64>> {
        let found = self.take(key)?;
        self.quantity_of(key, found, dimension, sign)
    }

    /// The same for one item of a list.
    pub(super) fn quantity_of(
        &self,
        key: &str,
        found: &Spanned<DeValue<'_>>,
        dimension: Dimension,
        sign: Sign,
    ) -> Option<At<f64>> {
        let text = match found.get_ref() {
            DeValue::String(text) => text.to_string(),
            other => match plain_number(other) {
                Some(number) => number,
                None => {
                    let mend = format!("write \"{}\"", dimension.example());
                    self.due(key, found, "a quantity", &mend);
                    return None;
                }
            },
        };
        match dimension.parse(&text) {
            Err(wrong) => {
                let key = self.key(key);
                self.report
                    .value(&found.span(), key, wrong.what(), wrong.mend());
                None
            }
            Ok(value) => {
                let at = At {
                    value,
                    span: found.span(),
                };
                if let Some(what) = sign.wrong(value) {
                    let what = format!("a {} here {what}", dimension.name());
                    self.wrong(
                        key,
                        &at,
                        what,
                        format!("such as \"{}\"", dimension.example()),
                    );
                    return None;
                }
                Some(at)
            }
        }
    }

    /// A time within bounds, both included.
    pub(super) fn duration(
        &mut self,
        key: &'static str,
        least: Duration,
        most: Duration,
    ) -> Option<At<Duration>> {
        let at = self.quantity(key, Dimension::Time, Sign::NotNegative)?;
        let value = Duration::try_from_secs_f64(at.value).unwrap_or(Duration::MAX);
        let at_time = At {
            value,
            span: at.span,
        };
        if (least..=most).contains(&value) {
            return Some(at_time);
        }
        let what = format!("it must lie between {} and {}", shown(least), shown(most));
        self.wrong(key, &at_time, what, "choose a time between them");
        None
    }

    /// A bare number.
    pub(super) fn truth(&mut self, key: &'static str) -> Option<At<bool>> {
        let found = self.take(key)?;
        let value = found.get_ref().as_bool();
        if value.is_none() {
            self.due(key, found, "true or false", "write it bare, without quotes");
        }
        Some(At {
            value: value?,
            span: found.span(),
        })
    }

    pub(super) fn number(&mut self, key: &'static str) -> Option<At<f64>> {
        let found = self.take(key)?;
        let value = plain_number(found.get_ref()).and_then(|n| n.parse().ok());
        match value {
            Some(value) if f64::is_finite(value) => Some(At {
                value,
                span: found.span(),
            }),
            _ => {
                self.due(
                    key,
                    found,
                    "a finite number",
                    "write it bare, without quotes or unit",
                );
                None
            }
        }
    }

    /// A whole number within bounds, both included.
    pub(super) fn whole_number<T: TryFrom<i64>>(
        &mut self,
        key: &'static str,
        least: i64,
        most: i64,
    ) -> Option<At<T>> {
        let found = self.take(key)?;
        let number = found
            .get_ref()
            .as_integer()
            .and_then(|n| i64::from_str_radix(n.as_str(), n.radix()).ok())
            .filter(|n| (least..=most).contains(n))
            .and_then(|n| T::try_from(n).ok());
        match number {
            Some(value) => Some(At {
                value,
                span: found.span(),
            }),
            None => {
                let what = format!("a whole number from {least} to {most} is due");
                let key = self.key(key);
                self.report
                    .value(&found.span(), key, what, "write it bare, without quotes");
                None
            }
        }
    }

    /// A place on the map.
    pub(super) fn point(&mut self, key: &'static str) -> Option<At<Point>> {
        let found = self.take(key)?;
        self.point_of(key, found)
    }

    fn point_of(&self, key: &str, found: &Spanned<DeValue<'_>>) -> Option<At<Point>> {
        let mend = "write [\"310 m\", \"-480 m\"]: east, then north, of the local origin";
        match found.get_ref().as_array().map(|a| a.as_ref()) {
            Some([east, north]) => {
                let east = self.quantity_of(key, east, Dimension::Length, Sign::Any);
                let north = self.quantity_of(key, north, Dimension::Length, Sign::Any);
                Some(At {
                    value: [east?.value, north?.value],
                    span: found.span(),
                })
            }
            _ => {
                let key = self.key(key);
                self.report
                    .value(&found.span(), key, "a place is a pair of lengths", mend);
                None
            }
        }
    }

    /// A line on the map, of at least two points.
    pub(super) fn line(&mut self, key: &'static str) -> Option<At<Vec<Point>>> {
        let found = self.take(key)?;
        let points = found.get_ref().as_array().filter(|a| a.len() >= 2);
        let Some(points) = points else {
            let mend = "write [[\"0 m\", \"0 m\"], [\"1 km\", \"2 km\"]]";
            let key = self.key(key);
            self.report
                .value(&found.span(), key, "a line has at least two places", mend);
            return None;
        };
        let points: Vec<_> = points.iter().map(|p| self.point_of(key, p)).collect();
        let line: Option<Vec<Point>> = points.into_iter().map(|p| p.map(|p| p.value)).collect();
        Some(At {
            value: line?,
            span: found.span(),
        })
    }

    /// An instant: RFC 3339, or a date, which is its midnight in UTC.
    pub(super) fn stamp(&mut self, key: &'static str) -> Option<At<Stamp>> {
        let found = self.take(key)?;
        let text = match found.get_ref() {
            DeValue::String(text) => text.to_string(),
            DeValue::Datetime(instant) => instant.to_string(),
            other => {
                let what = format!("an instant is due, and this is {}", type_name(other));
                let key = self.key(key);
                self.report
                    .value(&found.span(), key, what, "write \"2029-01-01\"");
                return None;
            }
        };
        let midnight = || Stamp::parse(&format!("{text}T00:00:00Z"));
        match Stamp::parse(&text).or_else(|_| midnight()) {
            Ok(value) => Some(At {
                value,
                span: found.span(),
            }),
            Err(_) => {
                let key = self.key(key);
                let mend = "write \"2029-01-01\" or \"2029-01-01T06:00:00+01:00\"";
                self.report
                    .value(&found.span(), key, "this is no instant", mend);
                None
            }
        }
    }
}

/// A bare number in the spelling Rust reads.
pub(super) fn plain_number(value: &DeValue<'_>) -> Option<String> {
    match value {
        DeValue::Integer(n) => i64::from_str_radix(n.as_str(), n.radix())
            .ok()
            .map(|n| n.to_string()),
        DeValue::Float(n) => Some(n.as_str().to_owned()),
        _ => None,
    }
}

/// A time for messages.
fn shown(time: Duration) -> String {
    UnitSystem::Metric.show(Dimension::Time, time.as_secs_f64())
}
