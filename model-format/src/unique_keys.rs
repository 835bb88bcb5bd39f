//! A first look at a JSON text, before anything is made of it: how many values it has, and
//! whether an object has a key twice.
//!
//! Canonical JSON (RFC 8785) needs keys that stand once, while most JSON readers silently keep the
//! last of several: two readers could then score differently under one fingerprint.

use std::collections::HashSet;
use std::fmt;

use serde::de::{DeserializeSeed, Deserializer, Error, MapAccess, SeqAccess, Visitor};

use crate::cells::shorten;
use crate::fingerprint::ModelFileError;
use crate::limits::LARGEST_VALUES;

/// Reads through a JSON text without keeping it.
///
/// # Errors
/// [`ModelFileError::Json`] for a text that is no JSON, [`ModelFileError::DuplicateKey`] with the
/// place of the first key that stands twice, [`ModelFileError::TooManyValues`].
pub(crate) fn check_text(text: &str) -> Result<(), ModelFileError> {
    let mut walk = Walk::default();
    let mut source = serde_json::Deserializer::from_str(text);
    let read = Seed { walk: &mut walk }.deserialize(&mut source).and_then(|()| source.end());
    match (walk.problem, read) {
        (Some(problem), _) => Err(problem),
        (None, read) => Ok(read?),
    }
}

#[derive(Default)]
struct Walk {
    /// Keys and positions that lead to the current value.
    path: Vec<Step>,
    values: usize,
    problem: Option<ModelFileError>,
}

enum Step {
    Key(String),
    Position(usize),
}

impl Walk {
    /// Ends the walk.
    fn stop<E: Error>(&mut self, problem: ModelFileError) -> E {
        let message = E::custom(&problem);
        self.problem = Some(problem);
        message
    }

    /// The place of the current value, such as `fields[2].levels`.
    fn place(&self) -> String {
        let step = |step: &Step| match step {
            Step::Key(key) => format!(".{}", shorten(key)),
            Step::Position(position) => format!("[{position}]"),
        };
        self.path.iter().map(step).collect::<String>().trim_start_matches('.').to_owned()
    }
}

/// Any one value.
struct Seed<'a> {
    walk: &'a mut Walk,
}

impl<'de> DeserializeSeed<'de> for Seed<'_> {
    type Value = ();
    fn deserialize<D: Deserializer<'de>>(self, source: D) -> Result<(), D::Error> {
        self.walk.values += 1;
        if self.walk.values > LARGEST_VALUES {
            return Err(self.walk.stop(ModelFileError::TooManyValues));
        }
        source.deserialize_any(self)
    }
}

impl<'de> Visitor<'de> for Seed<'_> {
    type Value = ();

    fn expecting(&self, f: &mut fmt::Formatter) -> fmt::Result {
        f.write_str("a JSON value")
    }

    fn visit_map<A: MapAccess<'de>>(self, mut map: A) -> Result<(), A::Error> {
        let mut seen = HashSet::new();
        while let Some(key) = map.next_key::<String>()? {
            let stands_twice = !seen.insert(key.clone());
            self.walk.path.push(Step::Key(key));
            if stands_twice {
                let place = self.walk.place();
                return Err(self.walk.stop(ModelFileError::DuplicateKey { place }));
            }
            map.next_value_seed(Seed { walk: self.walk })?;
            self.walk.path.pop();
        }
        Ok(())
    }

    fn visit_seq<A: SeqAccess<'de>>(self, mut elements: A) -> Result<(), A::Error> {
        for position in 0.. {
            self.walk.path.push(Step::Position(position));
            if elements.next_element_seed(Seed { walk: self.walk })?.is_none() {
                break;
            }
            self.walk.path.pop();
        }
        self.walk.path.pop();
        Ok(())
    }

    fn visit_unit<E>(self) -> Result<(), E> {
        Ok(())
    }

    fn visit_bool<E>(self, _: bool) -> Result<(), E> {
        Ok(())
    }

    fn visit_i64<E>(self, _: i64) -> Result<(), E> {
        Ok(())
    }

    fn visit_u64<E>(self, _: u64) -> Result<(), E> {
        Ok(())
    }

    fn visit_f64<E>(self, _: f64) -> Result<(), E> {
        Ok(())
    }

    fn visit_str<E>(self, _: &str) -> Result<(), E> {
        Ok(())
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_first_key_that_stands_twice_is_named_with_its_place() {
        for (text, place) in [
            (r#"{"a": 1, "a": 1}"#, "a"),
            (r#"{"a": [{"b": 1}, {"b": {"c": 1, "d": 2, "c": 3}}]}"#, "a[1].b.c"),
            (r#"[[], [1, {"x": 0, "\u0078": 0}]]"#, "[1][1].x"),
            (r#"{"": 1, "": 2}"#, ""),
        ] {
            let Err(ModelFileError::DuplicateKey { place: found }) = check_text(text) else {
                panic!("{text} has a key twice")
            };
            assert_eq!(found, place, "{text}");
        }
    }

    #[test]
    fn the_same_key_may_stand_in_different_objects() {
        check_text(r#"{"a": {"a": [{"a": 1}, {"a": 2}]}, "b": [null, true, -1, 2.5, "a"]}"#).unwrap();
    }

    #[test]
    fn the_text_ends_after_one_value() {
        assert!(matches!(check_text("{} {}"), Err(ModelFileError::Json(_))));
    }
}
